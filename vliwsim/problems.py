"""What can be wrong and how it is said: found, allowed, try.

Every mistake of a user, from a typo to a hazard, is one :class:`Problem`; every exception of the package is a
:class:`VliwsimError` that carries one or more of them. No other module of the package prints or formats an error.
"""

from __future__ import annotations

from collections.abc import Iterable

import attrs


@attrs.frozen
class Place:
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
        lines = ["  ".join(head)]
        if self.excerpt.strip() and self.place:
            text = self.excerpt.rstrip()
            indent = len(text) - len(text.lstrip())
            lines.append("    " + text.lstrip().expandtabs(1))
            lines.append("    " + " " * max(0, self.place.column - 1 - indent) + "^")
        lines.append(f"  found    {self.found}")
        if self.allowed:
            lines.append(f"  allowed  {self.allowed}")
        if self.remedy:
            lines.append(f"  try      {self.remedy}")
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
