"""Expressions about a moment: the source's own expression language, with registers, arrays and events as names."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from typing import Any

import attrs

from vliwsim.description.values import Undefined, Value, parts
from vliwsim.kernel.binding import Setup
from vliwsim.kernel.elements import ELEMENTS, Element
from vliwsim.kernel.interface import interface_of
from vliwsim.machine.state import State
from vliwsim.problems import SourceError
from vliwsim.program.source.expressions import CONSTANTS, FUNCTIONS, REFERENCES, Formula, formula
from vliwsim.shell.faults import Unclear, listed, nearest, unclear
from vliwsim.shell.layout import Layout

BUILT_IN = ("cycle", "beat", "pass")
"""Names of time in every expression; a kernel's own name of the same spelling goes first (``pass`` is nobody's)."""


class UndefinedHere(Exception):
    """An expression met an undefined register or element; ``what`` names it."""

    def __init__(self, what: str) -> None:
        super().__init__(what)
        self.what = what


@attrs.frozen(eq=False)
class Array:
    """A kernel's array in memory."""

    name: str
    start: int
    length: int
    element: Element
    endianness: str
    output: bool

    def value(self, state: State, index: int) -> Value:
        """The raw element."""
        size = self.element.bytes
        return state.memory.load(self.start + index * size, size)

    def number(self, state: State, index: int) -> int | float:
        """The element as a number; q types as raw integers. Raises :class:`UndefinedHere`."""
        value = self.value(state, index)
        if isinstance(value, Undefined):
            raise UndefinedHere(f"{self.name}[{index}]")
        number = self.element.from_raw(value)
        return float(number) if self.element.floating else int(number)


class _Elements:
    """An array at one moment, as expressions index it."""

    def __init__(self, array: Array, state: State) -> None:
        self._array, self._state = array, state

    def __len__(self) -> int:
        return self._array.length

    def __getitem__(self, index: int) -> int | float:
        return self._array.number(self._state, index)


class Names:
    """What names mean in one bound kernel."""

    def __init__(self, setup: Setup, layout: Layout) -> None:
        self.setup, self.layout = setup, layout
        kernel = setup.kernel
        outputs = interface_of(kernel).outputs
        order = kernel.core.memory.endianness
        self.arrays: dict[str, Array] = {}
        for area in setup.areas:
            element = ELEMENTS[interface_of(kernel).items[area.name].type]
            length = area.bytes // element.bytes
            self.arrays[area.name] = Array(area.name, area.start, length, element, order, area.name in outputs)
        self.scalars = {
            name: (item.register, ELEMENTS[item.type])
            for name, item in outputs.items()
            if item.size is None and item.register is not None
        }
        """Outputs in registers: their value is the register's, at any moment."""
        self.fixed = {k: v for k, v in setup.names.items() if k not in self.arrays and k not in self.scalars}
        self.registers = layout.registers

    def all(self) -> tuple[str, ...]:
        """Every name an expression may use."""
        plain = (n for n in self.fixed if "(" not in n)
        return (*self.registers, *self.arrays, *self.scalars, *plain, *BUILT_IN)

    def array_at(self, address: int) -> tuple[Array, int] | None:
        """The array and element that hold a byte."""
        for array in self.arrays.values():
            offset = address - array.start
            if 0 <= offset < array.length * array.element.bytes:
                return array, offset // array.element.bytes
        return None

    def register(self, word: str) -> int:
        """The number of the register a word names; raises :class:`Unclear`."""
        number = self.registers.get(word)
        if number is None and word in self.scalars:
            number = self.scalars[word][0]
        if number is None:
            clusters = ", ".join(f"{c.name}0..{c.name}{c.registers - 1}" for c in self.layout.core.clusters)
            known = (*self.registers, *self.scalars)
            raise unclear(f"{word} is no register", clusters, nearest(word, known), name="unknown-register")
        return number

    def array(self, word: str) -> Array:
        """The array a word names; raises :class:`Unclear`."""
        if word not in self.arrays:
            found = f"{word} is no array"
            raise unclear(found, listed(self.arrays) or "none", nearest(word, self.arrays), name="unknown-array")
        return self.arrays[word]


class View(Mapping[str, Any]):
    """The names of a moment with their values, looked up when asked for: ``registers`` are those after landing."""

    def __init__(self, names: Names, state: State, registers: list[Value], more: Mapping[str, Callable[[], Any]]):
        self._names, self._state, self._registers, self._more = names, state, registers, more

    def __getitem__(self, key: str) -> Any:
        names = self._names
        if key in self._more:
            return self._more[key]()
        if key in names.registers:
            return self._register(key, names.registers[key], ELEMENTS["i32"])
        if key in names.scalars:
            return self._register(key, *names.scalars[key])
        if key in names.arrays:
            return _Elements(names.arrays[key], self._state)
        if key in names.fixed:
            return names.fixed[key]
        if key in ("cycle", "beat"):
            return getattr(self._state, key)
        raise KeyError(key)

    def _register(self, name: str, number: int, element: Element) -> int | float:
        bits, unknown = parts(self._registers[number])
        if unknown & ((1 << element.bytes) - 1):
            raise UndefinedHere(name)
        value = element.from_raw(bits)
        return float(value) if element.floating else int(value)

    def __iter__(self) -> Iterator[str]:
        return iter(self._names.all())

    def __len__(self) -> int:
        return len(self._names.all())


_HALF = re.compile(r"\b([A-Za-z_]\w*)\.(lo|hi)\b")
_REFERENCE = re.compile(r"\b(?:addr|len)\(\s*\w+\s*\)")
_PASS = re.compile(r"\bpass\b")


@attrs.frozen(eq=False)
class Term:
    """A parsed expression. ``made`` are the names put in for what the source language does not have: their spelling."""

    text: str
    formula: Formula
    made: Mapping[str, str]
    halves: Mapping[str, tuple[int, int]]

    @property
    def names(self) -> frozenset[str]:
        return frozenset(self.formula.names)

    def reads_registers(self, names: Names) -> bool:
        """Whether its value depends on registers."""
        return bool(self.halves) or any(n in names.registers or n in names.scalars for n in self.formula.names)

    def value(self, names: Names, state: State, registers: list[Value], events: Mapping[str, Callable[[], Any]]) -> Any:
        """The value at a moment. Raises :class:`UndefinedHere`, or :class:`Unclear` where there is no value."""
        more: dict[str, Callable[[], Any]] = dict(events)
        for made, (register, half) in self.halves.items():
            more[made] = lambda r=register, h=half, m=made: self._half(registers[r], h, m)  # type: ignore[misc]
        if "pass_" in self.made:
            more["pass_"] = lambda: names.layout.pass_of(state)
        try:
            return self.formula.within(View(names, state, registers, more))
        except SourceError as error:
            raise said_again(error, self.made) from None

    def _half(self, value: Value, half: int, made: str) -> int:
        bits, unknown = parts(value)
        if unknown >> 2 * half & 3:
            raise UndefinedHere(self.made[made])
        return int(ELEMENTS["i16"].from_raw(bits >> 16 * half))


def said_again(error: SourceError, made: Mapping[str, str]) -> Unclear:
    """An expression's problem, with what the user wrote instead of what was put in."""
    problem = error.problems[0]
    found, remedy = problem.found, problem.remedy
    for name, spelled in made.items():
        found, remedy = found.replace(name, spelled), remedy.replace(name, spelled)
    return Unclear(attrs.evolve(problem, found=found, remedy=remedy))


def term(names: Names, text: str, made: Mapping[str, str] = {}) -> Term:
    """Parse an expression; ``made`` are names that stand for events already put into ``text``.

    Raises :class:`Unclear`.
    """
    spelled: dict[str, str] = dict(made)
    halves: dict[str, tuple[int, int]] = {}

    def half(match: re.Match[str]) -> str:
        name = f"half_{match[1]}_{match[2]}"
        halves[name] = names.register(match[1]), ("lo", "hi").index(match[2])
        spelled[name] = match[0]
        return name

    written = _HALF.sub(half, text)
    if _PASS.search(written):
        written = _PASS.sub("pass_", written)
        spelled["pass_"] = "pass"
    try:
        parsed = formula(written)
    except SourceError as error:
        raise said_again(error, spelled) from None
    known = {*names.all(), *spelled}
    for name in sorted(parsed.names):
        if name not in known:
            words = (*names.all(), *FUNCTIONS, *CONSTANTS)
            allowed = "registers, " + ", ".join(filter(None, ("arrays " + listed(names.arrays), "sizes, cycle, pass")))
            raise unclear(f"{name} means nothing here", allowed, nearest(name, words), name="unknown-name")
        if name in names.arrays and re.search(rf"\b{name}\b(?!\s*\[)", _REFERENCE.sub("", written)):
            raise unclear(f"{name} is an array", "one element", f"{name}[0]", name="needs-index")
    for reference in sorted(parsed.references):
        if reference not in names.fixed:
            raise unclear(f"{reference} has no value here", listed(f"{r}(x)" for r in REFERENCES), name="unknown-name")
    return Term(text.strip(), parsed, spelled, halves)
