"""Collects the problems of one source file, each with its place and source line."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from vliwsim.problems import Place, Problem, SourceError

MOST = 200
"""Problems told of one file; what lies beyond is counted, not told."""


class Complaints:
    """Every problem found in one source file so far."""

    def __init__(self, file: str, lines: Sequence[str]) -> None:
        self.file = file
        self.lines = lines
        self.problems: list[Problem] = []
        self.notes: list[Problem] = []
        self._seen: set[tuple[str, int, int]] = set()

    def place(self, line: int, column: int = 1, length: int = 1) -> Place:
        """A place in this file; line and column from 1."""
        return Place(self.file, line, column, max(1, length))

    def excerpt(self, line: int) -> str:
        return self.lines[line - 1] if 0 < line <= len(self.lines) else ""

    def add(
        self,
        name: str,
        where: Place | tuple[int, int] | tuple[int, int, int],
        found: str,
        allowed: str = "",
        remedy: str = "",
        kind: str = "error",
    ) -> None:
        """One more problem at ``where``, a place or (line, column[, length]).

        The same name at the same place is told once: an unrolled line is wrong in every pass.
        """
        place = where if isinstance(where, Place) else self.place(*where)
        self.take(Problem(name, found, allowed, remedy, place, excerpt=self.excerpt(place.line), kind=kind))

    def take(self, problem: Problem) -> None:
        """One more problem, ready made."""
        place = problem.place
        key = (problem.name, place.line, place.column) if place else (problem.name, 0, 0)
        if key in self._seen:
            return
        self._seen.add(key)
        (self.notes if problem.kind == "note" else self.problems).append(problem)

    @property
    def full(self) -> bool:
        """Whether more problems than are told have been found: no use to look for more, or for remedies."""
        return len(self.problems) > MOST

    def nearest(self, word: str, known: Iterable[str]) -> str:
        """The known spelling nearest to ``word``, or "" when none is near."""
        return "" if self.full else nearest(word, known)

    def raise_if_any(self) -> None:
        """Raise :class:`~vliwsim.problems.SourceError` with all problems in the order of the file."""
        if not self.problems:
            return
        told = sorted(
            self.problems, key=lambda p: (p.place.line, p.place.column, p.name) if p.place else (0, 0, p.name)
        )
        if len(told) > MOST:
            more = len(told) - MOST
            told = [*told[:MOST], Problem("more-problems", f"{more} more problems", place=self.place(1))]
        raise SourceError(told)


def nearest(word: str, known: Iterable[str]) -> str:
    """The known spelling nearest to ``word``, or "" when none is near."""
    import difflib

    found = difflib.get_close_matches(word[:100], sorted(known), 1, 0.6) if word[:1].isalpha() else []
    return found[0] if found else ""
