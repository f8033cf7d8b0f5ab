"""Values of registers and memory: raw integers, and the undefined.

A register holds a raw value: a Python ``int`` from 0 to 2**32 - 1 (the bits; pairs are 64 bits with the even
register's word least significant), or an :class:`Undefined` when any of its bytes is undefined. Fast code computes on
raw integers and never tests: an :class:`Undefined` refuses every arithmetic use with :class:`UndefinedOperand`, and the
caller then takes the slow way that follows undefined bytes lane by lane.
"""

from __future__ import annotations

from typing import NoReturn

WORD = 0xFFFFFFFF


class UndefinedOperand(TypeError):
    """An undefined value was used as a number."""


class Undefined:
    """``size`` bytes with value ``bits`` of which byte k is undefined where bit k of ``unknown`` is set.

    Undefined bytes of ``bits`` are kept 0, so that equal values have equal fields. Compare with :meth:`same`, not
    ``==``: using the value is an error on purpose.
    """

    __slots__ = ("bits", "size", "unknown")

    def __init__(self, bits: int, unknown: int, size: int = 4) -> None:
        keep = sum(0xFF << 8 * k for k in range(size) if not unknown >> k & 1)
        self.bits = bits & keep
        self.unknown = unknown
        self.size = size

    def same(self, other: object) -> bool:
        return isinstance(other, Undefined) and (self.bits, self.unknown, self.size) == (
            other.bits,
            other.unknown,
            other.size,
        )

    def __repr__(self) -> str:
        known = [not self.unknown >> k & 1 for k in range(self.size)]
        shown = [f"{self.bits >> 8 * k & 255:02x}" if known[k] else "??" for k in reversed(range(self.size))]
        return f"undefined 0x{''.join(shown)}"

    def __reduce__(self) -> tuple[object, ...]:
        return (Undefined, (self.bits, self.unknown, self.size))

    def _refuse(self, *_: object) -> NoReturn:
        raise UndefinedOperand("an undefined value was used as a number")

    __hash__ = None  # type: ignore[assignment]
    __bool__ = __index__ = __int__ = __float__ = _refuse
    __eq__ = __ne__ = __lt__ = __le__ = __gt__ = __ge__ = _refuse
    __add__ = __radd__ = __sub__ = __rsub__ = __mul__ = __rmul__ = __neg__ = __pos__ = __abs__ = _refuse
    __floordiv__ = __rfloordiv__ = __mod__ = __rmod__ = __truediv__ = __rtruediv__ = __pow__ = __rpow__ = _refuse
    __and__ = __rand__ = __or__ = __ror__ = __xor__ = __rxor__ = __invert__ = _refuse
    __lshift__ = __rlshift__ = __rshift__ = __rrshift__ = __divmod__ = __rdivmod__ = _refuse
    bit_count = bit_length = to_bytes = _refuse


Value = int | Undefined

NOTHING = Undefined(0, 0b1111)
"""A wholly undefined register."""


def value_of(bits: int, unknown: int, size: int = 4) -> Value:
    """The value with these bits and undefined bytes: a plain int when nothing is undefined."""
    return Undefined(bits, unknown, size) if unknown else bits


def parts(value: Value, size: int = 4) -> tuple[int, int]:
    """(bits, unknown) of any value."""
    return (value.bits, value.unknown) if isinstance(value, Undefined) else (value, 0)


def same(one: Value, other: Value) -> bool:
    """Equality of two values, undefined bytes included."""
    if isinstance(one, Undefined) or isinstance(other, Undefined):
        return isinstance(one, Undefined) and one.same(other)
    return one == other


def join(low: Value, high: Value) -> Value:
    """The 64-bit value of a pair from its even and odd register."""
    if isinstance(low, int) and isinstance(high, int):
        return low | high << 32
    (a, x), (b, y) = parts(low), parts(high)
    return Undefined(a | b << 32, x | y << 4, 8)


def split(value: Value) -> tuple[Value, Value]:
    """The even and odd register's value of a 64-bit value."""
    if isinstance(value, int):
        return value & WORD, value >> 32
    return value_of(value.bits & WORD, value.unknown & 15), value_of(value.bits >> 32, value.unknown >> 4)
