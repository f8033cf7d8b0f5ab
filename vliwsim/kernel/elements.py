"""The element types of kernel data, and how values a person gives become them.

Integers are taken as they are and must fit. Floats given for q15 and q31 are scaled by 2**15 and 2**31, rounded to
nearest even and saturated; floats given for f32 are rounded to binary32. Everything else is refused, with the reason.
"""

from __future__ import annotations

import sys
from collections.abc import Mapping
from typing import NamedTuple

import numpy as np

from vliwsim.problems import Problem, problem


class Element(NamedTuple):
    """One element type: ``bytes`` in memory, the NumPy type it is shown as, the raw integers from ``low`` to ``high``.

    ``fraction``: bits after the point of a q type, else None. ``floating``: binary32, whose raw value is its bits.
    """

    name: str
    bytes: int
    dtype: np.dtype
    low: int
    high: int
    fraction: int | None = None

    @property
    def floating(self) -> bool:
        return self.name == "f32"

    @property
    def signed(self) -> bool:
        return self.low < 0

    def stored(self, endianness: str) -> np.dtype:
        """The NumPy type in a memory of this byte order (``little`` or ``big``)."""
        return self.dtype.newbyteorder("<" if endianness == "little" else ">")

    def raw(self, value: object) -> int:
        """The 32-bit register value of one value of this type (negative numbers sign-extended)."""
        if self.floating:
            return int(np.float32(value).view(np.uint32))  # type: ignore[arg-type]
        return int(value) & 0xFFFFFFFF  # type: ignore[call-overload]

    def from_raw(self, bits: int) -> int | np.float32:
        """The value in the low bits of a register; what is above them is not looked at."""
        if self.floating:
            return np.uint32(bits & 0xFFFFFFFF).view(np.float32)
        bits &= (1 << 8 * self.bytes) - 1
        return bits - (1 << 8 * self.bytes) if self.signed and bits >> (8 * self.bytes - 1) else bits


def _integer(name: str, bytes_: int, signed: bool, fraction: int | None = None) -> Element:
    bits = 8 * bytes_
    low, high = (-(1 << bits - 1), (1 << bits - 1) - 1) if signed else (0, (1 << bits) - 1)
    return Element(name, bytes_, np.dtype(f"{'i' if signed else 'u'}{bytes_}"), low, high, fraction)


ELEMENTS: Mapping[str, Element] = {
    element.name: element
    for element in (
        *(_integer(f"i{8 * size}", size, True) for size in (1, 2, 4)),
        *(_integer(f"u{8 * size}", size, False) for size in (1, 2, 4)),
        _integer("q15", 2, True, 15),
        _integer("q31", 4, True, 31),
        Element("f32", 4, np.dtype("f4"), 0, 0xFFFFFFFF),
    )
}


class Converted(NamedTuple):
    """``array`` in the element's type, or None with the ``problems`` that forbid it; ``notes`` say what changed:
    values that were ``saturated``, values ``rounded`` to binary32."""

    array: np.ndarray | None
    problems: tuple[Problem, ...] = ()
    notes: tuple[Problem, ...] = ()
    saturated: int = 0
    rounded: int = 0


def _refused(name: str, found: str, allowed: str, remedy: str = "") -> Converted:
    return Converted(None, (problem(name, found, allowed, remedy),))


def convert(element: Element, value: object, label: str) -> Converted:
    """``value`` as a NumPy array of ``element``'s type and of the shape it came in; ``label`` names it in messages.

    Contiguity and byte order of the given array do not matter: the result is always a fresh contiguous array.
    """
    masked = sys.modules.get("numpy.ma")  # nobody can have a masked array before that is imported
    if masked and isinstance(value, masked.MaskedArray):
        return _refused("array-type", f"{label} is a masked array", "an array without a mask", f"{label}.filled(0)")
    if isinstance(value, (list, tuple)) and not element.floating and _too_wide(value):
        return _out_of_range(element, list(value), label)  # NumPy would make floats of them
    try:
        array = np.asarray(value)
    except (ValueError, TypeError, OverflowError) as error:
        return _refused("array-shape", f"{label} is no array: {error}", "numbers in one dimension")
    kind = array.dtype.kind
    if array.size == 0 and kind in "iuf":  # an empty list is one of floats to NumPy
        return Converted(np.zeros(array.shape, element.dtype))
    if kind in "iu":
        return _from_integers(element, array, label)
    if kind == "f":
        return _from_floats(element, array, label)
    if kind == "O" and all(type(one) is int for one in array.flat):
        return _from_python(element, array, label)
    found = {"b": "truth values", "c": "complex numbers", "O": "Python objects", "U": "text", "S": "bytes"}.get(
        kind, f"values of type {array.dtype}"
    )
    remedy = f"{label}.astype(numpy.{element.dtype})" if kind == "b" else ""
    return _refused("array-type", f"{label} holds {found}", f"numbers for {element.name}", remedy)


def _too_wide(values: list[object] | tuple[object, ...]) -> bool:
    """Integers only, not all of them within 64 bits."""
    integers = [one for one in values if type(one) is int]
    return bool(integers) and len(integers) == len(values) and not -(2**63) <= min(integers) <= max(integers) < 2**63


def _from_python(element: Element, array: np.ndarray, label: str) -> Converted:
    """``array``: Python integers of any width, as objects."""
    if element.floating:
        try:
            return _from_floats(element, array.astype(np.float64), label)
        except OverflowError:
            return _refused("value-range", f"{label} holds integers beyond 2**1024", "magnitudes below 2**128 for f32")
    if all(element.low <= one <= element.high for one in array.flat):
        return _from_integers(element, array.astype(np.int64), label)
    return _out_of_range(element, list(array.flat), label)


def _out_of_range(element: Element, values: list[int], label: str) -> Converted:
    index, bad = next((k, v) for k, v in enumerate(values) if not element.low <= v <= element.high)
    where = label if len(values) == 1 else f"{label}[{index}]"
    found = f"{where} = {bad}" if bad.bit_length() <= 256 else f"{where} is a number of {bad.bit_length()} bits"
    return _refused("value-range", found, f"{element.low} to {element.high} for {element.name}")


def _from_integers(element: Element, array: np.ndarray, label: str) -> Converted:
    if element.floating:
        rounded = array.astype(np.float32)
        # 2**63 and beyond do not survive a comparison in int64, a float64 holds every float32
        inexact = int(np.count_nonzero(rounded.astype(np.longdouble) != array.astype(np.longdouble)))
        return Converted(rounded, notes=rounding_note(label, inexact, array.size), rounded=inexact)
    if array.size and (int(array.min()) < element.low or int(array.max()) > element.high):
        wrong = (array < element.low) | (array > element.high)
        index = int(np.flatnonzero(wrong.ravel())[0])
        where = _place(label, array, index)
        more = int(np.count_nonzero(wrong)) - 1
        others = f" and {more} more" if more else ""
        return _refused(
            "value-range",
            f"{where} = {int(array.flat[index])}{others}",
            f"{element.low} to {element.high} for {element.name}",
        )
    return Converted(np.array(array, dtype=element.dtype, order="C"))


def _from_floats(element: Element, array: np.ndarray, label: str) -> Converted:
    if element.fraction is None and not element.floating:
        return _refused(
            "array-type",
            f"{label} holds floats ({array.dtype})",
            f"integers from {element.low} to {element.high} for {element.name}",
            f"numpy.rint({label}).astype(numpy.{element.dtype})",
        )
    if element.floating:
        with np.errstate(over="ignore", under="ignore"):
            rounded = array.astype(np.float32)
        lost = np.isinf(rounded) & np.isfinite(array)
        if lost.any():
            index = int(np.flatnonzero(lost.ravel())[0])
            found = f"{_place(label, array, index)} = {array.flat[index]}"
            return _refused("value-range", found, "magnitudes below 2**128 for f32")
        inexact = int(np.count_nonzero((rounded.astype(array.dtype) != array) & ~np.isnan(array)))
        if array.dtype.itemsize <= 4:
            inexact = 0
        whole = np.ascontiguousarray(rounded).reshape(array.shape)
        return Converted(whole, notes=rounding_note(label, inexact, array.size), rounded=inexact)
    if not np.isfinite(array).all():
        index = int(np.flatnonzero(~np.isfinite(array).ravel())[0])
        found = f"{_place(label, array, index)} = {array.flat[index]}"
        return _refused("not-finite", found, f"finite numbers for {element.name}")
    assert element.fraction is not None
    with np.errstate(over="ignore"):
        scaled = np.rint(array.astype(np.promote_types(array.dtype, np.float64)) * 2.0**element.fraction)
    saturated = int(np.count_nonzero((scaled < element.low) | (scaled > element.high)))
    raw = np.clip(scaled, element.low, element.high).astype(element.dtype)
    return Converted(raw, notes=scaling_note(element, label, saturated, array.size), saturated=saturated)


def _place(label: str, array: np.ndarray, index: int) -> str:
    """How an element of ``array`` is called."""
    return label if array.ndim == 0 else f"{label}[{index}]"


def scaling_note(element: Element, label: str, saturated: int, size: int) -> tuple[Problem, ...]:
    scaling = f"floats scaled by 2**{element.fraction}, rounded to nearest even"
    return (problem("scaled", f"{label}: {scaling}; {saturated} of {size} saturated", kind="note"),)


def rounding_note(label: str, inexact: int, size: int) -> tuple[Problem, ...]:
    if not inexact:
        return ()
    return (problem("rounded", f"{label}: {inexact} of {size} values rounded to binary32", kind="note"),)
