"""IEEE 754 binary32 on bits: the arithmetic that meanings of float operations compute with.

Every function takes and gives the 32 bits of a number as an unsigned integer. Results are rounded to nearest, ties to
even, subnormals kept; a NaN result is always the canonical one (RISC-V unprivileged ISA, chapter "F", which also
defines ``fmin``, ``fmax``, the conversions and ``classify``).

Sums, products, quotients and square roots are computed in binary64 and rounded again: with 53 ≥ 2 × 24 + 2 bits the
second rounding never changes the result (S. A. Figueroa, "When is double rounding innocuous?", SIGNUM Newsletter 30,
1995). ``fma`` and large integers are rounded once, exactly, on integers. An undefined operand raises
:class:`~vliwsim.description.values.UndefinedOperand` in each of them.
"""

from __future__ import annotations

import math
import struct

NAN = 0x7FC00000
_SIGN = 0x80000000
_INFINITY = 0x7F800000

_pack_bits = struct.Struct("<I").pack
_pack_two_bits = struct.Struct("<II").pack
_unpack_bits = struct.Struct("<I").unpack
_pack_float = struct.Struct("<f").pack
_unpack_float = struct.Struct("<f").unpack
_unpack_two_floats = struct.Struct("<ff").unpack


def to_float(a: int) -> float:
    """The number as a Python float, exactly (NaN bits are not kept)."""
    return float(_unpack_float(_pack_bits(a | 0))[0])


def from_float(x: float) -> int:
    """The nearest binary32."""
    if x != x:
        return NAN
    try:
        return int(_unpack_bits(_pack_float(x))[0])
    except OverflowError:
        return _INFINITY | (_SIGN if x < 0 else 0)


def add(a: int, b: int) -> int:
    x, y = _unpack_two_floats(_pack_two_bits(a | 0, b | 0))
    return from_float(x + y)


def subtract(a: int, b: int) -> int:
    x, y = _unpack_two_floats(_pack_two_bits(a | 0, b | 0))
    return from_float(x - y)


def multiply(a: int, b: int) -> int:
    x, y = _unpack_two_floats(_pack_two_bits(a | 0, b | 0))
    return from_float(x * y)


def divide(a: int, b: int) -> int:
    x, y = _unpack_two_floats(_pack_two_bits(a | 0, b | 0))
    if y:
        return from_float(x / y)
    return NAN if x == 0 or x != x else _INFINITY | (a ^ b) & _SIGN


def sqrt(a: int) -> int:
    x = to_float(a)
    return from_float(math.sqrt(x)) if x >= 0 else NAN


def negate(a: int) -> int:
    return NAN if is_nan(a) else a ^ _SIGN


def absolute(a: int) -> int:
    return NAN if is_nan(a) else a & 0x7FFFFFFF


def is_nan(a: int) -> bool:
    return a & 0x7FFFFFFF > _INFINITY


def fma(a: int, b: int, c: int) -> int:
    """a × b + c, rounded once."""
    x, y, z = to_float(a), to_float(b), to_float(c)
    if not (math.isfinite(x) and math.isfinite(y) and math.isfinite(z)):
        return from_float(x * y + z)
    product_mantissa, product_exponent = _exact(x)
    mantissa, exponent = _exact(y)
    product_mantissa, product_exponent = product_mantissa * mantissa, product_exponent + exponent
    mantissa, exponent = _exact(z)
    least = min(product_exponent, exponent)
    total = (product_mantissa << product_exponent - least) + (mantissa << exponent - least)
    if total:
        return _rounded(total, least)
    if product_mantissa or mantissa:
        return 0  # opposite and equal: +0 when rounding to nearest
    return _SIGN if (a ^ b) & c & _SIGN else 0


def _exact(x: float) -> tuple[int, int]:
    """A finite binary32 as mantissa × 2**exponent with the exponent at least -149."""
    mantissa, exponent = math.frexp(x)
    exponent = max(exponent - 24, -149)
    return int(math.ldexp(mantissa, math.frexp(x)[1] - exponent)), exponent


def _rounded(value: int, exponent: int) -> int:
    """value × 2**exponent, value not 0, as the nearest binary32."""
    sign = _SIGN if value < 0 else 0
    value = abs(value)
    drop = max(value.bit_length() - 24, -149 - exponent)
    if drop > 0:
        half = 1 << drop - 1
        kept, rest = value >> drop, value & (1 << drop) - 1
        kept += rest > half or (rest == half and kept & 1)
        exponent += drop
    else:
        kept = value
    try:
        return sign | from_float(math.ldexp(kept, exponent))
    except OverflowError:
        return sign | _INFINITY


def fmin(a: int, b: int) -> int:
    """RISC-V FMIN.S: the number where one is NaN, -0 below +0."""
    x, y = to_float(a), to_float(b)
    if x < y or (x == y and a & _SIGN):
        return a
    if y <= x:
        return b
    return _number(a, x, b, y)


def fmax(a: int, b: int) -> int:
    """RISC-V FMAX.S: the number where one is NaN, +0 above -0."""
    x, y = to_float(a), to_float(b)
    if x > y or (x == y and b & _SIGN):
        return a
    if y >= x:
        return b
    return _number(a, x, b, y)


def _number(a: int, x: float, b: int, y: float) -> int:
    """The one that is no NaN."""
    return a if x == x else b if y == y else NAN


def from_int(value: int) -> int:
    """The nearest binary32 of an integer of up to 128 bits."""
    if -(1 << 53) <= value <= 1 << 53:
        return from_float(float(value))
    return _rounded(value, 0)


def to_int(a: int, low: int, high: int, mode: str) -> int:
    """The integer, rounded by ``mode``, the nearest of ``low`` to ``high``; NaN gives ``high``."""
    x = to_float(a)
    if x != x:
        return high
    if x in (math.inf, -math.inf):
        return high if x > 0 else low
    return min(max(_whole(x, mode), low), high)


def _whole(x: float, mode: str) -> int:
    if mode == "half_even":
        return round(x)
    if mode == "floor":
        return math.floor(x)
    if mode == "ceiling":
        return math.ceil(x)
    if mode == "truncate":
        return math.trunc(x)
    whole = math.trunc(abs(x) + 0.5)  # half_away; exact: binary32 plus a half fits binary64
    return whole if x > 0 else -whole


def classify(a: int) -> int:
    """RISC-V FCLASS.S: one of ten bits."""
    negative, magnitude = bool(a & _SIGN), a & 0x7FFFFFFF
    if magnitude > _INFINITY:
        return 1 << 9 if magnitude & 0x400000 else 1 << 8
    rank = 0 if magnitude == _INFINITY else 1 if magnitude >= 0x800000 else 2 if magnitude else 3
    return 1 << (rank if negative else 7 - rank)
