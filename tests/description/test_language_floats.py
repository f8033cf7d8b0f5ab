"""Binary32 arithmetic of the language against NumPy's float32 (IEEE 754) and against exact rational arithmetic."""

from __future__ import annotations

import random
from fractions import Fraction

import numpy as np
import pytest

from vliwsim.description.language import floats
from vliwsim.description.values import Undefined, UndefinedOperand

SPECIAL = [0, 1, 2, 0x7FFFFE, 0x7FFFFF, 0x800000, 0x800001, 0x3F7FFFFF, 0x3F800000, 0x3F800001, 0x4B7FFFFF, 0x4B800000,
           0x4F000000, 0x4EFFFFFF, 0x4F800000, 0x7F7FFFFE, 0x7F7FFFFF, 0x7F800000, 0x7F800001, 0x7FC00000, 0x7FFFFFFF,
           0x1A800000, 0x20000000, 0x33800000, 0x34000000, 0x3F000000, 0x40400000]  # fmt: skip
SPECIAL += [bits | 0x80000000 for bits in SPECIAL]


def many(count: int, seed: int) -> np.ndarray:
    """Bits of binary32 numbers: random patterns, near exponents, small integers, specials."""
    draw = np.random.default_rng(seed)
    bits = draw.integers(0, 2**32, count, dtype=np.uint32)
    near = draw.integers(0, count, count // 3)
    bits[near] = bits[near] & 0x807FFFFF | draw.integers(100, 156, len(near), dtype=np.uint32) << 23
    bits[: count // 20] = draw.integers(-1000, 1000, count // 20).astype(np.float32).view(np.uint32)
    bits[count // 20 : count // 8] = draw.choice(np.array(SPECIAL, np.uint32), count // 8 - count // 20)
    draw.shuffle(bits)
    return bits


def canonical(result: np.ndarray) -> list[int]:
    bits = result.view(np.uint32).copy()
    bits[np.isnan(result)] = 0x7FC00000
    return [int(value) for value in bits]


A, B = many(100_000, 1), many(100_000, 2)
PAIRS = [(a, b) for a in SPECIAL for b in SPECIAL]
A[: len(PAIRS)] = [a for a, _ in PAIRS]
B[: len(PAIRS)] = [b for _, b in PAIRS]


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [
        (floats.add, np.add),
        (floats.subtract, np.subtract),
        (floats.multiply, np.multiply),
        (floats.divide, np.divide),
    ],
)
def test_two_operands(ours, theirs) -> None:
    with np.errstate(all="ignore"):
        expected = canonical(theirs(A.view(np.float32), B.view(np.float32)))
    assert [ours(a, b) for a, b in zip(A.tolist(), B.tolist(), strict=True)] == expected


def test_square_root() -> None:
    with np.errstate(all="ignore"):
        expected = canonical(np.sqrt(A.view(np.float32)))
    assert [floats.sqrt(a) for a in A.tolist()] == expected


def test_from_integers() -> None:
    draw = random.Random(3)
    values = [draw.getrandbits(draw.randrange(1, 64)) * draw.choice((1, -1)) for _ in range(20_000)]
    values += [s * (2**k + d) for k in range(62) for d in (-1, 0, 1) for s in (1, -1)]
    expected = canonical(np.array(values, np.int64).astype(np.float32))
    assert [floats.from_int(value) for value in values] == expected


def nearest(value: Fraction) -> int:
    """The nearest binary32 of a number that is not 0, ties to even, by trying the neighbours (no shared code)."""
    sign, value = (0x80000000, -value) if value < 0 else (0, value)
    low, high = 0, 0x7F800000
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if magnitude(middle) <= value else (low, middle)
    below, above = value - magnitude(low), magnitude(high) - value
    return sign | (low if below < above or (below == above and low % 2 == 0) else high)


def magnitude(bits: int) -> Fraction:
    exponent, fraction = bits >> 23, bits & 0x7FFFFF
    if exponent == 0:
        return Fraction(fraction, 2**149)
    return Fraction(fraction | 0x800000) * Fraction(2) ** (exponent - 150)


def exact(bits: int) -> Fraction:
    return -magnitude(bits & 0x7FFFFFFF) if bits >> 31 else magnitude(bits)


def test_fma_rounds_once() -> None:
    draw = random.Random(4)
    a, b = A[:20_000].tolist(), B[:20_000].tolist()
    for k in range(20_000):
        x, y = a[k], b[k]
        # c near -(a b), so that the sum cancels, or anything
        c = floats.negate(floats.multiply(x, y)) ^ draw.randrange(4) if k % 2 else a[-1 - k]
        if any(bits & 0x7F800000 == 0x7F800000 for bits in (x, y, c)):
            p, q, r = (np.array([bits], np.uint32).view(np.float32)[0] for bits in (x, y, c))
            with np.errstate(all="ignore"):
                wide = np.float32(np.float64(p) * np.float64(q) + np.float64(r))
            expected = canonical(np.array([wide], np.float32))[0]
            assert floats.fma(x, y, c) == expected
            continue
        total = exact(x) * exact(y) + exact(c)
        if total:
            assert floats.fma(x, y, c) == nearest(total), (hex(x), hex(y), hex(c))
        else:
            both_negative = (x ^ y) >> 31 and c >> 31 and not (exact(x) * exact(y))
            assert floats.fma(x, y, c) == (0x80000000 if both_negative else 0)


@pytest.mark.parametrize("mode", ["half_even", "half_away", "floor", "ceiling", "truncate"])
@pytest.mark.parametrize(("low", "high"), [(-(2**31), 2**31 - 1), (0, 2**32 - 1), (-128, 127)])
def test_to_integers(mode: str, low: int, high: int) -> None:
    """RISC-V unprivileged ISA, "F": conversions clip; NaN and +inf give the highest value."""
    for bits in [*A[:3000].tolist(), *(SPECIAL), *(floats.from_float(k / 4) for k in range(-20, 21))]:
        if bits & 0x7FFFFFFF > 0x7F800000:
            expected = high
        elif bits & 0x7FFFFFFF == 0x7F800000:
            expected = low if bits >> 31 else high
        else:
            value = exact(bits)
            down = value.numerator // value.denominator
            rest = value - down
            up = {
                "floor": False,
                "ceiling": rest > 0,
                "truncate": value < 0 and rest > 0,
                "half_even": rest > Fraction(1, 2) or (rest == Fraction(1, 2) and down % 2 == 1),
                "half_away": rest > Fraction(1, 2) or (rest == Fraction(1, 2) and value > 0),
            }[mode]
            expected = min(max(down + up, low), high)
        assert floats.to_int(bits, low, high, mode) == expected


def test_least_and_greatest() -> None:
    """RISC-V unprivileged ISA, "F", version 2.2: minimumNumber and maximumNumber; -0 below +0; canonical NaN."""
    nan, signalling, one, minus = 0x7FC00000, 0x7F800001, 0x3F800000, 0xBF800000
    assert floats.fmin(nan, one) == floats.fmin(one, signalling) == floats.fmax(signalling, one) == one
    assert floats.fmin(signalling, 0xFFFFFFFF) == floats.fmax(nan, signalling) == nan
    assert floats.fmin(0, 0x80000000) == floats.fmin(0x80000000, 0) == 0x80000000
    assert floats.fmax(0, 0x80000000) == floats.fmax(0x80000000, 0) == 0
    assert (floats.fmin(one, minus), floats.fmax(one, minus)) == (minus, one)
    for a, b in zip(A[:5000].tolist(), B[:5000].tolist(), strict=True):
        if max(a & 0x7FFFFFFF, b & 0x7FFFFFFF) <= 0x7F800000 and (a | b) & 0x7FFFFFFF:
            x, y = (np.array([bits], np.uint32).view(np.float32)[0] for bits in (a, b))
            assert floats.to_float(floats.fmin(a, b)) == min(x, y)
            assert floats.to_float(floats.fmax(a, b)) == max(x, y)


def test_classes() -> None:
    """RISC-V unprivileged ISA, table of the bits of FCLASS."""
    wanted = [0xFF800000, 0xBF800000, 0x807FFFFF, 0x80000000, 0, 1, 0x00800000, 0x7F800000, 0x7F800001, 0x7FC00000]
    assert [floats.classify(bits) for bits in wanted] == [1 << k for k in range(10)]


@pytest.mark.parametrize("name", ["add", "subtract", "multiply", "divide", "fmin", "fmax"])
def test_undefined_is_refused_in_either_place(name: str) -> None:
    function = getattr(floats, name)
    hole = Undefined(0, 1)
    for operands in ((hole, 0), (0, hole), (hole, hole), (0x7FC00000, hole)):
        with pytest.raises(UndefinedOperand):
            function(*operands)


@pytest.mark.parametrize("name", ["sqrt", "negate", "absolute", "classify", "from_int", "to_float", "is_nan"])
def test_undefined_is_refused(name: str) -> None:
    with pytest.raises(UndefinedOperand):
        getattr(floats, name)(Undefined(0, 15))


def test_undefined_is_refused_by_the_rest() -> None:
    hole = Undefined(0, 15)
    for operands in ((hole, 0, 0), (0, hole, 0), (0, 0, hole), (0x7FC00000, 0, hole)):
        with pytest.raises(UndefinedOperand):
            floats.fma(*operands)
    with pytest.raises(UndefinedOperand):
        floats.to_int(hole, 0, 1, "floor")
