"""Header lines: what a kernel is called, where it runs and what it computes on."""

from __future__ import annotations

import re

from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.tree import ItemLine, Let, Name, Tree

ITEM_WORDS = ("given", "changes", "returns", "table", "scratch")
HEADER_WORDS = ("kernel", "core", *ITEM_WORDS, "needs", "budget", "let", "name")
CLAUSES = ("=", "from", "at", "in", "over", "within", "align", "bank")

ALLOWED_CLAUSES = {
    "given": ("=", "at", "in", "over", "align", "bank"),
    "changes": ("at", "in", "over", "within", "align", "bank"),
    "returns": ("at", "in", "over", "within", "align", "bank"),
    "table": ("=", "from", "at", "over", "align", "bank"),
    "scratch": ("at", "over", "align", "bank"),
}
"""Which clauses each kind of item may have."""

_IDENTIFIER = re.compile(r"[A-Za-z_]\w*\Z")
_ITEM = re.compile(r"(?:given|changes|returns|table|scratch)\b\s*([^\s:=\[]*)\s*:?\s*([^\s\[=]*)\s*")
_CLAUSE = re.compile(r'[\[\](){}]|"[^"]*"?|[=<>!]=|=|(?<![\w.])(?:from|at|in|over|within|align|bank)(?![\w.(])')
_WORD_CHARACTERS = re.compile(r"[\w.-]+\Z")


def is_identifier(text: str) -> bool:
    """Whether ``text`` can name something in a source."""
    return bool(_IDENTIFIER.match(text)) and text.isascii() and len(text) <= 100


def header_line(word: str, line: Piece, tree: Tree, complaints: Complaints) -> None:
    """Take one header line other than ``let`` and ``name`` into ``tree``."""
    rest = line.part(len(word))
    if word in ITEM_WORDS:
        if item := _item(word, line, complaints):
            tree.items.append(item)
    elif not rest.text:
        complaints.add("incomplete", (line.line, line.column, len(word)), f"{word} and nothing else", f"{word} …")
    elif word == "core":
        _cores(rest, tree, complaints)
    elif getattr(tree, word) is not None:
        complaints.add("twice", (line.line, line.column, len(word)), f"a second {word} line", f"one {word} line")
    else:
        if word == "kernel" and not is_identifier(rest.text):
            complaints.add("bad-name", rest.where, f"a kernel called {rest.text}", "letters, digits and _")
        setattr(tree, word, rest)


def _cores(rest: Piece, tree: Tree, complaints: Complaints) -> None:
    for name in rest.cut(","):
        if not _WORD_CHARACTERS.match(name.text):
            complaints.add("bad-name", name.where, f"a core called {name.text or 'nothing'}", "core NAME, NAME …")
        elif any(name.text == other.text for other in tree.cores):
            complaints.add("twice", name.where, f"core {name.text} twice", "each core once")
        else:
            tree.cores.append(name)


def let_line(line: Piece, complaints: Complaints) -> Let | None:
    """``let NAME = EXPRESSION``."""
    name, equals, _ = line.text[len("let") :].partition("=")
    start = len("let") + len(name)
    let = Let(line.part(len("let"), start), line.part(start + 1))
    if not equals or not is_identifier(let.name.text) or not let.expression.text:
        complaints.add("bad-let", line.where, line.text, "let NAME = EXPRESSION")
        return None
    return let


def name_line(line: Piece, complaints: Complaints) -> Name | None:
    """``name NAME = REGISTER``."""
    alias, equals, _ = line.text[len("name") :].partition("=")
    start = len("name") + len(alias)
    name = Name(line.part(len("name"), start), line.part(start + 1))
    if not equals or not is_identifier(name.name.text) or not name.register.text:
        complaints.add("bad-let", line.where, line.text, "name NAME = REGISTER")
        return None
    return name


def _item(kind: str, line: Piece, complaints: Complaints) -> ItemLine | None:
    """``KIND NAME : TYPE[SIZE] clauses``."""
    head = _ITEM.match(line.text)
    assert head
    name, type_name = line.part(head.start(1), head.end(1)), line.part(head.start(2), head.end(2))
    if not is_identifier(name.text) or ":" not in line.text[head.end(1) : head.start(2)] or not type_name.text:
        complaints.add("bad-item", line.where, line.text, f"{kind} NAME : TYPE[SIZE] …", f"{kind} x : i16[n] at g10")
        return None
    at, size = head.end(), None
    if line.text[at : at + 1] == "[":
        end = _closing(line.text, at)
        if end is None:
            complaints.add("unbalanced", (line.line, line.column + at), "[ without its partner", "brackets in pairs")
            return None
        size = line.part(at + 1, end - 1)
        at = end
    clauses = _clauses(kind, line, at, complaints)
    return ItemLine(kind, name, type_name, size, clauses, line)


def _closing(text: str, start: int) -> int | None:
    depth = 0
    for k in range(start, len(text)):
        depth += (text[k] in "[({") - (text[k] in "])}")
        if not depth:
            return k + 1
    return None


def _clauses(kind: str, line: Piece, start: int, complaints: Complaints) -> dict[str, Piece]:
    """The clauses of an item line behind its type, by their word."""
    text, depth = line.text, 0
    marks: list[tuple[str, int, int]] = []
    for match in _CLAUSE.finditer(text, start):
        found = match.group()
        depth += (found in "[({") - (found in "])}")
        if not depth and found in CLAUSES:
            marks.append((found, match.start(), match.end()))
    before = line.part(start, marks[0][1] if marks else None)
    if before.text:
        allowed = " ".join(ALLOWED_CLAUSES[kind])
        complaints.add("left-over", before.where, f"{before.text} behind the type", allowed)
    clauses: dict[str, Piece] = {}
    for k, (word, begin, end) in enumerate(marks):
        value = line.part(end, marks[k + 1][1] if k + 1 < len(marks) else None)
        where = (line.line, line.column + begin, len(word))
        if word not in ALLOWED_CLAUSES[kind]:
            complaints.add("bad-clause", where, f"{word} in a {kind} line", " ".join(ALLOWED_CLAUSES[kind]))
        elif word in clauses:
            complaints.add("twice", where, f"{word} twice", f"one {word}")
        elif not value.text:
            complaints.add("incomplete", where, f"{word} and nothing behind it", f"{word} …")
        else:
            clauses[word] = value
    return clauses
