"""Bit work against the RISC-V specification's own algorithms and against zlib and binascii."""

from __future__ import annotations

import binascii
import random
import zlib
from typing import cast

import pytest

from .exact import binary, fold
from .shipped import Model, by_value, check, covered, operation

FRAMES = [b"123456789", b"", b"\0", b"\xff" * 32, *(random.Random(n).randbytes(n) for n in (1, 4, 7, 60, 256, 1500))]


def cut(a: int, n: int, m: int) -> str:
    """The bits of field n, m, highest first, without those above bit 31."""
    text = binary(a)[::-1]
    return text[n : n + (m or 32)][::-1]


def inserted(acc: int, b: int, n: int, m: int) -> int:
    text, new = list(binary(acc)[::-1]), binary(b)[::-1]
    for k in range(m or 32):
        if n + k < 32:
            text[n + k] = new[k]
    return int("".join(text[::-1]), 2)


def carryless(a: int, b: int) -> int:
    """RISC-V unprivileged ISA, extension Zbc: exclusive or of a << i for every bit i of b that is set."""
    output = 0
    for i in range(32):
        if (b >> i) & 1:
            output ^= a << i
    return output


def remainder(register: int, data: bytes, polynomial: int) -> int:
    """A reflected CRC as long division of bits, low bit first."""
    for byte in data:
        for k in range(8):
            out = (register ^ byte >> k) & 1
            register = register >> 1 ^ polynomial * out
    return register


def remainder_high(register: int, data: bytes, polynomial: int) -> int:
    """A 16-bit CRC as long division of bits, high bit first."""
    for byte in data:
        for k in reversed(range(8)):
            out = (register >> 15 ^ byte >> k) & 1
            register = (register << 1 & 0xFFFF) ^ polynomial * out
    return register


def word(a: int) -> bytes:
    return a.to_bytes(4, "little")


MODELS: dict[str, Model] = {
    "bset": lambda a, b: inserted(a, 1, b % 32, 1),
    "bclr": lambda a, b: inserted(a, 0, b % 32, 1),
    "binv": lambda a, b: inserted(a, 1 - int(cut(a, b % 32, 1)), b % 32, 1),
    "bext": lambda a, b: int(cut(a, b % 32, 1)),
    "field": lambda a, n, m: fold(int(cut(a, n, m), 2), len(cut(a, n, m))),
    "fieldu": lambda a, n, m: int(cut(a, n, m), 2),
    "insert": inserted,
    "mask": lambda a: int("0" + "1" * min(a, 32), 2),
    "merge": lambda m, a, b: int("".join((z, y)[int(x)] for x, y, z in zip(*map(binary, (m, a, b)), strict=True)), 2),
    "funnel": lambda a, b, c: int((binary(a) + binary(b))[32 - c % 32 : 64 - c % 32], 2),
    "reverse": lambda a: int(binary(a)[::-1], 2),
    "reverse.low": lambda a, b: int("0" + binary(a)[::-1][: b % 32], 2),
    "brev8": lambda a: tuple(int(binary(x, 8)[::-1], 2) for x in a),
    "zip": lambda a: int("".join(x + y for x, y in zip(binary(a)[:16], binary(a)[16:], strict=True)), 2),
    "unzip": lambda a: int(binary(a)[0::2] + binary(a)[1::2], 2),
    "xperm8": lambda a, b: tuple((*a, *[0] * 252)[x] for x in b),
    "parity": lambda a: binary(a).count("1") % 2,
    "cpop.h2": lambda a: tuple(binary(x, 16).count("1") for x in a),
    "cpop.b4": lambda a: tuple(binary(x, 8).count("1") for x in a),
    "clmul": lambda a, b: carryless(a, b) % 2**32,
    "clmulh": lambda a, b: carryless(a, b) // 2**32,
    "clmulr": lambda a, b: carryless(a, b) // 2**31 % 2**32,
    "crc.byte": lambda acc, a, p: remainder(acc, word(a)[:1], p),
    "crc32.byte": lambda acc, a: zlib.crc32(word(a)[:1], acc ^ 0xFFFFFFFF) ^ 0xFFFFFFFF,
    "crc32.word": lambda acc, a: zlib.crc32(word(a), acc ^ 0xFFFFFFFF) ^ 0xFFFFFFFF,
    "crc32c.byte": lambda acc, a: remainder(acc, word(a)[:1], 0x82F63B78),
    "crc32c.word": lambda acc, a: remainder(acc, word(a), 0x82F63B78),
    "crc16.byte": lambda acc, a: binascii.crc_hqx(word(a)[:1], acc),
    "crc16r.byte": lambda acc, a: remainder(acc, word(a)[:1], 0xA001),
}


def test_every_operation_has_a_model() -> None:
    covered(MODELS, "bits")


@pytest.mark.parametrize("name", MODELS)
def test_model(name: str) -> None:
    check(name, MODELS[name])


def through(name: str, start: int, data: list[int], *more: int) -> int:
    """A CRC register after all of ``data``."""
    step = cast("Model", operation(name).compiled())
    for value in data:
        start = step(start, value, *more)
    return start


def in_words(frame: bytes) -> tuple[list[int], list[int]]:
    """The whole words of a frame, least significant byte first, and the bytes left over."""
    whole = len(frame) // 4 * 4
    return [int.from_bytes(frame[k : k + 4], "little") for k in range(0, whole, 4)], list(frame[whole:])


CHECKS = {
    "crc32.byte": (0xFFFFFFFF, 0xFFFFFFFF, 0xCBF43926),
    "crc32c.byte": (0xFFFFFFFF, 0xFFFFFFFF, 0xE3069283),
    "crc16.byte": (0, 0, 0x31C3),
    "crc16r.byte": (0xFFFF, 0, 0x4B37),
}
"""Start, last inversion, and the published check value of "123456789": CRC-32 (IEEE 802.3), CRC-32C (RFC 3720),
CRC-16 of ITU-T V.41 started with 0, CRC-16 of Modbus over serial line (V1.02). The values as listed in Greg Cook's
catalogue of parametrised CRC algorithms, from memory."""


@pytest.mark.parametrize("name", CHECKS)
def test_published_check_value(name: str) -> None:
    start, inversion, want = CHECKS[name]
    assert through(name, start, list(b"123456789")) ^ inversion == want


def test_crc32c_of_the_published_frames() -> None:
    """RFC 3720, appendix B.4: CRC-32C of 32 bytes of zeros, of ones, ascending, descending."""
    for frame, want in (
        (bytes(32), 0x8A9136AA),
        (b"\xff" * 32, 0x62A8AB43),
        (bytes(range(32)), 0x46DD794E),
        (bytes(reversed(range(32))), 0x113FDB5C),
    ):
        assert through("crc32c.byte", 0xFFFFFFFF, list(frame)) ^ 0xFFFFFFFF == want
        assert through("crc32c.word", 0xFFFFFFFF, in_words(frame)[0]) ^ 0xFFFFFFFF == want


@pytest.mark.parametrize("frame", FRAMES, ids=lambda frame: f"{len(frame)}-bytes")
def test_crc32_of_frames_by_every_way_is_zlibs(frame: bytes) -> None:
    """zlib.crc32, by bytes, by words with the rest by bytes, by the general step, and by carry-less products."""
    want = zlib.crc32(frame)
    assert through("crc32.byte", 0xFFFFFFFF, list(frame)) ^ 0xFFFFFFFF == want
    assert through("crc.byte", 0xFFFFFFFF, list(frame), 0xEDB88320) ^ 0xFFFFFFFF == want
    words, rest = in_words(frame)
    register = through("crc32.word", 0xFFFFFFFF, words)
    assert through("crc32.byte", register, rest) ^ 0xFFFFFFFF == want
    assert by_products(frame) == want


def by_products(frame: bytes) -> int:
    """CRC-32 a word at a time by Barrett's reduction: the quotient by a product with mu = x**64 / P, then one with P.

    From memory of the literature on CRCs by carry-less products (published 2009). All is bit-reflected, so the quotient
    is the low half of the first product and the remainder the high half of the second; bit 32 of P is its x**0.
    """
    low, high = (cast("Model", operation(name).compiled()) for name in ("clmul", "clmulh"))
    register = 0xFFFFFFFF
    words, rest = in_words(frame)
    for value in words:
        quotient = low(register ^ value, MU & 0xFFFFFFFF)
        register = high(quotient, P & 0xFFFFFFFF) ^ quotient
    return through("crc32.byte", register, rest) ^ 0xFFFFFFFF


def reflected(x: int, bits: int) -> int:
    return int(binary(x, bits)[::-1], 2)


def long_division(dividend: int, divisor: int) -> int:
    """Quotient of polynomials over GF(2)."""
    quotient = 0
    while dividend.bit_length() >= divisor.bit_length():
        shift = dividend.bit_length() - divisor.bit_length()
        quotient |= 1 << shift
        dividend ^= divisor << shift
    return quotient


P = reflected(0x104C11DB7, 33)
MU = reflected(long_division(1 << 64, 0x104C11DB7), 33)


def test_zbb_and_zbkb_reversals_together_reverse_a_word() -> None:
    """RISC-V unprivileged ISA, Zbkb: brev8 of rev8 reverses all bits."""
    chance = random.Random(3)
    for _ in range(200):
        a = chance.getrandbits(32)
        swapped = by_value("rev8")(tuple(word(a)))
        turned = by_value("brev8")(swapped)
        assert int.from_bytes(bytes(cast("tuple[int, ...]", turned)), "little") == by_value("reverse")(a)
        assert by_value("unzip")(by_value("zip")(a)) == a
