"""Rows of an operation table: where they stand in their file, what keys they have, the operation made of one."""

from __future__ import annotations

import itertools
import re
from collections.abc import Mapping

import attrs

from vliwsim.description.examples import brief, examples_of
from vliwsim.description.language.faults import Origin
from vliwsim.description.language.meaning import Meaning, read_meaning
from vliwsim.description.operations import Operation
from vliwsim.problems import OperationError, Place, Problem

GREATEST_CODE = 1023
MOST_EXAMPLES = 64
KEYS = ("code", "class", "operands", "does", "examples", "summary")
NAME = re.compile(r"[a-z][a-z0-9_]*(\.[a-z0-9_]+)*\Z", re.ASCII)
CLASS_NAME = re.compile(r"[a-z][a-z0-9_]*\Z", re.ASCII)

_REQUIRED = ("code", "class", "operands", "does", "summary")
_LATENCY_ONLY = ("update", "branch", "otherwise")


@attrs.define(eq=False, repr=False)
class TableFile:
    """One file: its ``text`` with plain newlines, its rows once known, the ``class`` of rows that name none."""

    path: str
    family: str
    text: str
    rows: list[Row] = attrs.field(factory=list)
    default_class: str = ""

    def place(self, offset: int) -> Place:
        """The place of a character of the text."""
        start = self.text.rfind("\n", 0, offset) + 1
        return Place(self.path, self.text.count("\n", 0, offset) + 1, offset - start + 1)

    def line(self, number: int) -> str:
        """The text of a line, counted from 1."""
        return next(itertools.islice(self.text.split("\n"), number - 1, None), "")


@attrs.define(eq=False, repr=False)
class Row:
    """One operation of a file, perhaps not yet built. ``start`` to ``end``: its part of the text, the header first.

    ``data``: its keys, None as long as only the header and the code were looked at.
    """

    file: TableFile
    name: str
    code: int
    start: int
    end: int
    data: Mapping[str, object] | None = None
    built: Operation | None = None

    def place(self, key: str = "") -> Place:
        """The place of a key, or of the header."""
        found = self._key(key) if key else None
        return self.file.place(found.start(1) if found else self.start)

    def _key(self, key: str) -> re.Match[str] | None:
        pattern = re.compile(rf"^[ \t]*({re.escape(key)})[ \t]*=[ \t]*", re.MULTILINE)
        return pattern.search(self.file.text, self.start, self.end)

    def origin(self, key: str) -> Origin:
        """Where the string of ``key`` begins, past its quotes."""
        found = self._key(key)
        if found is None:
            return Origin(self.file.path, self.name, self.place().line)
        at = found.end()
        quotes = 3 if self.file.text[at : at + 3] in ('"""', "'''") else 1
        at += quotes
        if quotes == 3 and self.file.text[at : at + 1] == "\n":
            at += 1
        place = self.file.place(at)
        before = self.file.text[at - place.column + 1 : at]
        return Origin(self.file.path, self.name, place.line, place.column, before)

    def operation(self) -> Operation:
        """The operation, built when first asked for; raises :class:`OperationError` with what is wrong in its texts."""
        if self.built is None:
            self.built = _build(self)
        return self.built


def _build(row: Row) -> Operation:
    if row.data is None:
        row.data = _parsed(row)
        if problems := shape_problems(row):
            raise OperationError(problems)
    data = row.data
    meaning = _meaning(row, str(data["operands"]), str(data["does"]))
    return Operation(
        name=row.name,
        code=row.code,
        operation_class=str(data.get("class") or row.file.default_class),
        operands=meaning.operands,
        kind=meaning.kind,
        access=meaning.access,
        inputs=meaning.inputs,
        outputs=meaning.outputs,
        summary=str(data["summary"]),
        does=str(data["does"]),
        examples=examples_of(data.get("examples", ())),
        family=row.file.family,
        file=row.file.path,
        meaning=meaning,
    )


def _meaning(row: Row, operands: str, does: str) -> Meaning:
    try:
        return read_meaning(row.name, operands, does, row.origin("does"))
    except OperationError as error:
        raise OperationError(_moved(row, problem) for problem in error.problems) from None


def _parsed(row: Row) -> Mapping[str, object]:
    """The keys of a row of a file that was only cut at its headers."""
    import tomllib

    start = row.file.text.find("\n", row.start) + 1
    try:
        return tomllib.loads(row.file.text[start : row.end]) if start else {}
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as error:
        raise OperationError(Problem("bad-toml", str(error)[:200], "TOML", place=row.place(), key=row.name)) from None


def _moved(row: Row, problem: Problem) -> Problem:
    """The problem with the line it is in; one of the operands is moved from the place of the meaning to theirs."""
    place = problem.place
    if place is None:
        return problem
    if problem.key.endswith(".operands"):
        origin, does = row.origin("operands"), row.origin("does")
        place = Place(origin.file, origin.line, max(1, origin.column + place.column - does.column))
    return attrs.evolve(problem, place=place, excerpt=row.file.line(place.line))


def shape_problems(row: Row) -> list[Problem]:
    """Mistakes in the keys of a row, before its meaning is read."""
    data = row.data or {}
    problems: list[Problem] = []

    def bad(name: str, key: str, found: str, allowed: str) -> None:
        place = row.place(key)
        excerpt = row.file.line(place.line)
        problems.append(Problem(name, found, allowed, place=place, key=f"{row.name}.{key}"[:80], excerpt=excerpt))

    for key in data:
        if key not in KEYS:
            bad("unknown-key", key, f"key {brief(key)}", ", ".join(KEYS))
    for key in _REQUIRED:
        if key not in data and not (key == "class" and row.file.default_class):
            bad("missing-key", key, f"no {key}", ", ".join(_REQUIRED))
    for key in ("class", "operands", "does", "summary"):
        if key in data and not isinstance(data[key], str):
            bad("bad-value", key, brief(data[key]), "text in quotes")
    code = data.get("code", 1)
    if type(code) is not int or not 1 <= code <= GREATEST_CODE:
        bad("bad-value", "code", brief(code), f"1 to {GREATEST_CODE}")
    if (wrong := class_fault(data.get("class", "arithmetic"))) and isinstance(data["class"], str):
        bad("bad-value", "class", brief(data["class"]), wrong)
    summary = data.get("summary", "x")
    if isinstance(summary, str) and not (summary.strip() and summary.isprintable() and len(summary) <= 200):
        bad("bad-value", "summary", brief(summary), "one line of at most 200 characters")
    examples = data.get("examples", [])
    if not isinstance(examples, list) or len(examples) > MOST_EXAMPLES:
        bad("bad-value", "examples", brief(examples), f"a list of at most {MOST_EXAMPLES} [[inputs], [outputs]]")
    return problems


def text_problems(row: Row) -> list[Problem]:
    """Mistakes in the operands and the meaning of a row whose keys are wrong."""
    operands, does = ((row.data or {}).get(key) for key in ("operands", "does"))
    if isinstance(operands, str) and isinstance(does, str):
        try:
            _meaning(row, operands, does)
        except OperationError as error:
            return list(error.problems)
    return []


def class_fault(name: object) -> str:
    """What is allowed, where ``name`` is no operation class."""
    if isinstance(name, str) and CLASS_NAME.match(name) and name not in _LATENCY_ONLY and len(name) <= 40:
        return ""
    return f"a word such as arithmetic; {', '.join(_LATENCY_ONLY)} are names of latencies only"
