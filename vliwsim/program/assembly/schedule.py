"""The schedule: unrolls ``repeat``, evaluates stamps, and puts every operation into its beat."""

from __future__ import annotations

import re
from collections.abc import Iterable

import attrs

from vliwsim.program.assembly.operands import OperandReader, Ready
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.scope import Scope
from vliwsim.program.source.tree import Call, Idle, Label, Let, Name, Node, Repeat, Stamp

MOST_BEATS = 1 << 24
"""The latest stamp of a section."""
MOST_STEPS = 1 << 16
"""Lines and passes of a source after unrolling: some seconds of work."""

_NAMES = re.compile(r"[A-Za-z_]\w*")


@attrs.define(eq=False, repr=False)
class Section:
    """A labelled stretch: its operations by beat, and its length in beats."""

    label: Piece
    bundles: dict[int, list[Ready]] = attrs.field(factory=dict)
    beats: int = 0


class TooMuch(Exception):
    """Unrolling goes beyond the bound."""


def schedule(body: list[Node], scope: Scope) -> list[Section]:
    """The sections of a source, in order; problems are told."""
    labels = _labels(body, scope)
    scope.expect(node for node in body if isinstance(node, Let | Name))
    maker = _Maker(scope, OperandReader(scope, labels))
    try:
        maker.walk(body, frozenset())
    except TooMuch as place:
        found = f"more than {MOST_STEPS} lines after unrolling"
        scope.complaints.add("too-long", place.args[0], found, f"at most {MOST_STEPS}", "a loop")
    return maker.sections


def _labels(body: Iterable[Node], scope: Scope) -> set[str]:
    """Every label's name; a second one of a name, or one that is a register's, is told."""
    lines: dict[str, int] = {}
    for node in body:
        if isinstance(node, Label):
            name = node.name
            if name.text in lines:
                found = f"label {name.text} is at line {lines[name.text]} already"
                scope.complaints.add("label-twice", name.where, found, "each label once")
            elif name.text in scope.registers:
                found = f"label {name.text} is a register's name"
                scope.complaints.add("name-taken", name.where, found, "a name that is free")
            lines.setdefault(name.text, name.line)
    return set(lines)


class _Maker:
    def __init__(self, scope: Scope, reader: OperandReader) -> None:
        self.scope = scope
        self.reader = reader
        self.complaints: Complaints = scope.complaints
        self.sections: list[Section] = []
        self.beat: int | None = None
        self.has_stamp = False
        self.steps = 0
        self._same: dict[int, Ready] = {}
        """What lines of a repeat that do not use its variable have become, by identity of the line."""
        self._refused: set[int] = set()
        """Identities of operations and stamps whose problems have been told: one pass of a repeat is enough."""

    def walk(self, nodes: list[Node], variables: frozenset[str]) -> None:
        """Take the lines in order; ``variables`` are those of the repeats around them."""
        for node in nodes:
            self.steps += 1
            kind = type(node)
            if kind is Call:
                self.call(node, variables)  # type: ignore[arg-type]
            elif kind is Stamp:
                self.stamp(node.expression)  # type: ignore[union-attr]
            elif isinstance(node, Repeat):
                self.repeat(node, variables)
            elif isinstance(node, Label):
                self.sections.append(Section(node.name))
                self.beat, self.has_stamp = None, False
            elif isinstance(node, Idle):
                self.at(node.word)
            elif isinstance(node, Let):
                self.scope.define(node)
            elif isinstance(node, Name):
                self.scope.define_name(node)

    def stamp(self, piece: Piece) -> None:
        text = piece.text
        self.has_stamp = True
        self.beat = None
        if not text or id(piece) in self._refused:
            return
        value = int(text) if text.isdecimal() and len(text) < 9 else self.reader.integer(piece)
        if value is None:
            self._refused.add(id(piece))
            return
        if not 0 <= value < MOST_BEATS:
            found = f"@{text}" if str(value) == text else f"@{text} is beat {value}"
            self.complaints.add("bad-stamp", piece.where, found, f"beats 0 to {MOST_BEATS - 1}")
        else:
            self.beat = value

    def at(self, piece: Piece) -> int | None:
        """The beat of the line at ``piece``; its section lasts at least that long."""
        if self.beat is None:
            if not self.has_stamp:
                found = "no beat: neither here nor above, since the label"
                self.complaints.add("no-stamp", piece.where, found, "@BEAT first", f"@0 {piece.text}")
                self.beat, self.has_stamp = 0, True
            return self.beat
        section = self.sections[-1]
        if section.beats <= self.beat:
            section.beats = self.beat + 1
        return self.beat

    def call(self, call: Call, variables: frozenset[str]) -> None:
        beat = self.at(call.mnemonic)
        ready = self._same.get(id(call))
        if ready is None and id(call) not in self._refused:
            ready = self.reader.read(call)
            if ready is None:
                self._refused.add(id(call))
            elif variables and not _uses(call, variables):
                self._same[id(call)] = ready
        if ready is not None and beat is not None:
            self.sections[-1].bundles.setdefault(beat, []).append(ready)

    def repeat(self, node: Repeat, variables: frozenset[str]) -> None:
        count = self.reader.integer(node.times)
        if count is None:
            count = 1
        elif count < 0:
            self.complaints.add("bad-repeat", node.times.where, f"repeat {count} times", "0 times or more")
            count = 0
        environment, name = self.scope.environment, node.variable.text if node.variable else None
        if node.variable and (name in environment or name in self.scope.registers):
            found = f"{name} has a meaning already"
            self.complaints.add("name-taken", node.variable.where, found, "a variable name that is free")
            name = None
        inside = variables | {name} if name else variables
        # repeats inside are not counted here: they do it themselves
        too_much = self.steps + count * (1 + len(node.body)) > MOST_STEPS
        for index in range(1 if too_much else count):
            self.steps += 1
            if name:
                environment[name] = index
            self.walk(node.body, inside)
        if name:
            environment.pop(name, None)
        if too_much:  # one pass has shown what else is wrong
            raise TooMuch(node.times.where)
        if not count:
            self._look(node, inside, name)

    def _look(self, node: Repeat, inside: frozenset[str], name: str | None) -> None:
        """Read the lines of a repeat of no passes for their problems, and place nothing."""
        sections, beat, has_stamp = self.sections, self.beat, self.has_stamp
        self.sections = [Section(node.times)]
        if name:
            self.scope.environment[name] = 0
        self.walk(node.body, inside)
        if name:
            self.scope.environment.pop(name, None)
        self.sections, self.beat, self.has_stamp = sections, beat, has_stamp


def _uses(call: Call, variables: frozenset[str]) -> bool:
    """Whether the text of an operation holds one of the names."""
    pieces = (*call.operands, call.guard) if call.guard else call.operands
    if call.item:
        pieces = (*pieces, call.item, *(piece for other in call.others for piece in other))
    return any(not variables.isdisjoint(_NAMES.findall(piece.text)) for piece in pieces)
