"""Operation tables: reading ``isa/operations/*.toml`` and a user's own files.

Shipped files are trusted to be well-formed (a test validates them whole), so that loading a core costs next to
nothing: a file is only cut at its ``[headers]``, and an operation is parsed when it is first asked for. A user's file
is read and checked whole, its meanings and examples included, and refused with every mistake it has.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import attrs

from vliwsim.description.examples import check_examples, examples_of
from vliwsim.description.language.faults import Origin
from vliwsim.description.language.meaning import read_meaning
from vliwsim.description.operations import Operation, OperationSet
from vliwsim.problems import OperationError, Place, Problem

__all__ = ["check_examples", "load_operations", "validate"]

GREATEST_CODE = 1023
LARGEST_FILE = 1 << 20
KEYS = ("code", "class", "operands", "does", "examples", "summary")
_REQUIRED = ("code", "class", "operands", "does", "summary")
_LATENCY_ONLY = ("update", "branch", "otherwise")

_HEADER = re.compile(r"^[ \t]*\[[ \t]*([A-Za-z][^\[\]\n]*?)[ \t]*\][ \t]*(?:#[^\n]*)?$", re.MULTILINE)
_CODE = re.compile(r"^[ \t]*code[ \t]*=[ \t]*(0x[0-9A-Fa-f]+|[0-9]+)", re.MULTILINE)
_CLASS = re.compile(r'^[ \t]*class[ \t]*=[ \t]*"([^"\n]*)"', re.MULTILINE)
_KEY_LINE = r"^[ \t]*{}[ \t]*=[ \t]*"
_NAME = re.compile(r"[a-z][a-z0-9_]*(\.[a-z0-9_]+)*\Z", re.ASCII)
_CLASS_NAME = re.compile(r"[a-z][a-z0-9_]*\Z", re.ASCII)


@attrs.define(eq=False)
class _File:
    """One table file: ``text`` without carriage returns, default class, where its tables begin."""

    path: str
    family: str
    text: str
    rows: list[_Row] = attrs.field(factory=list)
    default_class: str = ""

    def place(self, offset: int) -> Place:
        start = self.text.rfind("\n", 0, offset) + 1
        return Place(self.path, self.text.count("\n", 0, offset) + 1, offset - start + 1)


@attrs.define(eq=False)
class _Row:
    """One operation not yet built. ``start`` to ``end``: its part of the file's text, the header first."""

    file: _File
    name: str
    code: int
    start: int
    end: int
    data: Mapping[str, object] | None = None
    built: Operation | None = None

    def place(self, key: str = "") -> Place:
        found = self.key_match(key) if key else None
        return self.file.place(found.start(1) if found else self.start)

    def key_match(self, key: str) -> re.Match[str] | None:
        pattern = re.compile(rf"^[ \t]*({re.escape(key)})[ \t]*=[ \t]*", re.MULTILINE)
        return pattern.search(self.file.text, self.start, self.end)

    def origin(self, key: str) -> Origin:
        """Where the string of ``key`` begins, past its quotes."""
        found = self.key_match(key)
        if found is None:
            return Origin(self.file.path, self.name, self.place().line)
        at = found.end()
        quotes = 3 if self.file.text[at : at + 3] in ('"""', "'''") else 1
        at += quotes
        if quotes == 3 and self.file.text[at : at + 1] == "\n":
            at += 1
        place = self.file.place(at)
        return Origin(self.file.path, self.name, place.line, place.column)


class _Lazy(Mapping[Any, Operation]):
    """Operations by name or code, each built when first asked for."""

    def __init__(self, rows: Mapping[object, _Row]) -> None:
        self._rows = rows

    def __getitem__(self, key: Any) -> Operation:
        row = self._rows[key]
        return row.built or _build(row)

    def __iter__(self) -> Iterator[Any]:
        return iter(self._rows)

    def __len__(self) -> int:
        return len(self._rows)

    def __contains__(self, key: object) -> bool:
        return key in self._rows


_files: dict[tuple[str, bytes], _File] = {}
"""Files read before, by path and content, so that cores share built operations."""


def load_operations(names: Sequence[str]) -> OperationSet:
    """The operations of the named files: shipped families by name, others by path (``my_ops.toml``).

    Raises :class:`OperationError` with every mistake of a user's file, and for names or codes that two files share.
    """
    files: list[_File] = []
    problems: list[Problem] = []
    digest = hashlib.sha256()
    for name in dict.fromkeys(names):
        try:
            path, shipped = _find(name)
            content = _read(path)
            digest.update(hashlib.sha256(content).digest())
            files.append(_file(path, content, shipped))
        except OperationError as error:
            problems.extend(error.problems)
    by_name, by_code = _merged(files, problems)
    if problems:
        raise OperationError(problems)
    return OperationSet(_Lazy(by_name), _Lazy(by_code), digest.hexdigest())


def validate(operations: OperationSet) -> list[Problem]:
    """Everything wrong with a set: builds, checks and compiles each operation and runs its examples."""
    assert isinstance(operations.by_name, _Lazy)
    problems: list[Problem] = []
    files: dict[int, _File] = {}
    for row in operations.by_name._rows.values():
        files[id(row.file)] = row.file
    for file in files.values():
        problems.extend(_validated(_File(file.path, file.family, file.text)))
    return problems


def _merged(files: Sequence[_File], problems: list[Problem]) -> tuple[dict[object, _Row], dict[object, _Row]]:
    by_name: dict[object, _Row] = {}
    by_code: dict[object, _Row] = {}
    for file in files:
        for row in file.rows:
            for table, key, what, shown in (
                (by_name, row.name, "name", row.name),
                (by_code, row.code, "code", f"{row.code:#x}"),
            ):
                other = table.setdefault(key, row)
                if other is not row:
                    problems.append(
                        Problem(
                            f"{what}-taken",
                            f"{what} {shown}, which {other.name} of {other.file.path} has",
                            f"each {what} once in a core",
                            place=row.place("code" if what == "code" else ""),
                            key=row.name,
                        )  # fmt: skip
                    )
    return by_name, by_code


# Files


def _find(name: str) -> tuple[Path, bool]:
    """The path of a file by its name in a core, and whether it is shipped."""
    if name.endswith(".toml") or "/" in name or "\\" in name:
        return Path(name), False
    from vliwsim.description.places import isa_folder

    folder = isa_folder() / "operations"
    path = folder / f"{name}.toml"
    if not _CLASS_NAME.match(name) or not path.is_file():
        families = ", ".join(sorted(found.stem for found in folder.glob("*.toml")))
        raise OperationError(
            Problem("no-such-operations", f"operations {name!r:.60}", f"{families}, or a path ending in .toml")
        )
    return path, True


def _read(path: Path) -> bytes:
    try:
        with path.open("rb") as stream:
            content = stream.read(LARGEST_FILE + 1)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise OperationError(Problem("cannot-read", f"{path}: {reason}", "a file of operations (TOML)")) from None
    if len(content) > LARGEST_FILE:
        raise OperationError(
            Problem("cannot-read", f"{path}: more than {LARGEST_FILE} bytes", f"at most {LARGEST_FILE}")
        )
    return content


def _file(path: Path, content: bytes, shipped: bool) -> _File:
    key = (str(path), hashlib.sha256(content).digest())
    found = _files.get(key)
    if found is not None:
        return found
    try:
        text = content.decode("utf-8").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise OperationError(
            Problem("bad-toml", f"byte {content[error.start]:#x}", "UTF-8 text", place=Place(str(path), line))
        ) from None
    file = _File(str(path), path.stem, text)
    if not (shipped and _scan(file)):
        file = _File(str(path), path.stem, text)
        problems = _validated(file)
        if problems:
            raise OperationError(problems)
    _files[key] = file
    return file


def _scan(file: _File) -> bool:
    """Cuts the file at its headers; False where that is not enough to know its operations' names and codes."""
    headers = list(_HEADER.finditer(file.text))
    if not headers:
        return False
    given = _CLASS.search(file.text, 0, headers[0].start())
    file.default_class = given.group(1) if given else ""
    for header, after in zip(headers, [*headers[1:], None]):
        end = after.start() if after else len(file.text)
        code = _CODE.search(file.text, header.end(), end)
        if code is None or not _NAME.match(header.group(1)):
            return False
        file.rows.append(_Row(file, header.group(1), int(code.group(1), 0), header.start(), end))
    return len({row.name for row in file.rows}) == len(file.rows)


def _validated(file: _File) -> list[Problem]:
    """Reads the whole file as TOML and checks everything; fills the file's rows."""
    import tomllib

    try:
        data = tomllib.loads(file.text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"\(at line (\d+), column (\d+)\)", str(error))
        place = Place(file.path, int(found.group(1)), int(found.group(2))) if found else Place(file.path)
        text = re.sub(r" \(at .*\)", "", str(error))
        lines = file.text.split("\n")
        excerpt = lines[place.line - 1][:200] if place.line <= len(lines) else ""
        return [Problem("bad-toml", text[:200], "TOML", place=place, excerpt=excerpt)]
    except (RecursionError, ValueError):
        return [Problem("bad-toml", "nesting too deep or a number too long", "TOML", place=Place(file.path))]
    problems: list[Problem] = []
    default = data.pop("class", "")
    if not isinstance(default, str) or (default and not _CLASS_NAME.match(default)):
        problems.append(
            Problem(
                "bad-value", f"class {default!r:.60}", "a word such as arithmetic", place=Place(file.path), key="class"
            )
        )
        default = ""
    file.default_class = default
    spans = _spans(file.text)
    _collect(file, data, (), spans, problems)
    if not file.rows and not problems:
        problems.append(Problem("nothing-said", "no operation", "a table [name] with code, class, operands, does, summary",
                                place=Place(file.path)))  # fmt: skip
    for row in file.rows:
        problems.extend(_validated_row(row))
    _merged([file], problems)
    return problems


def _spans(text: str) -> dict[str, tuple[int, int]]:
    """From table names to their part of the text."""
    headers = list(_HEADER.finditer(text))
    ends = [header.start() for header in headers[1:]] + [len(text)]
    return {re.sub(r"[\s\"']", "", h.group(1)): (h.start(), end) for h, end in zip(headers, ends)}


def _collect(
    file: _File,
    table: Mapping[str, object],
    path: tuple[str, ...],
    spans: Mapping[str, tuple[int, int]],
    problems: list[Problem],
) -> None:
    """Finds the operations of a table and its sub-tables."""
    name = ".".join(path)
    own = {key: value for key, value in table.items() if not isinstance(value, dict) or key in KEYS}
    if len(path) > 6:
        problems.append(Problem("bad-name", f"{name[:60]}", "at most six parts", place=Place(file.path), key=name[:60]))
        return
    if path and own:
        start, end = spans.get(name, (0, 0))
        row = _Row(file, name, 0, start, end, own)
        file.rows.append(row)
        if not _NAME.match(name) or len(name) > 40:
            problems.append(Problem("bad-name", f"{name!r:.60}", "small letters, digits and _, parts joined by dots, at most 40",
                                    place=row.place(), key=name[:60]))  # fmt: skip
    elif own:
        problems.extend(
            Problem(
                "unknown-key",
                f"{key!r:.60} outside a table",
                "class, then tables",
                place=Place(file.path),
                key=key[:60],
            )
            for key in own
        )
    for key, value in table.items():
        if isinstance(value, dict) and key not in (KEYS if path else ()):
            _collect(file, value, (*path, key), spans, problems)


# Rows


def _validated_row(row: _Row) -> list[Problem]:
    """Everything wrong with one operation; its code is taken from the data."""
    data = row.data or {}
    problems = _shape(row, data)
    code = data.get("code")
    row.code = code if type(code) is int else -1 - id(row)
    if problems:
        return problems
    try:
        operation = _build(row)
        operation.compiled()
    except OperationError as error:
        return list(error.problems)
    return check_examples(operation, row.place("examples"))


def _shape(row: _Row, data: Mapping[str, object]) -> list[Problem]:
    """Mistakes in the keys of a row, before its meaning is read."""
    problems: list[Problem] = []

    def bad(name: str, key: str, found: str, allowed: str) -> None:
        problems.append(Problem(name, found, allowed, place=row.place(key), key=f"{row.name}.{key}"[:80]))

    for key in data:
        if key not in KEYS:
            bad("unknown-key", key, f"{key!r:.60}", ", ".join(KEYS))
    for key in _REQUIRED:
        if key not in data and not (key == "class" and row.file.default_class):
            bad("missing-key", key, f"no {key}", ", ".join(_REQUIRED))
    for key in ("class", "operands", "does", "summary"):
        if key in data and not isinstance(data[key], str):
            bad("bad-value", key, f"{data[key]!r:.60}", "text in quotes")
    code = data.get("code", 1)
    if type(code) is not int or not 1 <= code <= GREATEST_CODE:
        bad("bad-value", "code", f"{code!r:.60}", f"1 to {GREATEST_CODE}")
    kind = data.get("class", "arithmetic")
    if isinstance(kind, str) and (not _CLASS_NAME.match(kind) or kind in _LATENCY_ONLY):
        bad("bad-value", "class", f"{kind!r:.60}", "a word such as arithmetic, not " + ", ".join(_LATENCY_ONLY))
    summary = data.get("summary", "x")
    if isinstance(summary, str) and not (summary.strip() and summary.isprintable() and len(summary) <= 200):
        bad("bad-value", "summary", f"{summary!r:.60}", "one line of at most 200 characters")
    if not isinstance(data.get("examples", []), list):
        bad("bad-value", "examples", f"{data['examples']!r:.60}", "a list of [[inputs], [outputs]]")
    return problems


def _build(row: _Row) -> Operation:
    """The operation of a row; raises :class:`OperationError` where its operands or meaning are malformed."""
    if row.data is None:
        row.data = _parsed(row)
        problems = _shape(row, row.data)
        if problems:
            raise OperationError(problems)
    data, origin = row.data, row.origin("does")
    operands, does = str(data["operands"]), str(data["does"])
    try:
        meaning = read_meaning(row.name, operands, does, origin)
    except OperationError as error:
        raise OperationError(_replaced(row, problem) for problem in error.problems) from None
    row.built = Operation(
        name=row.name,
        code=row.code,
        operation_class=str(data.get("class") or row.file.default_class),
        operands=meaning.operands,
        kind=meaning.kind,
        access=meaning.access,
        inputs=meaning.inputs,
        outputs=meaning.outputs,
        summary=str(data["summary"]),
        does=does,
        examples=examples_of(data.get("examples", ())),
        family=row.file.family,
        file=row.file.path,
        meaning=meaning,
    )
    return row.built


def _parsed(row: _Row) -> Mapping[str, object]:
    """The keys of a row of a file that was only cut at its headers."""
    import tomllib

    start = row.file.text.find("\n", row.start) + 1
    try:
        return tomllib.loads(row.file.text[start : row.end]) if start else {}
    except tomllib.TOMLDecodeError as error:
        raise OperationError(Problem("bad-toml", str(error)[:200], "TOML", place=row.place(), key=row.name)) from None


def _replaced(row: _Row, problem: Problem) -> Problem:
    """A problem of the operands, moved to where they stand."""
    if not problem.key.endswith(".operands") or problem.place is None:
        return problem
    origin = row.origin("operands")
    column = origin.column + problem.place.column - row.origin("does").column
    return attrs.evolve(problem, place=Place(origin.file, origin.line, max(1, column)))
