"""RMS and crest factor of windows of 32 samples, in binary32 and in the kernel's order: equal bit for bit."""

import numpy as np


def multiply_add(a, b, c):
    """a b + c of float32 arrays, rounded once.

    The product is exact in binary64. The sum is rounded to odd there, which makes the second rounding harmless.
    Source: S. Boldo and G. Melquiond, Emulation of FMA and correctly rounded sums, IEEE Trans. Computers 57 (2008).
    """
    product, c = a.astype(np.float64) * b, c.astype(np.float64)
    total = product + c
    part = total - product
    error = (product - (total - part)) + (c - part)
    even = (total.view(np.int64) & 1) == 0
    odd = np.where((error != 0) & even, np.nextafter(total, np.copysign(np.inf, error)), total)
    return odd.astype(np.float32)


def crest(x):
    """rms and crest, float32 each, one a window."""
    windows = x.reshape(-1, 8, 4)
    sums = windows[:, 0] * windows[:, 0]
    for row in range(1, 8):
        sums = multiply_add(windows[:, row], windows[:, row], sums)
    mean = ((sums[:, 0] + sums[:, 1]) + (sums[:, 2] + sums[:, 3])) * np.float32(1 / 32)
    rms = np.sqrt(mean)
    peak = np.abs(windows).max(axis=(1, 2))
    return {"rms": rms, "crest": peak / np.maximum(rms, np.float32(2.0**-100))}


def cases(generated):
    """A gear with a damaged tooth, silence between noise, single knocks, tiny numbers, and the generated cases."""
    random = np.random.default_rng(41)
    time = np.arange(64 * 32)
    mesh = 2 * np.sin(2 * np.pi * 0.061 * time) + random.normal(0, 0.2, time.size)
    knock = 30 * np.exp(-(time % 512) / 6) * np.sin(2 * np.pi * 0.23 * (time % 512))
    yield "damaged-tooth", {"x": (mesh + knock).astype(np.float32)}
    noise = random.normal(0, 1, 6 * 32).astype(np.float32)
    noise[32:64] = 0
    noise[96:128] = -0.0
    yield "silence", {"x": noise}
    yield "knocks", {"x": np.eye(32, dtype=np.float32).ravel() * np.float32(-3)}
    for where in range(32):
        yield f"knock-at-{where}", {"x": -np.eye(1, 32, where, dtype=np.float32)[0]}
    yield "tiny", {"x": (random.normal(0, 1, 128) * 2.0**-80).astype(np.float32)}
    yield from generated
