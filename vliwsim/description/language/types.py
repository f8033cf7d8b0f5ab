"""Value types of operands: integers, packed lanes, binary32.

Register widths are 32 bits (64 for a pair). A *raw* value is the unsigned integer a register holds; the *value* is what
the meaning computes with. A scalar narrower than its register is the low bits when read, and is sign- or zero-extended
to the whole register when written.
"""

from __future__ import annotations

import re
from typing import NamedTuple

LONGEST = 128
"""Every intermediate value of a meaning fits so many bits."""


class ValueType(NamedTuple):
    """``bits`` of one lane (the only one of a scalar); ``lanes`` of a packed type, lane 0 in the low bits."""

    name: str
    bits: int
    signed: bool
    lanes: int = 1
    floating: bool = False

    @property
    def low(self) -> int:
        """The least value of a lane (integers)."""
        return -(1 << self.bits - 1) if self.signed else 0

    @property
    def high(self) -> int:
        """The greatest value of a lane (integers)."""
        return (1 << self.bits - self.signed) - 1

    @property
    def packed(self) -> bool:
        return self.lanes > 1

    @property
    def width(self) -> int:
        """Bits of all lanes together."""
        return self.bits * self.lanes

    @property
    def pair(self) -> bool:
        """Does it take an even:odd pair of registers?"""
        return self.width == 64

    def value(self, raw: int) -> int:
        """The value of one lane's bits (binary32 stays bits)."""
        raw &= (1 << self.bits) - 1
        return raw - (1 << self.bits) if self.signed and raw >> self.bits - 1 else raw


def _integer(name: str) -> ValueType:
    return ValueType(name, int(name[1:]), name[0] == "i")


TYPES: dict[str, ValueType] = {
    **{name: _integer(name) for name in ("i8", "i16", "i32", "u8", "u16", "u32", "i64", "u64")},
    "f32": ValueType("f32", 32, False, floating=True),
    "i16x2": ValueType("i16x2", 16, True, 2),
    "u16x2": ValueType("u16x2", 16, False, 2),
    "i8x4": ValueType("i8x4", 8, True, 4),
    "u8x4": ValueType("u8x4", 8, False, 4),
}
"""The types an operand in a register or an access to memory may have."""

_CONSTANT = re.compile(r"[iu]([1-9]|[12][0-9]|3[0-2])\Z", re.ASCII)


def constant_type(name: str) -> ValueType | None:
    """The type ``uN`` or ``iN`` of a constant, N from 1 to 32; None for any other name."""
    return _integer(name) if _CONSTANT.match(name) else None


def type_named(name: str) -> ValueType:
    """The type of an operand by its name; a KeyError for none such (names in built operations are always right)."""
    found = TYPES.get(name) or constant_type(name)
    if found is None:
        raise KeyError(name)
    return found
