"""Interval arithmetic over mathematical integers: what each operator can give."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from vliwsim.description.language.tree import Interval


def _corners(a: Interval, b: Interval, operate: Callable[[int, int], int]) -> Interval:
    values = [operate(x, y) for x in (a.low, a.high) for y in (b.low, b.high)]
    return Interval(min(values), max(values))


def add(a: Interval, b: Interval) -> Interval:
    return Interval(a.low + b.low, a.high + b.high)


def subtract(a: Interval, b: Interval) -> Interval:
    return Interval(a.low - b.high, a.high - b.low)


def multiply(a: Interval, b: Interval) -> Interval:
    found = _corners(a, b, lambda x, y: x * y)
    return Interval(found.low, found.high, a.excludes_zero and b.excludes_zero)


def negate(a: Interval) -> Interval:
    return Interval(-a.high, -a.low, a.nonzero)


def invert(a: Interval) -> Interval:
    return Interval(~a.high, ~a.low)


def absolute(a: Interval) -> Interval:
    if a.low <= 0 <= a.high:
        return Interval(1 if a.nonzero else 0, max(-a.low, a.high)) if a.low < a.high or not a.nonzero else a
    return Interval(min(abs(a.low), abs(a.high)), max(abs(a.low), abs(a.high)))


def _divisors(b: Interval) -> list[Interval]:
    """The parts of a divisor's interval on either side of 0, which it excludes."""
    parts = []
    if b.low < 0:
        parts.append(Interval(b.low, min(b.high, -1)))
    if b.high > 0:
        parts.append(Interval(max(b.low, 1), b.high))
    return parts


def _over_divisors(a: Interval, b: Interval, operate: Callable[[int, int], int]) -> Interval:
    parts = [_corners(a, part, operate) for part in _divisors(b)]
    return Interval(min(p.low for p in parts), max(p.high for p in parts))


def floor_divide(a: Interval, b: Interval) -> Interval:
    return _over_divisors(a, b, lambda x, y: x // y)


def truncate(x: int, y: int) -> int:
    """x / y toward zero."""
    return x // y if (x < 0) == (y < 0) else -(-x // y)


def truncating_divide(a: Interval, b: Interval) -> Interval:
    return _over_divisors(a, b, truncate)


def modulo(a: Interval, b: Interval) -> Interval:
    """Floor remainder: between 0 and the divisor."""
    low, high = min(b.low + 1, 0), max(b.high - 1, 0)
    if a.low >= 0:
        if b.low > a.high:
            return a
        if b.low > 0:
            high = min(high, a.high)
    return Interval(low, high)


def truncating_remainder(a: Interval, b: Interval) -> Interval:
    """The sign of the dividend, less than the divisor and not more than the dividend."""
    most = max(abs(b.low), abs(b.high)) - 1
    return Interval(max(-most, min(a.low, 0)), min(most, max(a.high, 0)))


def shift_left(a: Interval, b: Interval) -> Interval:
    """For counts 0 to 127."""
    found = _corners(a, b, lambda x, y: x << y)
    return Interval(found.low, found.high, a.excludes_zero)


def shift_right(a: Interval, b: Interval) -> Interval:
    return _corners(a, b, lambda x, y: x >> y)


def _ones(a: Interval, b: Interval) -> int:
    """All bits set that a value of either may use, sign apart."""
    length = max(x.bit_length() if x >= 0 else (~x).bit_length() for x in (a.low, a.high, b.low, b.high))
    return (1 << length) - 1


def bit_and(a: Interval, b: Interval) -> Interval:
    if a.low >= 0 and b.low >= 0:
        return Interval(0, min(a.high, b.high))
    if a.low >= 0:
        return Interval(0, a.high)
    if b.low >= 0:
        return Interval(0, b.high)
    ones = _ones(a, b)
    return Interval(~ones, -1 if a.high < 0 and b.high < 0 else max(a.high, b.high, -1))


def bit_or(a: Interval, b: Interval) -> Interval:
    ones = _ones(a, b)
    if a.low >= 0 and b.low >= 0:
        return Interval(max(a.low, b.low), ones)
    low = min(a.low, b.low)
    if a.high < 0 or b.high < 0:
        return Interval(max(x.low for x in (a, b) if x.high < 0), -1)
    return Interval(low, ones)


def bit_xor(a: Interval, b: Interval) -> Interval:
    ones = _ones(a, b)
    if a.low >= 0 and b.low >= 0 or a.high < 0 and b.high < 0:
        return Interval(0, ones)
    if (a.low >= 0 and b.high < 0) or (b.low >= 0 and a.high < 0):
        return Interval(~ones, -1)
    return Interval(~ones, ones)


def least(a: Interval, b: Interval) -> Interval:
    return Interval(min(a.low, b.low), min(a.high, b.high), a.excludes_zero and b.excludes_zero)


def greatest(a: Interval, b: Interval) -> Interval:
    return Interval(max(a.low, b.low), max(a.high, b.high), a.excludes_zero and b.excludes_zero)


def rounded(a: Interval, n: Interval) -> Interval:
    """x / 2**n rounded in any way, for n 0 to 127."""
    return Interval(
        min(a.low >> n.low, a.low >> n.high),
        max(-(-a.high >> n.low), -(-a.high >> n.high)),
    )


BINARY: Mapping[str, Callable[[Interval, Interval], Interval]] = {
    "+": add, "-": subtract, "*": multiply, "//": floor_divide, "%": modulo, "<<": shift_left, ">>": shift_right,
    "&": bit_and, "|": bit_or, "^": bit_xor, "tdiv": truncating_divide, "trem": truncating_remainder,
    "min": least, "max": greatest,
}  # fmt: skip
