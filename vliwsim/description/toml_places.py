"""TOML files from strangers, read safely, and the way back from a key path to its line and column.

``tomllib`` says nothing of places, so a small scanner finds them, and only when there is something to complain of. A
key path is a tuple: names of tables and keys, and for elements of an array their index, counted from 0.
"""

from __future__ import annotations

import re
import tomllib
from bisect import bisect_right
from collections.abc import Iterable, Iterator, Sequence
from functools import cached_property
from pathlib import Path

import attrs

from vliwsim.description.files import open_regular
from vliwsim.problems import Place, Problem, VliwsimError

LARGEST = 1 << 20
"""Bytes of a TOML file; a longer one is refused unread."""

LONGEST_EXCERPT = 240
"""Characters of a line that is shown in a diagnostic."""

KeyPath = tuple[str | int, ...]

_TOKEN = re.compile(
    r"""(?P<space>[ \t]+|\#[^\n]*)|(?P<line>\r?\n)
    |(?P<string>\"{3}(?:[^\\"]|\\.|\"{1,2}(?!\"))*+\"{3,5}|'{3}(?:[^']|'{1,2}(?!'))*+'{3,5}|"(?:[^"\\\n]|\\.)*+"|'[^'\n]*+')
    |(?P<mark>\[\[|\]\]|[\[\]{},=.])|(?P<bare>[^\s\[\]{},=.\#"']+)""",
    re.VERBOSE | re.DOTALL,
)
# 40 parts in one dotted key: tomllib takes quadratic time over them, and nobody means them
_LONG_KEY = re.compile(r"""(?<![\w-])(?:(?:[\w-]++|"[^"\n]*+"|'[^'\n]*+')[ \t]*+\.[ \t]*+){40}""")
_AT = re.compile(r"(.*?)\s*\(at (?:line (\d+), column (\d+)|end of document)\)", re.DOTALL)
_TUPLE = re.compile(r"\((?:'[^']*',? ?)+\)")  # how tomllib writes a dotted key
_PLAIN_KEY = re.compile(r"[A-Za-z0-9_-]+")


def key_text(path: Iterable[str | int]) -> str:
    """A key path as a person writes it: ``latency.operations."mul.half"``, ``guards.registers[2]`` (from 0)."""
    out = ""
    for part in path:
        if isinstance(part, int):
            out += f"[{part}]"
        else:
            out += ("." if out else "") + (part if _PLAIN_KEY.fullmatch(part) and len(part) < 60 else shown(part))
    return out


def shown(value: object, longest: int = 60) -> str:
    """``value`` as TOML would write it, on one line of at most about ``longest`` characters."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):  # Python refuses to write integers of thousands of digits
        return str(value) if abs(value) < 1 << 128 else f"an integer of {value.bit_length()} bits"
    if isinstance(value, str):
        cut = value if len(value) <= longest else value[: longest - 1] + "…"
        return '"' + cut.replace("\\", "\\\\").replace('"', '\\"').replace("\n", "\\n") + '"'
    if isinstance(value, dict):
        return f"a table with the keys {listed(value)}" if value else "an empty table"
    if isinstance(value, list | tuple):
        if any(isinstance(element, dict | list) for element in value) or len(value) > 8:
            return f"an array of {len(value)}"
        return "[" + ", ".join(shown(element, 20) for element in value) + "]"
    return str(value)


def listed(words: Iterable[object], most: int = 12) -> str:
    """``a, b, c`` with an ellipsis after ``most``."""
    all_words = [str(word) for word in words]
    return ", ".join(all_words[:most]) + (", …" if len(all_words) > most else "")


def nearest(word: str, known: Iterable[str]) -> str:
    """The known word most like ``word``, or ``""`` where none is."""
    import difflib  # for mistakes only

    found = difflib.get_close_matches(word[:80], list(known), n=1, cutoff=0.55)
    return found[0] if found else ""


@attrs.frozen(eq=False, slots=False)
class TomlFile:
    """A TOML file that has been read: ``data`` as ``tomllib`` gives it, and the text to point into."""

    file: str
    text: str
    data: dict[str, object]

    @cached_property
    def places(self) -> dict[KeyPath, Place]:
        """Place of every table, key and array element, in file order."""
        found: dict[KeyPath, Place] = {}
        for path, at, length in _scan(self.text):
            found.setdefault(path, self._place(at, length))
        return found

    @cached_property
    def _starts(self) -> list[int]:
        return [0, *(match.end() for match in re.finditer("\n", self.text))]

    def _place(self, at: int, length: int) -> Place:
        line = bisect_right(self._starts, at)
        return Place(self.file, line, at - self._starts[line - 1] + 1, length)

    def place(self, path: Sequence[str | int]) -> Place:
        """Place of ``path``, or of the nearest table or array around it, or the head of the file."""
        return self.places.get(tuple(path[: self.known(path)]), Place(self.file))

    def known(self, path: Sequence[str | int]) -> int:
        """How many parts of ``path``, from its beginning, the file has."""
        return next((k for k in range(len(path), 0, -1) if tuple(path[:k]) in self.places), 0)

    def line(self, number: int) -> str:
        """The text of line ``number`` (from 1) without its end; empty where it is too long to show."""
        begin = self._starts[number - 1]
        end = self._starts[number] if number < len(self._starts) else len(self.text)
        return self.text[begin:end].rstrip("\r\n") if end - begin <= LONGEST_EXCERPT else ""

    def problem(self, name: str, path: Sequence[str | int], found: str, allowed: str = "", remedy: str = "") -> Problem:
        """A problem at ``path``, with its place and the line it stands in."""
        place = self.place(path)
        return Problem(name, found, allowed, remedy, place, key_text(path), self.line(place.line))


def read_toml(path: Path | str, error: type[VliwsimError]) -> TomlFile:
    """Read a TOML file that may hold anything.

    Raises ``error`` with one problem: ``file-missing``, ``file-unreadable``, ``file-too-big`` or ``not-toml``.
    """
    file = str(path)

    def refuse(
        name: str, found: str, allowed: str, remedy: str = "", place: Place | None = None, line: str = ""
    ) -> VliwsimError:
        return error(Problem(name, found, allowed, remedy, place or Place(file), "", line))

    try:
        target = Path(path)
        if target.exists() and not target.is_file():
            raise refuse("file-unreadable", "a folder or device", "a regular file that ends in .toml")
        with open_regular(target) as stream:
            raw = stream.read(LARGEST + 1)
    except FileNotFoundError:
        raise refuse("file-missing", f"no file {file}", "a file that exists") from None
    except (OSError, ValueError) as why:
        raise refuse("file-unreadable", getattr(why, "strerror", None) or str(why), "a file that can be read") from None
    if len(raw) > LARGEST:
        raise refuse("file-too-big", f"more than {LARGEST} bytes", f"at most {LARGEST} bytes")
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as why:
        line = raw.count(b"\n", 0, why.start) + 1
        column = why.start - (raw.rfind(b"\n", 0, why.start) + 1) + 1
        raise refuse(
            "not-toml", f"byte 0x{raw[why.start]:02x}, not UTF-8", "UTF-8 text", "", Place(file, line, column)
        ) from None
    return parse_toml(file, text, error)


def parse_toml(file: str, text: str, error: type[VliwsimError]) -> TomlFile:
    """The same for text already at hand; ``file`` is what its places are called."""
    text = text.removeprefix("\ufeff").replace("\r\n", "\n")
    whole = TomlFile(file, text, {})
    if long_key := _LONG_KEY.search(text):
        place = whole._place(long_key.start(), 1)
        raise error(Problem("not-toml", "a dotted key of more than 40 parts", "at most 40 parts", "", place))
    try:
        return TomlFile(file, text, tomllib.loads(text))
    except RecursionError:
        raise error(
            Problem("not-toml", "arrays or tables nested too deeply", "a few levels", "", Place(file))
        ) from None
    except ValueError as why:  # TOMLDecodeError is one; an integer of thousands of digits raises a plain one
        found = _AT.fullmatch(str(why))
        message, line, column = found.groups() if found else (str(why).split(";", maxsplit=1)[0], None, None)
        message = _TUPLE.sub(lambda keys: key_text(re.findall(r"'([^']*)'", keys[0])), message)
        if "digits" in message:
            message = "an integer of thousands of digits"
        number = int(line) if line else len(whole._starts) if found else 1
        place = Place(file, number, int(column or 1))
        excerpt = whole.line(number) if found else ""
        raise error(
            Problem("not-toml", message[:1].lower() + message[1:], "TOML (https://toml.io)", "", place, "", excerpt)
        ) from None


def _scan(text: str) -> Iterator[tuple[KeyPath, int, int]]:
    """(key path, offset, length) of every table, key and array element of a well-formed TOML text, in file order."""
    tokens = [m for m in _TOKEN.finditer(text) if m.lastgroup != "space"]
    table: KeyPath = ()
    counts: dict[KeyPath, int] = {}
    open_values: list[tuple[str, KeyPath, int]] = []  # bracket, path of the array or inline table, elements seen
    k = 0

    def key(start: int, base: KeyPath) -> tuple[list[tuple[KeyPath, int, int]], int]:
        """Every prefix of the dotted key at token ``start``, and the token behind it."""
        prefixes: list[tuple[KeyPath, int, int]] = []
        while start < len(tokens) and (tokens[start].lastgroup in ("bare", "string") or tokens[start][0] == "."):
            if tokens[start][0] != ".":
                base = _element((*base, _unquoted(tokens[start])), counts)
                prefixes.append((base, tokens[start].start(), len(tokens[start][0])))
            start += 1
        return prefixes, start

    while k < len(tokens):
        token = tokens[k]
        mark = token[0]
        if not open_values:  # a statement begins
            if mark in ("[", "[["):
                prefixes, k = key(k + 1, ())
                if not prefixes:
                    return
                table, at, length = prefixes[-1]
                if mark == "[[":
                    bare = table if isinstance(table[-1], str) else table[:-1]
                    yield bare, at, length
                    counts[bare] = counts.get(bare, -1) + 1
                    table = (*bare, counts[bare])
                    prefixes[-1] = (table, at, length)
                yield from prefixes
                k += 1
                continue
            if token.lastgroup not in ("bare", "string"):
                k += 1
                continue
            prefixes, k = key(k, table)
            yield from prefixes
            open_values.append(("=", prefixes[-1][0], 0))
            k += 1  # the equals sign
            continue
        bracket, path, seen = open_values[-1]
        k += 1
        if token.lastgroup == "line":
            if bracket == "=":
                open_values.pop()
        elif bracket == "{" and (token.lastgroup in ("bare", "string")):
            prefixes, k = key(k - 1, path)
            yield from prefixes
            open_values.append((":", prefixes[-1][0], 0))
            k += 1
        elif mark == ",":
            if bracket == ":":
                open_values.pop()
            elif bracket == "[":
                open_values[-1] = (bracket, path, seen + 1)
        elif mark in ("[", "[[", "{"):
            for offset, opened in enumerate(mark, token.start()):
                bracket, path, seen = open_values[-1]
                inner = (*path, seen) if bracket == "[" else path
                if bracket == "[":
                    yield inner, offset, 1
                open_values.append((opened, inner, 0))
        elif mark in ("]", "]]", "}"):
            for closed in mark:
                if closed == "}" and open_values[-1][0] == ":":
                    open_values.pop()
                if open_values:
                    open_values.pop()
        elif bracket == "[":
            yield (*path, seen), token.start(), len(mark)


def _element(path: KeyPath, counts: dict[KeyPath, int]) -> KeyPath:
    """``path``, or where it names an array of tables its last element."""
    return (*path, counts[path]) if path in counts else path


def _unquoted(token: re.Match[str]) -> str:
    if token.lastgroup != "string":
        return token[0]
    try:
        return next(iter(tomllib.loads(f"{token[0]} = 0")))
    except (ValueError, StopIteration):
        return token[0][1:-1]
