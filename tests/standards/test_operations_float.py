"""Binary32 operations against NumPy's float32, exact fractions and the RISC-V specification's tables."""

from __future__ import annotations

import math
import random
import struct
from collections.abc import Callable
from fractions import Fraction
from typing import cast

import numpy as np
import pytest

from .exact import even
from .shipped import float_bits, names, operation

NAN = 0x7FC00000
SIGN = 0x80000000
MANY = 100_000

SPECIAL = [
    0x00000000, 0x00000001, 0x00000002, 0x00000003, 0x007FFFFF, 0x00800000, 0x00800001, 0x00FFFFFF, 0x01000000,
    0x1A800000, 0x2F800000, 0x30000000, 0x33800000, 0x33800001, 0x34000000, 0x37800000, 0x38400000, 0x3EFFFFFF,
    0x3F000000, 0x3F000001, 0x3F7FFFFF, 0x3F800000, 0x3F800001, 0x3FC00000, 0x40000000, 0x40200000, 0x40600000,
    0x4AFFFFFF, 0x4B000000, 0x4B000001, 0x4B7FFFFF, 0x4B800000, 0x4EFFFFFF, 0x4F000000, 0x4F7FFFFF, 0x4F800000,
    0x7E800000, 0x7F000000, 0x7F7FFFFE, 0x7F7FFFFF, 0x7F800000, 0x7F800001, 0x7FBFFFFF, 0x7FC00000, 0x7FC00001,
]  # fmt: skip
SPECIAL += [bits | SIGN for bits in SPECIAL]


def bits(count: int, seed: int) -> np.ndarray:
    """Binary32 patterns: a third uniform, a third of close exponents, a third special."""
    chance = np.random.default_rng(seed)
    made = chance.integers(0, 2**32, count, dtype=np.uint32)
    close = chance.integers(0x3D000000, 0x42000000, count, dtype=np.uint32)
    close |= chance.integers(0, 2, count, dtype=np.uint32) << 31
    special = chance.choice(np.array(SPECIAL, dtype=np.uint32), count)
    which = chance.integers(0, 3, count)
    return np.where(which == 0, made, np.where(which == 1, close, special)).astype(np.uint32)


def pairs(seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Every pair of special values, then random ones: MANY in all."""
    left, right = (grid.reshape(-1) for grid in np.meshgrid(*[np.array(SPECIAL, dtype=np.uint32)] * 2))
    rest = MANY - len(left)
    return np.concatenate([left, bits(rest, seed)]), np.concatenate([right, bits(rest, seed + 1)])


def canonical(numbers: np.ndarray) -> list[int]:
    """The bits, every NaN the canonical one."""
    assert numbers.dtype == np.float32
    return cast("list[int]", np.where(np.isnan(numbers), np.uint32(NAN), numbers.view(np.uint32)).tolist())


def results(name: str, *given: np.ndarray) -> list[object]:
    run = operation(name).compiled()
    return [run(*row) for row in zip(*(column.tolist() for column in given), strict=True)]


def same(name: str, want: list[int], *given: np.ndarray) -> None:
    for number, (got, expected) in enumerate(zip(results(name, *given), want, strict=True)):
        assert got == expected, (name, [hex(column[number]) for column in given], hex(cast(int, got)), hex(expected))


ARITHMETIC = {"fadd.s": np.add, "fsub.s": np.subtract, "fmul.s": np.multiply, "fdiv.s": np.divide}


@pytest.mark.parametrize("name", ARITHMETIC)
def test_arithmetic_is_numpys(name: str) -> None:
    """IEEE 754-2019 binary32, round to nearest, ties to even, by NumPy's float32."""
    a, b = pairs(11)
    with np.errstate(all="ignore"):
        want = ARITHMETIC[name](a.view(np.float32), b.view(np.float32))
    same(name, canonical(want), a, b)


def test_square_root_is_numpys() -> None:
    a, _ = pairs(12)
    with np.errstate(all="ignore"):
        same("fsqrt.s", canonical(np.sqrt(a.view(np.float32))), a)


COMPARISONS = {"feq.s": np.equal, "flt.s": np.less, "fle.s": np.less_equal}


@pytest.mark.parametrize("name", COMPARISONS)
def test_comparisons_are_numpys(name: str) -> None:
    a, b = pairs(13)
    with np.errstate(all="ignore"):
        want = COMPARISONS[name](a.view(np.float32), b.view(np.float32))
    same(name, want.astype(int).tolist(), a, b)


def number(pattern: int) -> float:
    return float(struct.unpack("<f", struct.pack("<I", pattern))[0])


def is_nan(pattern: int) -> bool:
    return pattern & 0x7FFFFFFF > 0x7F800000


def test_minimum_and_maximum() -> None:
    """RISC-V unprivileged ISA, chapter "F": -0.0 below +0.0; of a number and a NaN the number; of two the canonical."""

    def rank(pattern: int) -> int:
        return -(pattern & 0x7FFFFFFF) - 1 if pattern & SIGN else pattern

    lesser, greater = operation("fmin.s").compiled(), operation("fmax.s").compiled()
    for a, b in zip(*(column.tolist() for column in pairs(14)), strict=True):
        given = sorted((x for x in (a, b) if not is_nan(x)), key=rank) or [NAN]
        assert lesser(a, b) == given[0], (hex(a), hex(b))
        assert greater(a, b) == given[-1], (hex(a), hex(b))


def nearest_float(exact: Fraction, zero: int) -> int:
    """The binary32 nearest to an exact number, ties to even; ``zero`` is the pattern where it is exactly 0."""
    if exact == 0:
        return zero
    sign = SIGN if exact < 0 else 0
    size = abs(exact)
    exponent = max(-149, size.numerator.bit_length() - size.denominator.bit_length() - 24)
    if size >= Fraction(2) ** (exponent + 24):
        exponent += 1
    steps = even(size / Fraction(2) ** exponent)
    if steps == 2**24:
        steps, exponent = 2**23, exponent + 1
    if exponent > 104:
        return sign | 0x7F800000
    return sign | (steps if exponent == -149 else (exponent + 149) * 2**23 + steps)


def fused(a: int, b: int, c: int) -> int:
    """a × b + c rounded once, by fractions; IEEE 754-2019, 5.4.1, 6.1 to 6.3."""
    x, y, z = number(a), number(b), number(c)
    product_sign = (a ^ b) & SIGN
    if math.isnan(x) or math.isnan(y) or math.isnan(z):
        return NAN
    if math.isinf(x) or math.isinf(y):
        if x == 0 or y == 0 or (math.isinf(z) and product_sign != c & SIGN):
            return NAN
        return product_sign | 0x7F800000
    if math.isinf(z):
        return c
    exact = Fraction(x) * Fraction(y)
    zero = product_sign & c if exact == 0 and z == 0 else 0
    return nearest_float(exact + Fraction(z), zero)


def negative(pattern: int) -> int:
    return pattern ^ SIGN


FUSED: dict[str, Callable[[int, int, int], int]] = {
    "fmadd.s": fused,
    "fmsub.s": lambda a, b, c: fused(a, b, negative(c)),
    "fnmsub.s": lambda a, b, c: fused(negative(a), b, c),
    "fnmadd.s": lambda a, b, c: fused(negative(a), b, negative(c)),
    "fmadd.s.acc": lambda acc, a, b: fused(a, b, acc),
    "fnmsub.s.acc": lambda acc, a, b: fused(negative(a), b, acc),
}


def triples(count: int, seed: int) -> list[tuple[int, int, int]]:
    """Random, special, and with a sum that nearly cancels the product or lies on a tie."""
    chance = random.Random(seed)
    columns = [bits(count, seed + k).tolist() for k in range(3)]
    made = list(zip(*columns, strict=True))
    for _ in range(count // 2):
        a, b = (0x3F800000 + chance.getrandbits(23) + (chance.randrange(-20, 20) << 23) for _ in range(2))
        exact = Fraction(number(a)) * Fraction(number(b))
        near = nearest_float(exact, 0)
        made.append((a, b, near ^ SIGN))
        made.append((a, b, (near + chance.randrange(-2, 3)) ^ SIGN))
        made.append((a, near, ((near & 0x7F800000) - (chance.choice([24, 25, 23]) << 23)) % SIGN))
    return made


@pytest.mark.parametrize("name", FUSED)
def test_fused_multiply_add_is_exact_then_rounded_once(name: str) -> None:
    """IEEE 754-2019 fusedMultiplyAdd, computed on exact fractions."""
    run = operation(name).compiled()
    chance = random.Random(15)
    special = [tuple(chance.choice(SPECIAL) for _ in range(3)) for _ in range(2000)]
    for row in special + triples(1500, 15):
        assert run(*row) == FUSED[name](*row), (name, [hex(x) for x in row])


def test_sign_injection() -> None:
    """RISC-V unprivileged ISA, chapter "F": FSGNJ takes all bits but the sign from rs1; NaNs are not changed."""
    a, b = pairs(16)
    low = a & np.uint32(0x7FFFFFFF)
    same("fsgnj.s", (low | b & np.uint32(SIGN)).tolist(), a, b)
    same("fsgnjn.s", (low | ~b & np.uint32(SIGN)).tolist(), a, b)
    same("fsgnjx.s", (a ^ b & np.uint32(SIGN)).tolist(), a, b)
    same("fneg.s", (a ^ np.uint32(SIGN)).tolist(), a)
    same("fabs.s", low.tolist(), a)
    same("fmv.s", a.tolist(), a)


def converted(pattern: int, low: int, high: int, rounding: Callable[[Fraction], int], scale: int = 1) -> int:
    """RISC-V unprivileged ISA, chapter "F", table "Domains of float-to-integer conversions and behavior for invalid
    inputs": out of range to the nearest limit, NaN to the highest."""
    x = number(pattern)
    if math.isnan(x):
        return high
    if math.isinf(x):
        return high if x > 0 else low
    return max(low, min(high, rounding(Fraction(x) * scale)))


TO_INTEGER: dict[str, tuple[int, int, Callable[[Fraction], int], int]] = {
    "fcvt.w.s": (-(2**31), 2**31 - 1, even, 1),
    "fcvt.w.s.zero": (-(2**31), 2**31 - 1, math.trunc, 1),
    "fcvt.w.s.floor": (-(2**31), 2**31 - 1, math.floor, 1),
    "fcvt.wu.s": (0, 2**32 - 1, even, 1),
    "fcvt.wu.s.zero": (0, 2**32 - 1, math.trunc, 1),
    "fcvt.q15.s": (-32768, 32767, even, 2**15),
    "fcvt.q31.s": (-(2**31), 2**31 - 1, even, 2**31),
}


@pytest.mark.parametrize("name", TO_INTEGER)
def test_conversion_to_integers(name: str) -> None:
    low, high, rounding, scale = TO_INTEGER[name]
    run = operation(name).compiled()
    halves = [float_bits((k + 0.5) / scale * sign) for k in range(200) for sign in (1, -1)]
    for pattern in [*SPECIAL, *halves, *bits(8000, 17).tolist()]:
        assert run(pattern) == converted(pattern, low, high, rounding, scale) % 2**32, (name, hex(pattern))


def test_conversion_from_integers_is_numpys() -> None:
    """NumPy's conversion of int32, uint32 and int64 to float32: to nearest, ties to even."""
    chance = np.random.default_rng(18)
    words = chance.integers(0, 2**32, MANY, dtype=np.uint32) >> chance.integers(0, 32, MANY, dtype=np.uint32)
    ties = np.arange(2**24 - 50, 2**24 + 1000, dtype=np.uint32)
    extreme = np.array([0, 1, 2**31 - 1, 2**31, 2**31 + 1, 2**32 - 1, 2**32 - 128, 2**32 - 129], dtype=np.uint32)
    words = np.concatenate([extreme, ties, -ties, words])
    same("fcvt.s.w", canonical(words.view(np.int32).astype(np.float32)), words)
    same("fcvt.s.wu", canonical(words.astype(np.float32)), words)
    same("fcvt.s.q31", canonical(words.view(np.int32).astype(np.float32) / np.float32(2**31)), words)
    halves = np.arange(2**16, dtype=np.uint16)
    same("fcvt.s.q15", canonical(halves.view(np.int16).astype(np.float32) / np.float32(2**15)), halves)


def kind_of(pattern: int) -> int:
    """RISC-V unprivileged ISA, chapter "F", table "Format of result of FCLASS instruction"."""
    x = number(pattern)
    if math.isnan(x):
        return 9 if pattern & 0x00400000 else 8
    below = bool(pattern & SIGN)
    if math.isinf(x):
        return 0 if below else 7
    if x == 0:
        return 3 if below else 4
    if abs(x) < 2.0**-126:
        return 2 if below else 5
    return 1 if below else 6


def test_classes() -> None:
    run = operation("fclass.s").compiled()
    seen = set()
    for pattern in [*SPECIAL, *bits(5000, 19).tolist()]:
        assert run(pattern) == 1 << kind_of(pattern), hex(pattern)
        seen.add(kind_of(pattern))
    assert seen == set(range(10))


TESTED = (
    *ARITHMETIC, "fsqrt.s", *COMPARISONS, "fmin.s", "fmax.s", *FUSED, "fsgnj.s", "fsgnjn.s", "fsgnjx.s", "fneg.s",
    "fabs.s", "fmv.s", *TO_INTEGER, "fcvt.s.w", "fcvt.s.wu", "fcvt.s.q31", "fcvt.s.q15", "fclass.s",
)  # fmt: skip


def test_every_operation_is_tested() -> None:
    assert sorted(TESTED) == sorted(names("float"))


def test_evaluator_and_compiled_agree() -> None:
    """The slow twin of every float operation, on special and random values."""
    for name in names("float"):
        found = operation(name)
        fast = found.compiled()
        columns = [bits(200, 20 + k).tolist() for k in range(len(found.inputs))]
        half = found.operands[-1].half
        for row in zip(*columns, strict=True):
            given = [x & 0xFFFF for x in row] if half else list(row)
            assert found.evaluate(given) == (fast(*given),), (name, given)
