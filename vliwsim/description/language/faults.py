"""One mistake in an operation's operands or meaning, before it is known in which file and line the text stands."""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

from vliwsim.problems import Place, Problem

REPEATED = "repeated"
"""Name of a fault that only follows from another, already told."""


class Fault(Exception):
    """A mistake at ``line`` and ``column`` (from 1) of the text it is in; ``part`` is ``does`` or ``operands``."""

    def __init__(
        self,
        name: str,
        found: str,
        allowed: str = "",
        remedy: str = "",
        line: int = 1,
        column: int = 1,
        part: str = "does",
    ) -> None:
        super().__init__(found)
        self.name, self.found, self.allowed, self.remedy = name, found, allowed, remedy
        self.line, self.column, self.part = line, column, part


class Faults(Exception):
    """All mistakes of one meaning."""

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults = tuple(faults)
        super().__init__("; ".join(fault.found for fault in self.faults))


class Origin(NamedTuple):
    """Where a text stands in its file: ``line`` and ``column`` of its first character, counted from 1.

    ``before``: what stands before it on its first line.
    """

    file: str
    key: str
    line: int = 1
    column: int = 1
    before: str = ""


def as_problem(fault: Fault, text: str, origin: Origin) -> Problem:
    """The fault as the user reads it, with the line of the text it is in."""
    lines = text.split("\n")
    excerpt = lines[fault.line - 1] if 0 < fault.line <= len(lines) else ""
    column = fault.column
    if fault.line == 1:
        column += origin.column - 1
        excerpt = (origin.before or " " * (origin.column - 1)) + excerpt
    return Problem(
        fault.name,
        _short(fault.found),
        fault.allowed,
        fault.remedy,
        place=Place(origin.file, origin.line + fault.line - 1, max(1, column)),
        key=f"{origin.key}.{fault.part}",
        excerpt=excerpt[:200],
    )


def _short(text: str, limit: int = 300) -> str:
    return text if len(text) <= limit else text[: limit - 1] + "…"
