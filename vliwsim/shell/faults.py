"""A request that the shell cannot meet, as one line."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

from vliwsim.problems import VliwsimError, problem

SHOWN = 12
"""Names that an answer lists, at most."""


class Unclear(VliwsimError):
    """A command, place, condition or expression that cannot be followed: found, allowed, try."""

    @property
    def line(self) -> str:
        """The first problem in one line."""
        first = self.problems[0]
        parts = [first.found]
        parts += [f"allowed: {first.allowed}"] if first.allowed else []
        parts += [f"try: {first.remedy}"] if first.remedy else []
        return " · ".join(" ".join(part.split()) for part in parts)


def at_line(where: str, fault: Unclear) -> Unclear:
    """The first problem of ``fault``, met at a line of a script."""
    first = fault.problems[0]
    allowed = first.allowed or "a line that the shell can follow"
    return unclear(f"{where}: {' '.join(first.found.split())}", allowed, first.remedy, "script-line")


def unclear(found: str, allowed: str = "", remedy: str = "", name: str = "bad-request") -> Unclear:
    """The exception for one request."""
    return Unclear(problem(name, found, allowed, remedy))


def nearest(word: str, known: Iterable[str]) -> str:
    """The known word most like ``word``, empty if none is."""
    return next(iter(difflib.get_close_matches(word, list(known), 1)), "")


def listed(words: Iterable[str]) -> str:
    """Words for an answer, shortened where there are many."""
    known = list(words)
    more = f" and {len(known) - SHOWN} more" if len(known) > SHOWN else ""
    return ", ".join(known[:SHOWN]) + more
