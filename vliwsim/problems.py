"""What can be wrong and how it is said: found, allowed, try.

Every mistake of a user, from a typo to a hazard, is one :class:`Problem`; every exception of the package is a
:class:`VliwsimError` that carries one or more of them. No other module of the package prints or formats an error.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

import attrs

WIDEST = 160
"""Characters of a source line that are shown."""
LONGEST = 1000
"""Characters of a found, allowed or try that are printed; ``as_json`` has them whole."""


class Place(NamedTuple):
    """A position in a text file: line and column count from 1; ``length`` is the number of characters meant."""

    file: str
    line: int = 1
    column: int = 1
    length: int = 1

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"


@attrs.frozen
class Problem:
    """One diagnostic: a stable kebab-case name, its origin, and found / allowed / try.

    ``kind`` is ``error`` (the input is malformed), ``illegal`` (the machine's rules forbid it) or ``note``.
    ``excerpt`` is the source line at ``place`` (unstripped; the caret is drawn below it).
    ``key`` is the key path inside a data file (``latency.load``), empty for sources.
    """

    name: str
    found: str
    allowed: str = ""
    remedy: str = ""
    place: Place | None = None
    key: str = ""
    excerpt: str = ""
    kind: str = "error"

    def __str__(self) -> str:
        """The problem as the user reads it, several lines, no trailing newline."""
        head = [str(self.place)] if self.place else []
        if self.key:
            head.append(self.key)
        head.append(f"{self.name}  ({self.kind})")
        lines = [printable("  ".join(head))]
        if self.excerpt.strip() and self.place:
            text, caret = _window(self.excerpt.rstrip(), self.place.column - 1)
            lines += [f"    {printable(text)}", "    " + " " * caret + "^"]
        parts = (("found   ", self.found), ("allowed ", self.allowed), ("try     ", self.remedy))
        lines += [f"  {word} {_short(printable(text))}" for word, text in parts if text or word == "found   "]
        return "\n".join(lines)

    def as_json(self) -> dict[str, object]:
        """The problem as plain JSON data; absent parts are left out."""
        out: dict[str, object] = {"name": self.name, "kind": self.kind}
        if self.place:
            out |= {"file": self.place.file, "line": self.place.line, "column": self.place.column}
        for field in ("key", "found", "allowed"):
            if getattr(self, field):
                out[field] = getattr(self, field)
        if self.remedy:
            out["try"] = self.remedy
        return out


def printable(text: str) -> str:
    """One line of printable characters: files of strangers neither steer a terminal nor break our form."""
    if text.isprintable():
        return text
    return "".join([c if c.isprintable() else " " if c == "\t" else "\N{REPLACEMENT CHARACTER}" for c in text])


def _short(text: str) -> str:
    """The text, its middle left out where it is longer than :data:`LONGEST` characters."""
    half = LONGEST // 2
    return text if len(text) <= LONGEST else f"{text[:half]} … {text[-half:]}"


def _window(line: str, at: int) -> tuple[str, int]:
    """What is shown of a line: all but its indentation, or WIDEST characters around ``at``; and where ``at`` is now."""
    start = len(line) - len(line.lstrip())
    if len(line) - start <= WIDEST:
        return line[start:], max(0, at - start)
    start = max(start, min(at - WIDEST // 2, len(line) - WIDEST))
    shown = line[start : start + WIDEST]
    left, right = start > 0 and line[:start].strip() != "", start + WIDEST < len(line)
    return ("…" if left else "") + shown + ("…" if right else ""), max(0, min(at - start, WIDEST)) + left


class VliwsimError(Exception):
    """Base of every exception a user's mistake can raise. ``problems`` is a tuple of :class:`Problem`, never empty.

    ``status`` is the exit status a command gives it: 2 for a bad request or input file, 1 for a wrong kernel.
    """

    status = 2

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__(self.problems)

    def __str__(self) -> str:
        return "\n".join(str(problem) for problem in self.problems)


class CoreError(VliwsimError):
    """A core description or a change to one is refused."""


class OperationError(VliwsimError):
    """An operation table is refused."""


class SourceError(VliwsimError):
    """A source file does not assemble. All problems of the file come in one exception."""

    status = 1


class ImageError(VliwsimError):
    """An image cannot be read or decoded for this core."""


class InterfaceError(VliwsimError):
    """Given arrays, sizes or options do not fit the kernel's interface."""


class ReferenceFailure(VliwsimError):
    """The kernel's reference.py could not be used: absent, raised, or returned the wrong thing."""


class GoldenError(VliwsimError):
    """A golden file is damaged, of another kernel, or would be overwritten."""


class OptionError(VliwsimError):
    """An option or argument of a command is bad."""


def problem(name: str, found: str, allowed: str = "", remedy: str = "", **more: object) -> Problem:
    """Shorthand for the common case of building a :class:`Problem`."""
    return Problem(name, found, allowed, remedy, **more)  # type: ignore[arg-type]
