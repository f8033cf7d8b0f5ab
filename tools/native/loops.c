/* The loops of the benchmark, written by hand: the same results in flight across the same beats, nothing checked and
   nothing counted but the stalls that depend on data. Registers come and go in r, by their number in cluster g; those of
   cluster h stand 32 behind. */
#include <stdint.h>
#include <string.h>

typedef uint32_t u32;

static inline u32 word(const uint8_t *m, u32 at) { u32 v; memcpy(&v, m + at, 4); return v; }
static inline u32 ring(u32 at, u32 step, u32 n) { return (at & ~(n - 1)) | ((at + step) & (n - 1)); }

/* bench_loop: one bundle; load 5, multiply 2, branch 6 */
uint64_t one_bundle(uint8_t *m, u32 *r) {
    u32 a = r[10], b = r[42], n = r[20], k = 3, l = 5, s = 0, t = 0, e = 0;
    u32 g2 = 0, h2 = 0, g4 = 0, h4 = 0, p = 0, q = 0;
    u32 x0 = 0, x1 = 0, x2 = 0, x3 = 0, y0 = 0, y1 = 0, y2 = 0, y3 = 0;
    int t0 = 0, t1 = 0, t2 = 0, t3 = 0, t4 = 0;
    uint64_t bank = 0;
    t0 = n != 0; n -= t0; t1 = n != 0; n -= t1; t2 = n != 0; n -= t2; t3 = n != 0; n -= t3; t4 = n != 0; n -= t4;
    int last = n != 0; n -= last;
    /* six counts stand before the loop; the first lands as the loop begins, and either way it does */
    t0 = t1; t1 = t2; t2 = t3; t3 = t4; t4 = last;
    for (;;) {
        u32 x4 = word(m, a), y4 = word(m, b);
        bank += ((a >> 2 ^ b >> 2) & 7) == 0;
        u32 np = g2 * k, nq = h2 * l;
        s += g4; t += h4; e ^= h2;
        a = ring(a, 4, 4096); b = ring(b, 4, 4096);
        int on = n != 0; n -= on;
        int go = t0;
        t0 = t1; t1 = t2; t2 = t3; t3 = t4; t4 = on;
        g4 = p; h4 = q; p = np; q = nq;
        g2 = x0; x0 = x1; x1 = x2; x2 = x3; x3 = x4;
        h2 = y0; y0 = y1; y1 = y2; y2 = y3; y3 = y4;
        if (!go) break;
    }
    r[6] = s; r[38] = t; r[40] = e;
    return bank;
}

uint64_t recurrence(uint8_t *m, u32 *r) {
    u32 a = r[10], b = r[34], n = r[20], y = 1, e = 0, k = 13;
    uint64_t bank = 0;
    for (;;) {
        u32 x = word(m, a), z = word(m, b);
        bank += ((a >> 2 ^ b >> 2) & 3) == 0;
        y = (u32)((int32_t)(y * k + x) >> 1);
        e = (e ^ z) + 7;
        a = ring(a, 4, 1024); b = ring(b, 4, 1024);
        int on = n != 0; n -= on;
        if (!on) break;
    }
    r[6] = y; r[30] = e;
    return bank;
}

uint64_t bytewise(uint8_t *m, u32 *r) {
    u32 a = r[10], n = r[20], c = 0xFFFFFFFFu, byte = m[a];
    a = ring(a, 1, 1024);
    for (;;) {
        c ^= byte;
        byte = m[a];
        a = ring(a, 1, 1024);
        for (int k = 0; k < 8; k++) c = c >> 1 ^ (c & 1 ? 0xEDB88320u : 0);
        int on = n != 0; n -= on;
        if (!on) break;
    }
    r[4] = c;
    return 0;
}

uint64_t divider(uint8_t *m, u32 *r) {
    u32 a = r[10], n = r[20];
    float by, quotient = 0, total = 0;
    memcpy(&by, &r[3], 4);
    for (;;) {
        u32 bits = __builtin_bswap32(word(m, a));
        float x;
        memcpy(&x, &bits, 4);
        total += quotient;
        quotient = x / by;
        a = ring(a, 4, 1024);
        int on = n != 0; n -= on;
        if (!on) break;
    }
    memcpy(&r[6], &total, 4);
    return 0;
}

uint64_t conflicts(uint8_t *m, u32 *r) {
    u32 a = r[10], b = r[11], n = r[20], s = 0, e = 0;
    uint64_t stalls = 0;
    for (;;) {
        u32 x = word(m, a), y = word(m, b);
        stalls += ((a >> 2 ^ b >> 2) & 3) == 0 && a >> 2 != b >> 2;
        a = ring(a, 4, 1024); b = ring(b, 4, 1024);
        s += x; e ^= y;
        int on = n != 0; n -= on;
        if (!on) break;
    }
    r[6] = s; r[7] = e;
    return stalls;
}
