"""What names mean in a source: registers and their aliases, constants, and the core's latencies."""

from __future__ import annotations

import re
from collections.abc import Iterable

from vliwsim.description.core import Core
from vliwsim.description.operations import OperationSet
from vliwsim.problems import SourceError
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.expressions import RESERVED, Formula, formula
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.tree import Let, Name

CLASSES = ("arithmetic", "shift", "multiply", "divide", "load", "store", "control", "float", "float_divide")
"""The classes of the shipped operations; a core's own stand in its slots and latencies."""

_LATENCY_OF = re.compile(r"latency\(\s*([\w.]+)\s*\)")


def latencies(core: Core, operations: OperationSet) -> dict[str, object]:
    """Beats by operation class, with ``update`` and ``branch``."""
    # from the core alone: asking every operation for its class would build them all
    classes = {*CLASSES, "update", *core.latency.classes, *(name for slot in core.slots for name in slot.classes)}
    found: dict[str, object] = {name: core.latency.of_class(name) for name in sorted(classes)}
    found["branch"] = core.branch.latency
    return found


class Scope:
    """The names of one source on one core; ``constants`` are the ``let`` names alone, ``names`` the aliases.

    ``environment`` is what formulas of the schedule see: constants, latencies, and the variables of ``repeat``.
    """

    def __init__(self, core: Core, operations: OperationSet, complaints: Complaints) -> None:
        self.core = core
        self.operations = operations
        self.complaints = complaints
        self.latencies = latencies(core, operations)
        self.constants: dict[str, object] = {}
        self.names: dict[str, int] = {}
        self.environment: dict[str, object] = dict(self.latencies)
        self.registers: dict[str, int] = dict(core.register_numbers)
        self._formulas: dict[str, Formula] = {}
        self._later: dict[str, int] = {}
        """Lines of ``let`` and ``name`` definitions further down, for the diagnostics."""

    def expect(self, definitions: Iterable[Let | Name]) -> None:
        """Definitions that will come, so that a use before them can say so."""
        for definition in definitions:
            self._later.setdefault(definition.name.text, definition.name.line)

    def parsed(self, piece: Piece, bound: dict[str, object]) -> Formula | None:
        """A formula with ``bound`` names fixed; None, with the problem told, when it is refused."""
        complaints = self.complaints
        place = complaints.place(piece.line, piece.column, len(piece.text))
        if "latency(" in piece.text:
            bound = {**bound, **self._latencies_in(piece)}
        try:
            return formula(piece.text, place, bound, complaints.excerpt(piece.line))
        except SourceError as error:
            for problem in error.problems:
                complaints.take(problem)
            return None

    def _latencies_in(self, piece: Piece) -> dict[str, object]:
        """Values of the ``latency(operation)`` references in a text, also put into the environment."""
        found: dict[str, object] = {}
        for match in _LATENCY_OF.finditer(piece.text):
            operation = self.operations.by_name.get(match[1])
            if operation:
                key = f"latency({match[1]})"
                found[key] = self.core.latency.of(operation.name, operation.operation_class)
        self.environment.update(found)
        return found

    def value(self, piece: Piece) -> int | float | None:
        """The value of an expression of the schedule now; None, with the problem told, when it has none."""
        text = piece.text
        parsed = self._formulas.get(text)
        if parsed is None:
            parsed = self.parsed(piece, {})
            if parsed is None:
                return None
            self._formulas[text] = parsed
        try:
            value: int | float = parsed.within(self.environment)
        except SourceError as error:
            unknown = [*(parsed.names - self.environment.keys()), *(parsed.references - self.environment.keys())]
            if unknown:
                self.unknown(min(unknown), piece)
            else:
                self._tell(error, piece)
            return None
        return value

    def _tell(self, error: SourceError, piece: Piece) -> None:
        """A problem of a shared formula, told at the piece that uses it."""
        for problem in error.problems:
            self.complaints.add(problem.name, piece.where, problem.found, problem.allowed, problem.remedy)

    def unknown(self, name: str, piece: Piece) -> None:
        """Tell that ``name``, somewhere in ``piece``, means nothing here."""
        where = re.search(rf"(?<![\w.]){re.escape(name)}(?![\w.])", piece.text)
        column = piece.column + (where.start() if where else 0)
        remedy = self.complaints.nearest(name, self.environment)
        if name in self._later:
            remedy = f"its definition, line {self._later[name]}, above this line"
        allowed = "let names, repeat variables and the core's latencies: " + " ".join(sorted(self.latencies))
        self.complaints.add(
            "unknown-name", (piece.line, column, len(name)), f"{name} means nothing here", allowed, remedy
        )

    def define(self, let: Let) -> None:
        """Take a ``let``."""
        if self.taken(let.name):
            return
        value = self.value(let.expression)
        self.constants[let.name.text] = self.environment[let.name.text] = 0 if value is None else value

    def define_name(self, name: Name) -> None:
        """Take a ``name``."""
        text = name.name.text
        number = self.register(name.register)
        if self.taken(name.name):
            return
        if number is not None:
            self.names[text] = self.registers[text] = number
        else:
            self.registers[text] = 0

    def taken(self, name: Piece) -> bool:
        """Whether a name has a meaning already; if so, that is told."""
        text = name.text
        taken = (
            "a register"
            if text in self.core.register_numbers
            else "a name of this file"
            if text in self.registers or text in self.constants
            else "a latency"
            if text in self.latencies
            else "a word of the language"
            if text in RESERVED
            else ""
        )
        if taken:
            self.complaints.add("name-taken", name.where, f"{text} is {taken}", "a name that is free")
        return bool(taken)

    def register(self, piece: Piece) -> int | None:
        """The number of a register or alias; None, with the problem told, when there is none."""
        number = self.registers.get(piece.text)
        if number is None:
            self.unknown_register(piece)
        return number

    def unknown_register(self, piece: Piece) -> None:
        remedy = self.complaints.nearest(piece.text, self.registers)
        if piece.text in self._later:
            remedy = f"its definition, line {self._later[piece.text]}, above this line"
        allowed = "registers " + " ".join(f"{c.name}0..{c.name}{c.registers - 1}" for c in self.core.clusters)
        self.complaints.add(
            "unknown-register",
            piece.where,
            f"{piece.text} is no register" if piece.text else "no register",
            allowed,
            remedy,
        )
