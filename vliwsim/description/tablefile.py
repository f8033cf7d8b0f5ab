"""Files of operations: finding them, cutting the shipped ones at their headers, checking a user's whole."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterable, Mapping
from pathlib import Path

from vliwsim.description.examples import brief, check_examples
from vliwsim.description.files import open_regular
from vliwsim.description.language.tree import Iterate, Node
from vliwsim.description.tablerows import (
    CLASS_NAME,
    GREATEST_CODE,
    KEYS,
    NAME,
    Row,
    TableFile,
    class_fault,
    shape_problems,
    text_problems,
)
from vliwsim.problems import OperationError, Place, Problem

LARGEST_FILE = 1 << 19
MOST_PROBLEMS = 100
MOST_STEPS = 3_000_000
"""Parts of meanings that the examples of one file may compute."""

_HEADER = re.compile(r"^[ \t]*\[[ \t]*([A-Za-z][^\[\]\n]*?)[ \t]*\][ \t]*(?:#[^\n]*)?$", re.MULTILINE)
_CODE = re.compile(r"^[ \t]*code[ \t]*=[ \t]*(0x[0-9A-Fa-f]{1,8}|[0-9]{1,8})\b", re.MULTILINE)
_CLASS = re.compile(r'^[ \t]*class[ \t]*=[ \t]*"([^"\n]*)"', re.MULTILINE)

_files: dict[tuple[str, bytes], TableFile] = {}
"""Files read before, by path and content, so that cores share built operations."""


def table_file(name: str) -> tuple[TableFile, bytes]:
    """The file that a core's ``operations`` names, and the hash of its content.

    Raises :class:`OperationError`: there is none, or it is a user's and has mistakes.
    """
    path, shipped = _find(name)
    content = _read(path)
    key = (str(path), hashlib.sha256(content).digest())
    found = _files.get(key)
    if found is None:
        file = TableFile(str(path), path.stem, _text(path, content))
        if not (shipped and _scan(file)):
            file.rows.clear()
            if problems := check_file(file):
                raise OperationError(problems)
        found = _files[key] = file
    return found, key[1]


def _find(name: str) -> tuple[Path, bool]:
    """The path of a file by its name in a core, and whether it is shipped."""
    if name.endswith(".toml") or "/" in name or "\\" in name:
        return Path(name), False
    from vliwsim.description.places import isa_folder

    folder = isa_folder() / "operations"
    path = folder / f"{name}.toml"
    if not CLASS_NAME.match(name) or len(name) > 60 or not path.is_file():
        families = ", ".join(sorted(found.stem for found in folder.glob("*.toml")))
        raise OperationError(
            Problem("no-such-operations", f"operations {brief(name)}", f"{families}, or a path ending in .toml")
        )
    return path, True


def _read(path: Path) -> bytes:
    try:
        with open_regular(path) as stream:
            content = stream.read(LARGEST_FILE + 1)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise OperationError(Problem("cannot-read", f"{str(path)[:200]}: {reason}", "a file of operations")) from None
    if len(content) > LARGEST_FILE:
        raise OperationError(
            Problem("cannot-read", f"{path}: more than {LARGEST_FILE} bytes", f"at most {LARGEST_FILE}")
        )
    return content


def _text(path: Path, content: bytes) -> str:
    try:
        return content.decode("utf-8").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        place = Place(str(path), content.count(b"\n", 0, error.start) + 1)
        raise OperationError(
            Problem("bad-toml", f"byte {content[error.start]:#x}", "UTF-8 text", place=place)
        ) from None


def _scan(file: TableFile) -> bool:
    """Cuts the file at its headers; False where that is not enough to know its operations' names and codes."""
    headers = list(_HEADER.finditer(file.text))
    if not headers:
        return False
    given = _CLASS.search(file.text, 0, headers[0].start())
    file.default_class = given.group(1) if given else ""
    for header, after in zip(headers, [*headers[1:], None]):
        end = after.start() if after else len(file.text)
        code = _CODE.search(file.text, header.end(), end)
        if code is None or not NAME.match(header.group(1)):
            return False
        file.rows.append(Row(file, header.group(1), int(code.group(1), 0), header.start(), end))
    return len({row.name for row in file.rows}) == len(file.rows)


def check_file(file: TableFile) -> list[Problem]:
    """Reads the whole file as TOML, fills its rows, and gives everything wrong with it: keys, meanings, examples."""
    import tomllib

    try:
        data = tomllib.loads(file.text)
    except tomllib.TOMLDecodeError as error:
        return [_toml_problem(file, str(error))]
    except (RecursionError, ValueError):
        return [Problem("bad-toml", "nesting too deep or a number too long", "TOML", place=Place(file.path))]
    problems: list[Problem] = []
    if "class" in data:
        default = data.pop("class")
        if wrong := class_fault(default):
            problems.append(Problem("bad-value", brief(default), wrong, place=Place(file.path), key="class"))
        else:
            file.default_class = default
    _collect(file, data, (), _spans(file.text), problems)
    if not file.rows and not problems:
        problems.append(
            Problem("nothing-said", "no operation", f"tables with {', '.join(KEYS)}", place=Place(file.path))
        )
    if len(file.rows) > GREATEST_CODE:
        return [Problem("too-many", f"{len(file.rows)} operations", f"at most {GREATEST_CODE}", place=Place(file.path))]
    _check_rows(file, problems)
    merge([file], problems)
    return problems[:MOST_PROBLEMS]


def _check_rows(file: TableFile, problems: list[Problem]) -> None:
    steps = 0
    for row in file.rows:
        wrong = shape_problems(row)
        code = (row.data or {}).get("code")
        row.code = code if type(code) is int else 0
        if wrong:
            wrong += text_problems(row)
        else:
            try:
                operation = row.operation()
                operation.compiled()
                steps += len(operation.examples) * sum(_steps(a.value) for a in operation.meaning.statements)
                if steps > MOST_STEPS:
                    problems.append(_too_long(row))
                    return
                wrong = check_examples(operation, row.place("examples"))
            except OperationError as error:
                wrong = list(error.problems)
        problems.extend(wrong)
        if len(problems) >= MOST_PROBLEMS:
            return


def _too_long(row: Row) -> Problem:
    place = row.place("examples")
    return Problem("too-long", "examples that take too long", "fewer examples or iterations", place=place, key=row.name)


def _steps(node: Node) -> int:
    """How many nodes are computed at most."""
    if isinstance(node, Iterate):
        return 1 + _steps(node.start) + node.count * _steps(node.step)
    return 1 + sum(_steps(child) for child in node.children())


def _toml_problem(file: TableFile, message: str) -> Problem:
    """What the TOML reader says, at its place."""
    found = re.search(r"\(at line (\d+), column (\d+)\)", message)
    place = Place(file.path, int(found.group(1)), int(found.group(2))) if found else Place(file.path)
    lines = file.text.split("\n")
    excerpt = lines[place.line - 1][:200] if place.line <= len(lines) else ""
    return Problem("bad-toml", re.sub(r" \(at .*\)", "", message)[:200], "TOML", place=place, excerpt=excerpt)


def _spans(text: str) -> dict[str, tuple[int, int]]:
    """From table names to their part of the text."""
    headers = list(_HEADER.finditer(text))
    ends = [header.start() for header in headers[1:]] + [len(text)]
    return {re.sub(r"[\s\"']", "", h.group(1)): (h.start(), end) for h, end in zip(headers, ends)}


def _collect(
    file: TableFile,
    table: Mapping[str, object],
    path: tuple[str, ...],
    spans: Mapping[str, tuple[int, int]],
    problems: list[Problem],
) -> None:
    """Finds the operations of a table and its sub-tables."""
    name = ".".join(path)
    own = {key: value for key, value in table.items() if not isinstance(value, dict) or (path and key in KEYS)}
    start, end = spans.get(name, (0, 0))
    if path and own:
        file.rows.append(Row(file, name, 0, start, end, own))
    elif own:
        problems.extend(
            Problem(
                "unknown-key",
                f"{brief(key)} outside a table",
                "class, then tables",
                place=Place(file.path),
                key=key[:60],
            )
            for key in own
        )
    if path and (not NAME.match(name) or len(name) > 40 or len(path) > 6):
        allowed = "at most 40 small letters, digits and _, in up to six parts joined by dots"
        problems.append(Problem("bad-name", brief(name), allowed, place=file.place(start), key=name[:60]))
        return
    for key, value in table.items():
        if isinstance(value, dict) and key not in own:
            _collect(file, value, (*path, key), spans, problems)


def merge(files: Iterable[TableFile], problems: list[Problem]) -> tuple[dict[str, Row], dict[int, Row]]:
    """All rows by name and by code; what is taken twice goes to ``problems``."""
    by_name: dict[str, Row] = {}
    by_code: dict[int, Row] = {}
    for file in files:
        for row in file.rows:
            other = by_name.setdefault(row.name, row)
            if other is not row:
                problems.append(_taken("name", row.name, row, other))
            other = by_code.setdefault(row.code, row)
            if other is not row and row.code:
                problems.append(_taken("code", f"{row.code:#x}", row, other))
    return by_name, by_code


def _taken(what: str, shown: str, row: Row, other: Row) -> Problem:
    place = row.place("code" if what == "code" else "")
    holder = f"{other.name} at {other.place()}"
    return Problem(
        f"{what}-taken", f"{what} {shown}, which {holder} has", f"each {what} once", place=place, key=row.name
    )
