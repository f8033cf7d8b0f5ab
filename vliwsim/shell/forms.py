"""Values as text: the forms that ``as`` knows."""

from __future__ import annotations

import struct

from vliwsim.description.values import Undefined, Value, parts
from vliwsim.kernel.elements import ELEMENTS, Element
from vliwsim.shell.faults import unclear

PACKED = {"i16x2": ("i16", 2), "u16x2": ("u16", 2), "q15x2": ("q15", 2), "i8x4": ("i8", 4), "u8x4": ("u8", 4)}
"""Lanes of a register, lane 0 lowest."""
FORMS = (*ELEMENTS, *PACKED, "hex", "bits")
"""Every word that may stand behind ``as``."""


def form_named(word: str) -> str:
    """Check a form's name."""
    if word not in FORMS:
        raise unclear(f"{word} is no form", ", ".join(FORMS), name="unknown-form")
    return word


def number_text(value: float) -> str:
    """A number as a person writes it."""
    if isinstance(value, float):
        return f"{value:.9g}"
    return str(value)


def raw_text(bits: int, form: str) -> str:
    """32 defined bits in a form; narrower types take the low bits, packed ones give lane 0 first."""
    if form == "hex":
        return f"0x{bits:08x}"
    if form == "bits":
        return " ".join(f"{bits:032b}"[k : k + 8] for k in range(0, 32, 8))
    if form in PACKED:
        name, lanes = PACKED[form]
        width = 8 * ELEMENTS[name].bytes
        return "[" + ", ".join(raw_text(bits >> width * k, name) for k in range(lanes)) + "]"
    return element_text(ELEMENTS[form], bits)


def element_text(element: Element, bits: int) -> str:
    """One element of a kernel's data."""
    if element.floating:
        return _shortest(bits & 0xFFFFFFFF)
    value = element.from_raw(bits)
    return str(value) if element.fraction is None else f"{int(value) / (1 << element.fraction):.9g}"


def _shortest(bits: int) -> str:
    """The shortest decimal number that rounds to these binary32 bits."""
    value = struct.unpack("<f", struct.pack("<I", bits))[0]
    for digits in range(1, 10):
        text = f"{value:.{digits}g}"
        try:
            if struct.pack("<f", float(text)) == struct.pack("<f", value):
                return text
        except OverflowError:  # rounded up beyond the largest
            continue
    return text


def value_text(value: Value, form: str | None = None) -> str:
    """A register's value; without a form as a signed number, in hexadecimal too where that says more."""
    if isinstance(value, Undefined):
        return "undefined" if value.unknown == (1 << value.size) - 1 else repr(value)
    if form is not None:
        return raw_text(value, form)
    signed = value - (1 << 32) if value >> 31 and value < 1 << 32 else value
    return str(signed)


def with_pattern(value: Value) -> str:
    """A register's value as a number and, from 10 on, as its pattern."""
    if isinstance(value, Undefined) or value < 10:
        return value_text(value)
    return f"{value_text(value)} (0x{value:x})"


def number_of(value: Value, form: str | None) -> float | None:
    """A value to draw; None where it is undefined."""
    bits, unknown = parts(value)
    if unknown:
        return None
    element = ELEMENTS["i32"] if form in (None, "hex", "bits") or form in PACKED else ELEMENTS[str(form)]
    number = element.from_raw(bits)
    return float(number) / (1 << element.fraction) if element.fraction else float(number)
