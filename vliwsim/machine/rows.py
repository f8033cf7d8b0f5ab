"""Bundles laid out as rows of plain tuples for the hot loop (:mod:`vliwsim.machine.hurry`)."""

from __future__ import annotations

import linecache
import sys
from collections.abc import Callable
from functools import lru_cache
from typing import Any, Literal, NamedTuple

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind
from vliwsim.description.values import Value, join, split
from vliwsim.machine.parts import WORD, Part, Reach
from vliwsim.program.code import Mode


class ResultRow(NamedTuple):
    """A row that computes: ``guard`` operand index or -1; skip where (guard's value == 0) is not equal to ``negated``.

    ``shape``: ONE, TWO, THREE sources (``a b c`` are operand indices) or LOAD (``a`` base, ``b`` step, ``c`` size) with
    one result; MANY (``a`` is a tuple of operand indices) with several, which ``function`` returns as a list.
    """

    guard: int
    negated: bool
    shape: int
    function: Callable[..., Any]
    a: Any
    b: int
    c: int
    numbers: tuple[int, ...]


ONE, TWO, THREE, LOAD, MANY = range(5)
FOREIGN: Literal["little", "big"] = "big" if sys.byteorder == "little" else "little"
"""The byte order the host does not have."""


class StoreRow(NamedTuple):
    """A row that stores ``function(operands[source])`` in ``size`` bytes at base + step.

    ``odd``: operand index of a pair's other half, or -1.
    """

    guard: int
    negated: bool
    function: Callable[..., Any]
    source: int
    odd: int
    base: int
    step: int
    size: int


class BranchRow(NamedTuple):
    """The one direct branch of a bundle; ``function`` None: always taken; ``number``: of a count's write, or -1."""

    guard: int
    negated: bool
    function: Callable[..., Any] | None
    sources: tuple[int, ...]
    target: int
    number: int


class Group(NamedTuple):
    """The result rows of one latency. ``numbers``: of all their writes in order, None if a guard decides which land."""

    latency: int
    numbers: tuple[int, ...] | None
    rows: tuple[ResultRow, ...]


class Rows(NamedTuple):
    """A bundle as the hot loop takes it. ``accesses``: how many of its operations touch memory, guards on."""

    groups: tuple[Group, ...]
    stores: tuple[StoreRow, ...]
    branch: BranchRow | None
    accesses: int

    @property
    def guarded_access(self) -> bool:
        """Whether a guard decides about some access to memory."""
        loads = (row.guard >= 0 for group in self.groups for row in group.rows if row.shape == LOAD)
        return any(loads) or any(row.guard >= 0 for row in self.stores)


def lay_out(core: Core, parts: tuple[Part, ...], zero: int) -> Rows | None:
    """The rows of a bundle that breaks no static rule, or None where rows cannot express it.

    ``zero`` is the operand-file index of the constant 0.
    """
    branches = [p for p in parts if p.branches]
    if (
        any(p.effects.busy > 1 or p.operation.kind is Kind.HALT for p in parts)
        or len(branches) > 1
        or any(p.target is None or p.uses_link for p in branches)
        or (core.interlocked and _writes_twice(parts))
    ):
        return None
    rows: dict[int, list[ResultRow]] = {}
    stores: list[StoreRow] = []
    for part in parts:
        access, reach = part.operation.access, part.reach
        latency = core.latency.of(part.operation.name, part.operation.operation_class)
        if access and len(part.inputs) != 1:
            return None
        if access and access.store:
            if part.results:
                return None
            stores.append(_store_row(core, part, zero))
        elif access:
            rows.setdefault(latency, []).append(_load_row(core, part, zero))
        elif part.results and not part.branches:
            rows.setdefault(latency, []).append(_compute_row(part))
        if reach and reach.update is not None:
            row = ResultRow(*_guard(part), TWO, _updater(reach.ring), reach.base, reach.step, 0, (reach.update,))
            rows.setdefault(core.latency.of_class("update"), []).append(row)
    return Rows(
        tuple(Group(latency, _fixed(group), tuple(group)) for latency, group in rows.items()),
        tuple(stores),
        _branch_row(branches[0]) if branches else None,
        sum(p.operation.access is not None for p in parts),
    )


def _writes_twice(parts: tuple[Part, ...]) -> bool:
    registers = [{write.register for write in part.effects.writes} for part in parts]
    return sum(map(len, registers)) > len(set().union(*registers))


def _fixed(rows: list[ResultRow]) -> tuple[int, ...] | None:
    if any(row.guard >= 0 for row in rows):
        return None
    return tuple(number for row in rows for number in row.numbers)


def _guard(part: Part) -> tuple[int, bool]:
    guard = part.instruction.guard
    return (guard.register, guard.negated) if guard else (-1, False)


def _reached(reach: Reach, zero: int) -> tuple[int, int]:
    """Operand indices whose sum is the address."""
    return reach.base, zero if reach.mode is Mode.AFTER else reach.step


def _branch_row(part: Part) -> BranchRow:
    always = part.operation.inputs == ()
    number = part.results[0][0] if part.operation.count else -1
    assert part.target is not None
    sources = tuple(i.index for i in part.inputs)
    return BranchRow(*_guard(part), None if always else part.function, sources, part.target, number)


def _compute_row(part: Part) -> ResultRow:
    numbers = tuple(n for pair in part.results for n in pair)
    plain = len(numbers) == 1 and 1 <= len(part.inputs) <= 3 and not any(i.pair for i in part.inputs)
    guard, negated = _guard(part)
    indices = [i.index for i in part.inputs]
    if plain:
        a, b, c = [*indices, 0, 0][:3]
        return ResultRow(guard, negated, (ONE, TWO, THREE)[len(indices) - 1], part.function, a, b, c, numbers)
    sources = tuple(k for i in part.inputs for k in ((i.index, i.index + 1) if i.pair else (i.index,)))
    return ResultRow(guard, negated, MANY, _spread(part), sources, 0, 0, numbers)


def _load_row(core: Core, part: Part, zero: int) -> ResultRow:
    assert part.reach
    assert part.operation.access
    base, step = _reached(part.reach, zero)
    size = part.operation.access.bytes
    function = part.function
    if core.memory.endianness != sys.byteorder:
        function = _swapped_in(function, size)
    numbers = tuple(n for pair in part.results for n in pair)
    if len(numbers) > 1:
        function = _split_results(function, tuple(len(pair) for pair in part.results))
    return ResultRow(*_guard(part), LOAD, function, base, step, size, numbers)


def _store_row(core: Core, part: Part, zero: int) -> StoreRow:
    assert part.reach
    assert part.operation.access
    size, source = part.operation.access.bytes, part.inputs[0]
    function = part.function if core.memory.endianness == sys.byteorder else _swapped_out(part.function, size)
    odd = source.index + 1 if source.pair else -1
    return StoreRow(*_guard(part), function, source.index, odd, *_reached(part.reach, zero), size)


@lru_cache(maxsize=256)
def _swapped_in(function: Callable[..., object], size: int) -> Callable[..., object]:
    return lambda loaded: function(int.from_bytes(loaded.to_bytes(size, sys.byteorder), FOREIGN))


@lru_cache(maxsize=256)
def _swapped_out(function: Callable[..., int], size: int) -> Callable[..., object]:
    return lambda value: int.from_bytes(function(value).to_bytes(size, sys.byteorder), FOREIGN)


@lru_cache(maxsize=64)
def _updater(ring: int) -> Callable[..., object]:
    """The base's new value from base and step, as text that can be inlined; equals :meth:`Reach.updated`."""
    inside, outside = (ring - 1, ~(ring - 1) & WORD) if ring else (WORD, 0)
    moved = f"(base + step) & {inside:#x}"
    value = f"base & {outside:#x} | {moved}" if ring else moved
    return compiled(f"def operation(base, step):\n    return {value}\n", f"<update in ring {ring}>", "operation")


def compiled(source: str, name: str, wanted: str, names: dict[str, object] | None = None) -> Callable[..., Any]:
    """The function ``wanted`` of a generated text, registered under ``name`` so that it can be looked at."""
    names = {} if names is None else names
    linecache.cache[name] = (len(source), None, source.splitlines(True), name)
    exec(compile(source, name, "exec"), names)
    return names[wanted]  # type: ignore[return-value]


def _spread(part: Part) -> Callable[..., list[Value]]:
    """A function from single register values to the single register values an operation gives."""
    pairs = tuple(i.pair for i in part.inputs)
    inner = _split_results(part.function, tuple(len(pair) for pair in part.results))
    if not any(pairs):
        return inner

    def joined(*registers: Value) -> list[Value]:
        rest = iter(registers)
        return inner(*[join(next(rest), next(rest)) if pair else next(rest) for pair in pairs])

    return joined


def _split_results(function: Callable[..., object], widths: tuple[int, ...]) -> Callable[..., list[Value]]:
    def several(*inputs: Value) -> list[Value]:
        outputs = function(*inputs)
        if not isinstance(outputs, tuple):
            outputs = (outputs,)
        values: list[Value] = []
        for output, width in zip(outputs, widths, strict=True):
            values.extend(split(output) if width == 2 else (output,))
        return values

    return several
