"""The text of a meaning as Python's parser reads it, bounded, with the way back to places in the text as written."""

from __future__ import annotations

import ast
import re
import warnings

from vliwsim.description.language.faults import Fault

LONGEST_TEXT = 4000
DEEPEST = 80
MOST_NODES = 4000

_FOR = re.compile(r"\bfor\s+k\b(?!\s+in\b)")
_IN = " in _"


def read_statements(text: str) -> list[ast.stmt]:
    source = _Source(text)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            module = ast.parse(source.text)
    except SyntaxError as error:
        line, column = source.place(error.lineno, (error.offset or 1) - 1)
        raise Fault("bad-syntax", f"text that is no expression ({error.msg})", "name = expression; …",
                    line=line, column=column) from None  # fmt: skip
    except (RecursionError, MemoryError, ValueError):
        raise Fault("too-deep", "a nesting too deep to read", f"at most {DEEPEST} levels") from None
    _bound(module)
    for node in ast.walk(module):
        if isinstance(node, (ast.expr, ast.stmt)):
            node.lineno, node.col_offset = source.place(node.lineno, node.col_offset)
    if not module.body:
        raise Fault("nothing-said", "no meaning", "name = expression; …, or halt")
    return module.body


class _Source:
    """The text as Python's parser gets it, and the way back to places in the text as written."""

    def __init__(self, text: str) -> None:
        if len(text) > LONGEST_TEXT:
            raise Fault("too-long", f"{len(text)} characters", f"at most {LONGEST_TEXT}")
        for number, line in enumerate(text.split("\n"), 1):
            for column, letter in enumerate(line, 1):
                if not (letter.isascii() and letter.isprintable() or letter == "\t"):
                    raise Fault("bad-character", f"character {letter!r}", "plain ASCII", line=number, column=column)
        self.shifts: list[int] = []
        self.inserted: list[list[int]] = []
        lines = []
        for line in text.split("\n"):
            stripped = line.lstrip()
            self.shifts.append(len(line) - len(stripped))
            self.inserted.append([found.end() for found in _FOR.finditer(stripped)])
            lines.append(_FOR.sub(lambda found: found.group() + _IN, stripped))
        self.text = "\n".join(lines)

    def place(self, line: int | None, column: int | None) -> tuple[int, int]:
        """Line and column from 1 in the written text, for a line from 1 and a column from 0 of the parser's text."""
        line = min(max(line or 1, 1), len(self.shifts))
        column = max(column or 0, 0)
        for position in self.inserted[line - 1]:
            if column > position:
                column = max(position, column - len(_IN))
        return line, column + self.shifts[line - 1] + 1


def _bound(module: ast.Module) -> None:
    """Refuses trees too deep or too big, without recursion."""
    level: list[ast.AST] = [module]
    nodes = 0
    for _ in range(2 * DEEPEST):
        nodes += len(level)
        if nodes > MOST_NODES:
            raise Fault("too-long", f"more than {MOST_NODES} parts", f"at most {MOST_NODES}")
        level = [child for node in level for child in ast.iter_child_nodes(node)]
        if not level:
            return
    raise Fault("too-deep", f"more than {2 * DEEPEST} levels", f"at most {2 * DEEPEST} levels")


def is_name(node: ast.AST, name: str) -> bool:
    return isinstance(node, ast.Name) and node.id == name


def said(node: ast.AST) -> str:
    """The node as text, short, for a message."""
    try:
        text = ast.unparse(node).replace(_IN, "")
    except (ValueError, RecursionError):
        text = "this expression"
    return text if len(text) <= 60 else text[:57] + "…"


def fault_at(node: ast.AST, name: str, found: str, allowed: str, remedy: str = "") -> Fault:
    line, column = getattr(node, "lineno", 1), getattr(node, "col_offset", 1)
    return Fault(name, found, allowed, remedy, line=line, column=column)
