"""Plain exact arithmetic for the models: Python integers and fractions, no shifts where a division says it."""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction


def fold(x: int, bits: int) -> int:
    """The number congruent to x modulo 2**bits in two's complement range."""
    return (x + 2 ** (bits - 1)) % 2**bits - 2 ** (bits - 1)


LIMITED: set[str] = set()
"""Sides on which something was limited since it was last cleared."""


def limit(x: int, bits: int) -> int:
    """The number nearest to x in two's complement range."""
    return _between(-(2 ** (bits - 1)), x, 2 ** (bits - 1) - 1)


def limitu(x: int, bits: int) -> int:
    """The number nearest to x in unsigned range."""
    return _between(0, x, 2**bits - 1)


def _between(low: int, x: int, high: int) -> int:
    if x < low or x > high:
        LIMITED.add("below" if x < low else "above")
    return sorted((low, x, high))[1]


def down(x: Fraction | int) -> int:
    return math.floor(x)


TIES: list[Fraction] = []
"""What was rounded to nearest and lay exactly between two integers, since it was last cleared."""


def nearest(x: Fraction | int) -> int:
    """Ties up."""
    _note(Fraction(x))
    return math.floor(Fraction(x) + Fraction(1, 2))


def even(x: Fraction | int) -> int:
    """Ties to even: Python's own round, which is exact on fractions."""
    _note(Fraction(x))
    return round(Fraction(x))


def _note(x: Fraction) -> None:
    if x.denominator == 2:
        TIES[:] = [*TIES[-9:], x]


def over(x: int, bits: int) -> Fraction:
    """x / 2**bits."""
    return Fraction(x, 2**bits)


def lanes(function: Callable[..., int]) -> Callable[..., tuple[int, ...]]:
    """The function for each lane; whole operands (a shift count) go to every lane."""

    def each(*operands: object) -> tuple[int, ...]:
        count = max(len(x) for x in operands if isinstance(x, tuple))
        spread = [x if isinstance(x, tuple) else (x,) * count for x in operands]
        return tuple(function(*row) for row in zip(*spread, strict=True))

    return each


def dot(a: tuple[int, ...], b: tuple[int, ...]) -> int:
    return sum(x * y for x, y in zip(a, b, strict=True))


def binary(x: int, bits: int = 32) -> str:
    """The bits of x, highest first."""
    return format(x % 2**bits, f"0{bits}b")


def spare(x: int, bits: int) -> int:
    """How often x can be doubled and still fit; bits - 1 for 0 and -1."""
    text = binary(x, bits)
    return len(text) - len(text.lstrip(text[0])) - 1
