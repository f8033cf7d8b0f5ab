"""Answers of ``tell`` and ``draw``: values as text and as pictures."""

from __future__ import annotations

import re
from typing import Any

import numpy as np

from vliwsim.description.values import Undefined, Value
from vliwsim.faces.shell.drawing import plot
from vliwsim.faces.shell.lines import Line, tint
from vliwsim.shell.faults import unclear
from vliwsim.shell.forms import FORMS, form_named, number_of, number_text, raw_text, value_text, with_pattern
from vliwsim.shell.moment import seen
from vliwsim.shell.session import Session
from vliwsim.shell.terms import Array

_SLICE = re.compile(r"([A-Za-z_]\w*)\s*(?:\[([^\]:]*):([^\]:]*)\])?\Z")
_AS = re.compile(r"\s+as\s+(\w+)\s*\Z")
MOST = 4096
"""Elements or cycles that one answer covers, at most."""
OVER = 200
"""Cycles of a register that are drawn unless told otherwise."""


def pieces(text: str) -> list[str]:
    """Expressions separated by commas outside brackets, or, where that is none, by blanks."""
    out, depth = [""], 0
    for character in text:
        depth += (character in "([") - (character in ")]")
        if character == "," and depth == 0:
            out.append("")
        else:
            out[-1] += character
    return [piece.strip() for piece in out]


def tell(session: Session, text: str, width: int) -> list[Line]:
    """Values of expressions, ``as`` a form."""
    match = _AS.search(f" {text}")
    form = form_named(match[1]) if match else None
    body = (f" {text}"[: match.start()] if match else text).strip()
    if not body:
        raise unclear("nothing to tell", "registers, memory, expressions", "tell g6, x[0:8]")
    lines: list[Line] = []
    for piece in pieces(body):
        lines += _one(session, piece, form, width)
    return lines


def _one(session: Session, piece: str, form: str | None, width: int) -> list[Line]:
    if piece in session.names.registers or piece in session.names.scalars:
        number = session.names.register(piece)
        value = session.moment().registers[number]
        if form is None and piece in session.names.scalars:
            form = session.names.scalars[piece][1].name
        shown = with_pattern(value) if form is None else value_text(value, form)
        return [[("", f"  {piece} = "), (tint(number, value), shown)]]
    match = _SLICE.match(piece)
    if match and match[1] in session.names.arrays:
        array = session.names.array(match[1])
        first, end = session.range_of(array, match[2], match[3])
        return _slice(session, array, first, end, form, width)
    return [[("", f"  {piece} = {_expression(session, piece, form)}")]]


def _expression(session: Session, piece: str, form: str | None) -> str:
    single = re.match(r"([A-Za-z_]\w*)\s*\[([^\]]*)\]\Z", piece)
    if single and single[1] in session.names.arrays:  # one element has the array's form
        array = session.names.array(single[1])
        index, _ = session.range_of(array, single[2], None)
        return _element(array, array.value(session.state, index), form)
    value = session.value(piece)
    return _number(value, form)


def _number(value: Any, form: str | None) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if form is None or isinstance(value, float):
        return number_text(value)
    return raw_text(value & 0xFFFFFFFF, form)


def _element(array: Array, value: Value, form: str | None) -> str:
    if isinstance(value, Undefined):
        return "undefined"
    if form in ("hex", "bits"):
        digits = 2 * array.element.bytes
        return f"0x{value:0{digits}x}" if form == "hex" else f"{value:0{4 * digits}b}"
    return raw_text(value, form or array.element.name)


def _slice(session: Session, array: Array, first: int, end: int, form: str | None, width: int) -> list[Line]:
    """Elements in rows, each row begun by the index of its first."""
    shown_end = min(end, first + MOST)
    texts = [_element(array, array.value(session.state, k), form) for k in range(first, shown_end)]
    cell = max(map(len, texts)) + 2
    margin = len(f"  {array.name}[{shown_end - 1}]")
    each = max(1, (width - margin - 1) // cell)
    lines: list[Line] = []
    for at in range(0, len(texts), each):
        row = "".join(f"{text:>{cell}}" for text in texts[at : at + each])
        lines.append([("faint", f"{f'  {array.name}[{first + at}]':<{margin}}"), ("", row)])
    if shown_end < end:
        lines.append([("faint", f"  … {end - shown_end} more")])
    return lines


# -------------------------------------------------------------------------------------------------------------- draw


def draw(session: Session, text: str, width: int) -> list[Line]:
    """A plot of a slice, an array, or a register over time, with another one or the reference over it."""
    body, _, over = f" {text}".partition(" with ")
    match = _AS.search(body)
    form = form_named(match[1]) if match else None
    body = (body[: match.start()] if match else body).strip()
    over_match = _AS.search(f" {over}")
    over_form = form_named(over_match[1]) if over_match else form
    over = (f" {over}"[: over_match.start()] if over_match else over).strip()
    if not body:
        raise unclear("nothing to draw", "an array, a slice, or a register", "draw x[0:256] as q15")
    if form not in (None, "i8", "i16", "i32", "u8", "u16", "u32", "q15", "q31", "f32"):
        raise unclear(f"a drawing as {form}", ", ".join(f for f in FORMS if "x" not in f and f not in ("hex", "bits")))
    slice_match = _SLICE.match(body)
    if slice_match and slice_match[1] in session.names.arrays:
        return _draw_array(session, slice_match, form, (over, over_form), width)
    return _draw_register(session, body, form, (over, over_form), width)


def _draw_array(
    session: Session, match: re.Match[str], form: str | None, other: tuple[str, str | None], width: int
) -> list[Line]:
    array = session.names.array(match[1])
    first, end = session.range_of(array, match[2], match[3])
    if end - first > 1 << 20:
        raise unclear(f"{end - first} elements", "at most 2**20")
    series = _numbers(session, array, first, end, form)
    legend = f"{array.name}[{first}:{end}]{f' as {form}' if form else ''}"
    overlay = None
    over, over_form = other
    if over == "reference":
        session.need_reference()
        assert session.judge.expected is not None
        session.output_named(array.name)
        expected = np.asarray(session.judge.expected[array.name])[first:end]
        overlay = [number_of(array.element.raw(v), form or array.element.name) for v in expected]
        legend += "; o is the reference where it is elsewhere"
    elif over:
        second = _SLICE.match(over)
        if not second:
            raise unclear(over, "an array, a slice, or reference")
        beside = session.names.array(second[1])
        low, high = session.range_of(beside, second[2], second[3])
        overlay = _numbers(session, beside, low, high, over_form)
        legend += f"; o is {over} where it is elsewhere"
    return plot(series, overlay, width, first=first, stretch=end - first, axis="element", legend=legend)


def _numbers(session: Session, array: Array, first: int, end: int, form: str | None) -> list[float | None]:
    return [number_of(array.value(session.state, k), form or array.element.name) for k in range(first, end)]


def _draw_register(
    session: Session, body: str, form: str | None, other: tuple[str, str | None], width: int
) -> list[Line]:
    """The values that a register had in the cycles up to this one."""
    name, _, cycles = body.partition(" over ")
    number = session.names.register(name.strip())
    length = OVER
    if cycles:
        length = session.whole(cycles)
        if not 1 <= length <= 100_000:
            raise unclear(f"over {length}", "1 to 100000 cycles")
    over, over_form = other
    beside = session.names.register(over) if over else None
    if form is None and name in session.names.scalars:
        form = session.names.scalars[name][1].name
    first = max(0, session.cycle - length + 1)
    one: list[float | None] = []
    two: list[float | None] = []
    state = session.machine.start({}, (), session.state.memory.regions)
    session.history.put(state, first)
    while True:
        registers = seen(session.machine, state)
        one.append(number_of(registers[number], form))
        if beside is not None:
            two.append(number_of(registers[beside], over_form))
        if state.cycle >= session.cycle:
            break
        session.history.go_on(state, state.cycle + 1)
    legend = f"{name.strip()}{f' as {form}' if form else ''}, cycle by cycle"
    if beside is not None:
        legend += f"; o is {over} where it is elsewhere"
    overlay = two if beside is not None else None
    return plot(one, overlay, width, first=first, stretch=len(one), axis="cycle", legend=legend)
