"""What a check finds, as data: each rule's outcome with the paths behind it, reads before a landing, interrupts."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType
from typing import NamedTuple

from vliwsim.check.interrupts import Interrupts

PROVED, VIOLATED, NEEDS_INPUT, UNDECIDED = "proved", "violated", "needs input", "undecided"
OUTCOMES = (VIOLATED, UNDECIDED, NEEDS_INPUT, PROVED)
"""In the order of a report: what to act on first."""

Site = tuple[int, int]
"""(bundle index, instruction index)."""


class Moment(NamedTuple):
    """A beat on a path: the bundle at hand and what it ``did`` (``issue``, ``hold``, ``fresh``).

    ``within``: beats of its idle word before. ``landed``: (who sent it, register) of results due in this beat.
    """

    bundle: int
    within: int
    did: str
    landed: tuple[tuple[Site, int], ...] = ()


class Incident(NamedTuple):
    """Where a rule is broken for certain on a path (``sure``), or on some data.

    ``bundle``: the one at hand. ``sites``: the operations behind it. ``detail``: what the rule wants to add.
    ``path``: the beats from the first to this one, of violations; empty for what data decide, and for all but the first
    20 violations of a rule.
    """

    rule: str
    sure: bool
    bundle: int
    sites: tuple[Site, ...]
    register: int | None = None
    detail: str = ""
    path: tuple[Moment, ...] = ()


class Judgement(NamedTuple):
    """One rule's outcome. ``because``: why it is undecided, or proved without a look at the program."""

    rule: str
    outcome: str
    incidents: tuple[Incident, ...] = ()
    because: str = ""


class EarlyRead(NamedTuple):
    """A register read with results in flight for it: by ``site``; ``flights``: (who sent it, beats to go, for certain).

    ``meant``: whether the item that the source says is the one read; None where it says nothing.
    """

    site: Site
    register: int
    flights: tuple[tuple[Site, int, bool], ...]
    meant: bool | None


class Wait(NamedTuple):
    """A bundle that is held up ``least`` to ``most`` beats whenever it comes up."""

    bundle: int
    least: int
    most: int


class Verdict(NamedTuple):
    """All that a check found.

    ``contexts``: how many there are, and whether that is all of them (``complete``). ``blown_up``: the bundle with most
    of them where it is not. ``tagged``: does the source say which items its operations work on. ``right_beats``: for
    operations that work on another item than is said, the bundles where all their operands are of the right one.
    ``astray``: some branch goes where its register says, which is not known, so that not every path was looked at.
    """

    contexts: int
    complete: bool
    blown_up: int | None
    judgements: Mapping[str, Judgement]
    early: tuple[EarlyRead, ...]
    waits: tuple[Wait, ...]
    interrupts: Interrupts | None
    tagged: bool
    right_beats: Mapping[Site, tuple[int, ...]] = MappingProxyType({})
    astray: bool = False

    def outcome(self, rule: str) -> str:
        return self.judgements[rule].outcome

    @property
    def violated(self) -> tuple[Judgement, ...]:
        return tuple(j for j in self.judgements.values() if j.outcome == VIOLATED)

    @property
    def undecided(self) -> tuple[Judgement, ...]:
        return tuple(j for j in self.judgements.values() if j.outcome == UNDECIDED)

    @property
    def ok(self) -> bool:
        """Nothing is violated, and nothing undecided: what is left open depends on data alone."""
        return not self.violated and not self.undecided
