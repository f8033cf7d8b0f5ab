"""The layout of a core's words, drawn as text."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence

from vliwsim.description.operations import Operation
from vliwsim.program.encoding.layout import IMMEDIATE_BITS, RING_BITS, Field, Format, Layout

WIDTH = 100
"""Columns a picture keeps to where it can."""


def picture(of: Layout, operation: Operation | None = None) -> str:
    """The words of a core: bit positions, names and widths of all fields, bit 0 on the left; no trailing newline.

    operation: draw only the words of this one; None: the header, the idle and extension words and every format of the
    core, each with the operations that share it.

    Raises :class:`~vliwsim.problems.CoreError` when an operation does not fit the core's words.
    """
    bits = of.core.words.bits
    lines = [_title(of), ""]
    if operation is not None:
        shape = of.format_of(operation)
        lines += [f"{operation.name}, code {operation.code:#x}", *_boxes((*of.header, *_named(shape)), bits), ""]
        return "\n".join([*lines, *_notes(of, (shape,))])
    shared: dict[tuple[Field, ...], list[Format]] = {}
    for each in of.operations.by_name.values():
        shape = of.format_of(each)
        shared.setdefault(_named(shape), []).append(shape)
    lines += [
        "every operation word",
        *_boxes((*of.header, Field("operands", of.guard.end, bits - of.guard.end)), bits),
        "",
    ]
    lines += ["idle word: operation 0", *_boxes((*of.header[:4], of.beats), bits), ""]
    lines += [
        "extension word, behind a word with extended = 1",
        *_boxes((Field("immediate", 0, IMMEDIATE_BITS),), bits),
        "",
    ]
    lines += _notes(of, [shape for shapes in shared.values() for shape in shapes])
    for fields, shapes in shared.items():
        lines += ["", *_boxes(fields, bits)]
        names = " ".join(shape.operation.name for shape in shapes)
        lines += textwrap.wrap(names, WIDTH, initial_indent="  ", subsequent_indent="  ", break_on_hyphens=False)
    return "\n".join(lines)


def _title(of: Layout) -> str:
    rule = of.core.words
    groups = "may straddle fetch groups" if rule.straddle else "stays inside a fetch group"
    return f"{of.core.name}: words of {rule.bits} bits; a bundle {groups} of {rule.group} words"


def _named(shape: Format) -> tuple[Field, ...]:
    """The format's fields, a star behind those that may say *immediate*."""
    fields: list[Field] = []
    for part in shape.parts:
        chosen = part.address.step if part.address else part.register
        for field in part.fields:
            star = "*" if part.immediate and field is chosen else ""
            fields.append(Field(field.name + star, field.low, field.width))
    return (*fields, shape.immediate) if shape.immediate.width else tuple(fields)


def _boxes(fields: Sequence[Field], bits: int) -> list[str]:
    """A row of boxes: first bits above, names inside, widths below; what is left of ``bits`` is a box of zeros."""
    end = fields[-1].end if fields else 0
    row = [*fields] + ([Field("0", end, bits - end)] if fields and end < bits else [])
    if not row:
        return ["  nothing but the header"]
    wide = [max(len(field.name), len(str(field.low)), len(str(field.width))) + 2 for field in row]
    names = "│".join(f" {field.name}".ljust(w) for field, w in zip(row, wide))
    return [
        "  first bit " + " ".join(f" {field.low}".ljust(w) for field, w in zip(row, wide)).rstrip(),
        "            ┌" + "┬".join("─" * w for w in wide) + "┐",
        "            │" + names + "│",
        "            └" + "┴".join("─" * w for w in wide) + "┘",
        "  bits      " + " ".join(f" {field.width}".ljust(w) for field, w in zip(row, wide)).rstrip(),
    ]


def _notes(of: Layout, shapes: Sequence[Format]) -> list[str]:
    """What the codes in the fields mean, for those fields that are there."""
    core, registers = of.core, of.immediate_code
    spans = []
    first = 0
    for cluster in core.clusters:
        spans.append(f"{cluster.name}0 is {first}")
        first += cluster.registers
    notes = {
        "last": "1 ends the bundle",
        "extended": "1: the next word is the immediate",
        "slot": ", ".join(f"{k} {slot.name}" for k, slot in enumerate(core.slots)),
        "guard": "0 none; 1 + 2r: if r; 2 + 2r: if not r",
        "registers": f"{', '.join(spans)}; where a star stands, {registers} says: the immediate",
    }
    there = {field.name for shape in shapes for field in shape.fields}
    if any(part.half for shape in shapes for part in shape.parts):
        notes["half"] = "0 low, 1 high"
    if "mode" in there:
        notes["mode"] = "0 [base + step], 1 [base then +step], 2 [+step then base], 3 [base then +step in ring N]"
        notes["N"] = f"in mode 3 the lowest {RING_BITS} bits of the immediate are its base-2 logarithm"
    if "immediate" in there:
        notes["immediate"] = "two's complement; what it cannot hold goes into an extension word"
    wide = max(map(len, notes))
    lines: list[str] = []
    for name, text in notes.items():
        indent = " " * (wide + 4)
        lines += textwrap.wrap(text, WIDTH, initial_indent=f"  {name.ljust(wide)}  ", subsequent_indent=indent)
    return lines
