"""Residues: what is known of an address when its array may stand anywhere its alignment allows.

A residue says: the value is the address of ``symbol`` (of nothing: zero) plus ``offset``, up to a multiple of
``modulus``, a power of two. With a modulus of 2**32 the value is known exactly, relative to its array. Sums of residues
are residues, and the residues of a loop's pointer settle after one pass: that decides alignment, and how far apart the
accesses of one bundle are.
"""

from __future__ import annotations

from typing import NamedTuple

WHOLE = 1 << 32


class Residue(NamedTuple):
    """``symbol`` + ``offset`` modulo ``modulus``; ``offset`` lies below ``modulus``."""

    symbol: str | None
    offset: int
    modulus: int

    @classmethod
    def of(cls, symbol: str | None, offset: int, modulus: int) -> Residue:
        return cls(symbol, offset % modulus, modulus) if modulus > 1 else UNKNOWN

    def moved(self, other: Residue, sign: int = 1) -> Residue:
        """The sum, or with ``sign`` -1 the difference, of two values."""
        symbol = self.symbol
        if other.symbol is not None:
            if sign < 0 and other.symbol == symbol:
                symbol = None
            elif sign > 0 and symbol is None:
                symbol = other.symbol
            else:
                return UNKNOWN
        return Residue.of(symbol, self.offset + sign * other.offset, min(self.modulus, other.modulus))

    def times(self, factor: int) -> Residue:
        """The value times a constant."""
        if factor == 0:
            return constant(0)
        if self.symbol is not None:
            return UNKNOWN if factor != 1 else self
        return Residue.of(None, self.offset * factor, min(WHOLE, self.modulus * lowest_bit(factor)))

    def either(self, other: Residue) -> Residue:
        """What is known of a value that is one of two, of the same symbol or of none."""
        if self == other:
            return self
        if self.symbol != other.symbol:
            return UNKNOWN
        apart = lowest_bit(self.offset - other.offset)
        return Residue.of(self.symbol, self.offset, min(self.modulus, other.modulus, apart))

    def within(self, modulus: int) -> Residue:
        """The same, known only modulo a power of two."""
        return Residue.of(self.symbol, self.offset, min(self.modulus, modulus))


UNKNOWN = Residue(None, 0, 1)


def constant(value: int) -> Residue:
    return Residue(None, value % WHOLE, WHOLE)


def lowest_bit(number: int) -> int:
    """The largest power of two that divides ``number``, at most 2**32."""
    return min(WHOLE, number & -number) if number else WHOLE
