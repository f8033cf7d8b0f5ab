"""Where a kernel's arrays stand in data memory.

In interface order from :data:`FIRST`, each on a multiple of its alignment; behind every array, and behind the bytes its
``over`` declares, :data:`GAP` bytes belong to nobody, so that a read past the end is caught. The same kernel, core and
sizes always give the same addresses.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

from vliwsim.description.core import Memory
from vliwsim.kernel.elements import ELEMENTS
from vliwsim.kernel.interface import Interface
from vliwsim.kernel.sizes import formula_value, shown_values
from vliwsim.problems import Problem, problem
from vliwsim.program.kernel import Formula, Item

FIRST = 64
"""Address of the lowest byte an array may have."""
GAP = 64
"""Unowned bytes between arrays, at least."""
ALIGN = 8
"""Alignment of an array that asks for none, in bytes: a register pair can be loaded from its start."""


class Area(NamedTuple):
    """An array in memory: ``bytes`` from ``start``, then ``over`` readable bytes."""

    name: str
    start: int
    bytes: int
    over: int


def place(
    interface: Interface, memory: Memory, lengths: Mapping[str, int], names: Mapping[str, Any], problems: list[Problem]
) -> tuple[Area, ...]:
    """The area of every array. ``lengths`` in elements, ``names`` for the formulas; mistakes go to ``problems``."""
    cursor, areas = FIRST, []
    for item in interface.arrays:
        start = _start(item, memory, cursor, names, problems)
        over = _attribute(item, item.over, 0, names, problems)
        if over < 0 or over > memory.size:
            problems.append(_bad(item, "over-value", f"over {over}", f"0 to {memory.size} bytes", item.over))
            over = 0
        if start is None:
            continue
        area = Area(item.name, start, lengths[item.name] * ELEMENTS[item.type].bytes, over)
        areas.append(area)
        cursor = start + area.bytes + over + GAP
    used = max((a.start + a.bytes + a.over for a in areas), default=0)
    if used > memory.size:
        wanted = 1 << (used - 1).bit_length()
        problems.append(
            problem(
                "memory-too-small",
                f"the arrays take {used} bytes ({', '.join(f'{a.name} {a.bytes + a.over}' for a in areas)})",
                f"{memory.size} bytes of data memory (memory.size)",
                f"--set memory.size={wanted}",
            )
        )
    return tuple(areas)


def _start(item: Item, memory: Memory, cursor: int, names: Mapping[str, Any], problems: list[Problem]) -> int | None:
    size = ELEMENTS[item.type].bytes
    align = _attribute(item, item.align, 1, names, problems)
    if align < 1 or align & (align - 1) or align > 1 << 30:
        problems.append(_bad(item, "align-value", f"align {align}", "a power of two, in bytes", item.align))
        align = 1
    align = max(align, size, 1 if item.bank is not None else ALIGN)
    start = -(-cursor // align) * align
    if item.bank is None:
        return start
    bank = _attribute(item, item.bank, 0, names, problems)
    if not 0 <= bank < memory.banks:
        problems.append(_bad(item, "bank-value", f"bank {bank}", f"0 to {memory.banks - 1}", item.bank))
        return None
    for candidate in range(start, start + memory.banks * memory.bank_width + align, align):
        if candidate // memory.bank_width % memory.banks == bank:
            return candidate
    found = f"no multiple of {align} bytes is in bank {bank}"
    problems.append(_bad(item, "bank-value", found, "a bank that the alignment reaches", item.bank))
    return None


def _attribute(
    item: Item, formula: Formula | None, default: int, names: Mapping[str, Any], problems: list[Problem]
) -> int:
    if formula is None:
        return default
    value = formula_value(formula, names, problems)
    if value is None:
        return default
    if isinstance(value, bool) or not isinstance(value, int):
        found = f"{formula.text.strip()} is {value}{shown_values(formula.names, names)}"
        problems.append(_bad(item, "attribute-value", found, "a whole number", formula))
        return default
    return value


def _bad(item: Item, name: str, found: str, allowed: str, formula: Formula | None) -> Problem:
    return problem(name, f"{item.name}: {found}", allowed, place=formula.place if formula else item.place)
