"""One beat of a context under way: what it knows, what it finds, and what comes of it.

Where a rule depends on what is not known, the finding says so (``sure`` is False); where the way on does, the step
forks and each side learns its fact.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

from vliwsim.flow.context import Context, Flight
from vliwsim.flow.follow import Follow
from vliwsim.flow.values import ALWAYS, Condition, Identity, Known, Literal, literal
from vliwsim.machine.prepared import Preparation, Prepared

NAMED, UNKNOWN = "named", "unknown"
"""Details of an ``indirect-target``: data choose among the places named, or where it goes is not known at all."""


class Finding(NamedTuple):
    """A rule that a beat breaks, or may break.

    ``sites``: the (bundle, instruction) pairs behind it. ``sure``: nothing but the path decides; else it needs both
    conditions of something that is not known. ``register``: the one concerned, if any. ``beats``: for an early read,
    beats until the first result lands.
    """

    rule: str
    bundle: int
    sites: tuple[tuple[int, int], ...]
    sure: bool
    register: int | None = None
    beats: int = 0
    detail: str = ""


class Beat(NamedTuple):
    """What one beat of a context may do. ``successors``: contexts, or None for the end of the program.

    ``did``: ``issue``, ``hold``, ``fresh``, or ``fork`` where only a fact is learned and no time passes.
    ``landed``: write numbers that (may) land. ``guards``: of a bundle that issues, for each instruction whether its
    guard is on (True), off (False) or not known (None).
    """

    did: str
    successors: tuple[Context | None, ...]
    findings: tuple[Finding, ...]
    landed: tuple[tuple[int, bool], ...] = ()
    guards: tuple[bool | None, ...] = ()


class Fork(Exception):
    """The step needs to know more: it is taken once with each side of this literal."""

    def __init__(self, item: Literal) -> None:
        self.item = item


class Moment:
    """One beat under way."""

    def __init__(self, ready: Preparation, follow: Follow, context: Context) -> None:
        self.ready, self.core, self.follow, self.context = ready, ready.core, follow, context
        self.knowledge = context.knowledge
        self.values = list(context.values)
        self.prepared: Prepared = self.ready[context.at]
        self.findings: list[Finding] = []
        self.landed: list[tuple[int, bool]] = []
        self.guards: tuple[bool | None, ...] = ()
        self.flights = [f for f in context.flights if f.beats > 0]
        self.joined: dict[Identity, Condition] = {}
        """Of values that are one of two since this very beat, what decides which."""
        self.next_identity = 1 + max(
            [v for v in context.values if isinstance(v, int)]
            + [i.value for f in context.flights for i in f.on]
            + [v for f in context.flights for v in (f.value, f.since) if isinstance(v, int)]
            + [i.value for t in context.turns for i in t.on],
            default=-1,
        )  # fmt: skip

    def beat(self, did: str, successors: Iterable[Context | None]) -> Beat:
        return Beat(did, tuple(dict.fromkeys(successors)), tuple(self.findings), tuple(self.landed), self.guards)

    def find(self, rule: str, sites: Iterable[tuple[int, int]], sure: bool, **more: object) -> None:
        self.findings.append(Finding(rule, self.prepared.index, tuple(dict.fromkeys(sites)), sure, **more))  # type: ignore[arg-type]

    def here(self, k: int) -> tuple[int, int]:
        return self.prepared.index, k

    def site(self, flight: Flight) -> tuple[int, int]:
        site = self.ready.sites[flight.number]
        return site.bundle, site.instruction

    def register(self, flight: Flight) -> int:
        return self.ready.sites[flight.number].write.register

    def fresh_identity(self) -> int:
        self.next_identity += 1
        return self.next_identity - 1

    def value(self, register: int) -> Known:
        return self.values[self.follow.index[register]]

    def guard(self, k: int) -> Condition | None:
        """The condition that the guard of instruction ``k`` is on; None where it is off for certain."""
        guard = self.prepared.parts[k].instruction.guard
        if guard is None:
            return ALWAYS
        on = literal(self.value(guard.register), not guard.negated)
        return None if on is None else self.knowledge.settle(on)

    def decide(self, condition: Condition | None) -> bool:
        """Whether a condition holds; forks where that is not known."""
        if condition is None:
            return False
        for item in sorted(condition):
            if item.value in self.joined:  # which the context does not know yet
                self.decide(self.joined[item.value])
            raise Fork(item)
        return True
