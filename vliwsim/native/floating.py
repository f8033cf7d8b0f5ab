"""Binary32 in LLVM's text: numbers are held as their bits, every NaN made is the canonical one.

LLVM's operations without fast-math flags are IEEE 754's, rounded to nearest even; each function here equals the one of
the same name in :mod:`vliwsim.description.language.floats`.
"""

from __future__ import annotations

from vliwsim.description.language.floats import NAN
from vliwsim.description.language.types import ValueType
from vliwsim.native.text import UNLIKELY, Text, number

_CANONICAL = str(NAN)
_MAGNITUDE = "2147483647"
_SIGN = "-2147483648"
_INFINITY = str(0x7F800000)
_ARITHMETIC = {"+": "fadd", "-": "fsub", "*": "fmul", "/": "fdiv"}
_COMPARISONS = {"==": "oeq", "!=": "une", "<": "olt", "<=": "ole", ">": "ogt", ">=": "oge"}
_MODES = {"half_even": "roundeven", "floor": "floor", "ceiling": "ceil", "truncate": "trunc", "half_away": "round"}


def to_float(text: Text, bits: str) -> str:
    return text.let(f"bitcast i32 {bits} to float")


def from_float(text: Text, value: str) -> str:
    """The bits of a number, of a NaN the canonical one's; where ``text`` collects them, whether it is a NaN instead."""
    odd = text.let(f"fcmp uno float {value}, {value}")
    if text.odd is not None:
        text.odd.append(odd)
    else:
        value = text.let(f"select i1 {odd}, float 0x7FF8000000000000, float {value}{UNLIKELY}")
    return text.let(f"bitcast float {value} to i32")


def is_nan(text: Text, bits: str) -> str:
    return text.compare("ugt", "i32", text.let(f"and i32 {bits}, {_MAGNITUDE}"), _INFINITY)


def negate(text: Text, bits: str) -> str:
    return text.select(is_nan(text, bits), "i32", _CANONICAL, text.let(f"xor i32 {bits}, {_SIGN}"))


def absolute(text: Text, bits: str) -> str:
    return text.select(is_nan(text, bits), "i32", _CANONICAL, text.let(f"and i32 {bits}, {_MAGNITUDE}"))


def arithmetic(text: Text, operator: str, one: str, other: str) -> str:
    a, b = to_float(text, one), to_float(text, other)
    return from_float(text, text.let(f"{_ARITHMETIC[operator]} float {a}, {b}"))


def compared(text: Text, operator: str, one: str, other: str) -> str:
    return text.let(f"fcmp {_COMPARISONS[operator]} float {to_float(text, one)}, {to_float(text, other)}")


def sqrt(text: Text, bits: str) -> str:
    return from_float(text, text.let(f"call float @llvm.sqrt.f32(float {to_float(text, bits)})"))


def fma(text: Text, one: str, other: str, third: str) -> str:
    a, b, c = (to_float(text, bits) for bits in (one, other, third))
    return from_float(text, text.let(f"call float @llvm.fma.f32(float {a}, float {b}, float {c})"))


def fmin(text: Text, one: str, other: str) -> str:
    return _extreme(text, one, other, "olt", "ole", one)


def fmax(text: Text, one: str, other: str) -> str:
    return _extreme(text, one, other, "ogt", "oge", other)


def _extreme(text: Text, one: str, other: str, before: str, after: str, sign_of: str) -> str:
    """The one of two that stands ``before``; of equal ones ``one`` if ``sign_of`` is negative; of a NaN the other."""
    a, b = to_float(text, one), to_float(text, other)
    first = text.let(f"fcmp {before} float {a}, {b}")
    equal = text.let(f"fcmp oeq float {a}, {b}")
    negative = text.compare("slt", "i32", sign_of, "0")
    first = text.let(f"or i1 {first}, {text.let(f'and i1 {equal}, {negative}')}")
    second = text.let(f"fcmp {after} float {b}, {a}")
    of_number = text.select(is_nan(text, other), "i32", _CANONICAL, other)
    of_number = text.select(is_nan(text, one), "i32", of_number, one)
    return text.select(first, "i32", one, text.select(second, "i32", other, of_number))


def classify(text: Text, bits: str) -> str:
    magnitude = text.let(f"and i32 {bits}, {_MAGNITUDE}")
    rank = "3"
    for limit, value in ((0, 2), (0x7FFFFF, 1), (0x7F7FFFFF, 0)):
        rank = text.select(text.compare("ugt", "i32", magnitude, str(limit)), "i32", str(value), rank)
    negative = text.compare("slt", "i32", bits, "0")
    place = text.select(negative, "i32", rank, text.let(f"sub i32 7, {rank}"))
    quiet = text.compare("ne", "i32", text.let(f"and i32 {bits}, {0x400000}"), "0")
    place = text.select(is_nan(text, bits), "i32", text.select(quiet, "i32", "9", "8"), place)
    return text.let(f"shl i32 1, {place}")


def from_int(text: Text, code: str, width: int, signed: bool) -> str:
    """The nearest binary32 of an integer of ``width`` bits."""
    value = text.let(f"{'s' if signed else 'u'}itofp i{width} {code} to float")
    return text.let(f"bitcast float {value} to i32")


def to_int(text: Text, bits: str, to: ValueType, mode: str) -> str:
    """The integer in ``to.bits`` bits, the nearest that fits; NaN gives the greatest."""
    value, kind = to_float(text, bits), f"i{to.bits}"
    whole = text.let(f"call float @llvm.{_MODES[mode]}.f32(float {value})")
    how = "fptosi" if to.signed else "fptoui"
    made = text.let(f"call {kind} @llvm.{how}.sat.{kind}.f32(float {whole})")
    return text.select(is_nan(text, bits), kind, number(to.high, to.bits), made)
