"""A bundle's rows as one Python function, for the hot loop.

The text is made from :class:`~vliwsim.machine.rows.Rows` and the operations' own Python text, registered under a stable
name (``<bundle 12>``) so that a debugger or a profiler shows it. It decides nothing by itself: at an undefined operand,
a misaligned or foreign address, an undefined byte or a store it cannot make at once it declines (returns None or raises
``UndefinedOperand``), and the beat is taken by definition; so it does where an undefined operand is only passed on.
"""

from __future__ import annotations

import linecache
import re
from collections.abc import Callable, Sequence
from itertools import pairwise
from typing import Any

from vliwsim.description.core import Core
from vliwsim.description.values import Undefined, join
from vliwsim.machine.memory import ALL_DEFINED, ALL_OWNED, SIZES, Memory, Touch
from vliwsim.machine.rows import (
    LOAD,
    MANY,
    ONE,
    THREE,
    TWO,
    BranchRow,
    Group,
    ResultRow,
    Rows,
    StoreRow,
    compiled,
)

Results = Sequence[tuple[int, tuple[int, ...], Sequence[Any]]]
Done = tuple[Results, Sequence[tuple[int, int, int]], int, tuple[int, int] | None]
"""What a generated function returns: results as (latency, write numbers, values); stores as (size, place, value), place
in units of size; whether the branch is taken; and, where accesses were charged, (bank conflict cycles, wait cycles)."""

_INLINE = re.compile(r"\s*def operation\((?P<names>[\w, ]*)\):\s*return (?P<value>[^\n]+)\s*")
_WORDS = re.compile(r"[A-Za-z_]\w*")
_PLAIN_WORDS = {"if", "else", "and", "or", "not", "bit_length", "bit_count", "x"}


def bundle_function(index: int, rows: Rows, core: Core, constants: Sequence[int]) -> Callable[..., Done | None]:
    """The function of bundle ``index``, called with (operands, views, status views, memory); None declines."""
    return _Writer(rows, core, constants).function(f"<bundle {index}>")


def landing_function(targets: Sequence[Sequence[int]]) -> Callable[[list[Any], Sequence[Any]], None]:
    """A function that lands batches, each in the operand places given for it: called with (operands, batches)."""
    batches = ", ".join("(_, (" + ", ".join(f"operands[{place}]" for place in places) + ",))" for places in targets)
    return compiled(f"def land(operands, due):\n    {batches}, = due\n", "<landing>", "land")


class _Writer:
    """Writes the function of one bundle."""

    def __init__(self, rows: Rows, core: Core, constants: Sequence[int]) -> None:
        self.rows, self.core, self.constants = rows, core, constants
        self.first_constant = len(core.register_names)
        self.lines: list[str] = []
        self.depth = 1
        self.count = 0
        self.names: dict[str, object] = {"join": join, "charge": charge, "overlap": overlap, "Undefined": Undefined}
        self.charged = rows.accesses > 1 or bool(core.memory.waits)
        """Whether the accesses may cost cycles."""
        self.touches: list[str] = []
        self.passed: list[str] = []
        """Results that may be an undefined operand passed on: the definition makes a note of it."""
        self.gathered = rows.guarded_access
        """Whether guards decide which accesses there are, so that they are gathered as the bundle runs."""

    def function(self, name: str) -> Callable[..., Done | None]:
        rows = self.rows
        if self.gathered:
            self.add("touched = []; stores = []")
        results, dynamic = [], []
        for group in rows.groups:
            if group.numbers is None:
                dynamic.append(self.guarded_group(group))
            else:
                values = [self.result(row, None) for row in group.rows]
                results.append(f"({group.latency}, {group.numbers!r}, ({', '.join(values)},))")
        if self.passed:
            self.add(f"if {' or '.join(self.passed)}: return None")
        stores = [self.store(row) for row in rows.stores]
        touched = "touched" if self.gathered else f"({' '.join(self.touches)})"
        if len(rows.stores) > 1:
            self.add(f"if overlap({touched}): return None")
        self.add(f"out = [{', '.join(results)}]")
        for line in dynamic:
            self.add(line)
        taken = self.branch(rows.branch) if rows.branch else "0"
        stored = "stores" if self.gathered else f"({' '.join(stores)})"
        self.add(f"return out, {stored}, {taken}, {self.cost(touched)}")
        source = "def bundle(operands, views, status, memory):\n" + "\n".join(self.lines) + "\n"
        return compiled(source, name, "bundle", self.names)

    def add(self, line: str) -> None:
        self.lines.append("    " * self.depth + line)

    def fresh(self, prefix: str, value: object = None) -> str:
        name = f"{prefix}{self.count}"
        self.count += 1
        if value is not None:
            self.names[name] = value
        return name

    def operand(self, index: int) -> str:
        """An operand-file place; a constant as itself."""
        return f"operands[{index}]" if index < self.first_constant else str(self.constants[index - self.first_constant])

    def guard(self, guard: int, negated: bool) -> None:
        if guard >= 0:
            self.add(f"if operands[{guard}] {'==' if negated else '!='} 0:")
            self.depth += 1

    def guarded_group(self, group: Group) -> str:
        """Lines for a group whose guards decide what lands; the line that puts it among the results."""
        numbers, values = self.fresh("n"), self.fresh("v")
        self.add(f"{numbers} = []; {values} = []")
        for row in group.rows:
            self.result(row, (numbers, values))
        return f"if {numbers}: out.append(({group.latency}, tuple({numbers}), {values}))"

    def result(self, row: ResultRow, gather: tuple[str, str] | None) -> str:
        """Lines for one row; the text of its value, or of its values with a star."""
        self.guard(row.guard, row.negated)
        many = len(row.numbers) > 1 or row.shape == MANY
        if row.shape == LOAD:
            place = self.address(row.a, row.b, row.c, store=False)
            value = self.applied(row.function, [f"views[{SIZES.index(row.c)}][{place}]"])
        else:
            indices = row.a if row.shape == MANY else [row.a, row.b, row.c][: {ONE: 1, TWO: 2, THREE: 3}[row.shape]]
            value = self.applied(row.function, [self.operand(k) for k in indices])
        result = self.fresh("r")
        self.add(f"{result} = {value}")
        if row.shape != LOAD:
            test = f"Undefined in map(type, {result})" if many else f"{result}.__class__ is Undefined"
            if gather:
                self.add(f"if {test}: return None")
            else:
                self.passed.append(test)
        if gather:
            numbers, values = gather
            put = (
                f"{numbers} += {row.numbers!r}; {values} += {result}"
                if many
                else (f"{numbers}.append({row.numbers[0]}); {values}.append({result})")
            )
            self.add(put)
        self.depth = 1
        return f"*{result}" if many else result

    def applied(self, function: Callable[..., Any], arguments: list[str]) -> str:
        """A call of an operation's function, or its own text where that is one expression over its inputs."""
        code = getattr(function, "__code__", None)
        source = "".join(linecache.getlines(code.co_filename)) if code and code.co_filename.startswith("<") else ""
        match = _INLINE.fullmatch(source)
        if match:
            names = [name.strip() for name in match["names"].split(",")] if match["names"] else []
            words = set(_WORDS.findall(match["value"])) - set(names) - _PLAIN_WORDS
            if all(re.fullmatch(r"_t\d+|[xX]?[0-9a-fA-F]+", word) for word in words):
                for name, argument in zip(names, arguments, strict=True):
                    self.add(f"{name} = {argument}")
                return match["value"]
        return f"{self.fresh('f', function)}({', '.join(arguments)})"

    def address(self, base: int, step: int, size: int, store: bool) -> str:
        """Lines that make and check an address; the name of its place in units of ``size``."""
        address, place, shift = self.fresh("x"), self.fresh("p"), SIZES.index(size)
        moved, made = self.operand(step), f"operands[{base}]"
        self.add(f"{address} = {made}" if moved == "0" else f"{address} = ({made} + {moved}) & 0xFFFFFFFF")
        if size > 1:
            self.add(f"if {address} & {size - 1}: return None")
        self.add(f"{place} = {address} >> {shift}")
        wanted = f"& {ALL_OWNED[size]} != {ALL_OWNED[size]}" if store else f"!= {ALL_DEFINED[size]}"
        self.add(f"if status[{shift}][{place}] {wanted}: return None")
        touch = f"({address}, {size}, {store})"
        self.touches.append(touch + ",")
        if self.gathered:
            self.add(f"touched.append({touch})")
        return place

    def store(self, row: StoreRow) -> str:
        """Lines for a store; what it stores, as (size index, place, value)."""
        self.guard(row.guard, row.negated)
        place = self.address(row.base, row.step, row.size, store=True)
        source = self.operand(row.source)
        if row.odd >= 0:
            source = f"join({source}, {self.operand(row.odd)})"
        result = self.fresh("r")
        self.add(f"{result} = {self.applied(row.function, [source])}")
        self.add(f"if {result}.__class__ is not int: return None")
        stored = f"({SIZES.index(row.size)}, {place}, {result})"
        if self.gathered:
            self.add(f"stores.append({stored})")
        self.depth = 1
        return stored + ","

    def branch(self, row: BranchRow) -> str:
        """Lines that decide the branch; the text of the truth."""
        if row.guard < 0 and row.function is None:
            return "1"
        self.add("taken = 0")
        self.guard(row.guard, row.negated)
        arguments = [self.operand(k) for k in row.sources]
        if row.function is None:
            self.add("taken = 1")
        elif row.number < 0:
            self.add(f"taken = {self.applied(row.function, arguments)}")
        else:
            self.add(f"counted, taken = {self.applied(row.function, arguments)}")
            self.add(f"if taken: out.append(({self.core.latency.of_class('update')}, ({row.number},), (counted,)))")
        self.depth = 1
        return "taken"

    def cost(self, touched: str) -> str:
        """The text of what the accesses cost; two in different banks, the common case, are told apart at once."""
        if not self.charged:
            return "None"
        memory, call = self.core.memory, f"charge(memory, {touched})"
        sizes = [row.c for group in self.rows.groups for row in group.rows if row.shape == LOAD]
        sizes += [row.size for row in self.rows.stores]
        if self.gathered or memory.waits or len(sizes) != 2 or max(sizes) > memory.bank_width:
            return call
        one, other = (touch[1:].split(",")[0] for touch in self.touches)
        width, banks = memory.bank_width, memory.banks
        return f"None if {one} // {width} % {banks} != {other} // {width} % {banks} else {call}"


def charge(memory: Memory, touched: Sequence[tuple[int, int, bool]]) -> tuple[int, int] | None:
    """What the accesses of a beat cost: None for nothing, else :meth:`Memory.charge`."""
    parameters = memory.parameters
    if not parameters.waits:
        if len(touched) < 2:
            return None
        if len(touched) == 2:
            (one, size, _), (other, another, _) = touched
            width, banks = parameters.bank_width, parameters.banks
            if size <= width and another <= width and one // width % banks != other // width % banks:
                return None
    conflict, waits = memory.charge([Touch(*touch) for touch in touched])
    return (conflict, waits) if conflict or waits else None


def overlap(touched: Sequence[tuple[int, int, bool]]) -> bool:
    """Whether two stores touch one byte."""
    ends = sorted((address, address + size) for address, size, store in touched if store)
    return any(start < end for (_, end), (start, _) in pairwise(ends))
