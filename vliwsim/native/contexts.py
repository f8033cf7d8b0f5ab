"""Pipeline contexts as the fast engine has them: where the program is and what is in flight, conditions as data.

A context of :mod:`vliwsim.flow` knows of every result in flight under which condition it lands; here it only says
whether it lands for sure, else a bit beside the value says so when the code runs. Nothing is believed of the data, so
every path is translated right, one that no data takes included.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation, Prepared


class Flight(NamedTuple):
    """A result, write number ``number``, landing in ``beats`` beats (0: this one): for sure, or if its bit is set."""

    beats: int
    number: int
    sure: bool

    @property
    def later(self) -> Flight:
        return Flight(self.beats - 1, self.number, self.sure)


class Turn(NamedTuple):
    """A branch in flight: the bundle after ``bundles`` more comes from its target, for sure, or if its bit is set."""

    bundles: int
    bundle: int
    part: int
    sure: bool


class Context(NamedTuple):
    """At the start of a beat, before anything lands; ``busy``: (slot, beats still taken).

    ``lap`` and ``trusted``: which copy of the context this is where a loop is unrolled or runs in strips; they mean
    nothing else.
    """

    at: int
    within: int = 0
    waited: bool = False
    flights: tuple[Flight, ...] = ()
    turns: tuple[Turn, ...] = ()
    busy: tuple[tuple[int, int], ...] = ()
    lap: int = 0
    trusted: bool = False


class Step(NamedTuple):
    """What the beat of a context may do.

    ``leave``: only the stepper can take it. ``due``: what lands; ``staying``: what is still out. ``guard_holds`` and
    ``holds``: flights that, on, make an interlocked bundle wait; ``held`` if something does for sure. ``crowds``: ports
    that may be too few: (ports, own (part, write number) pairs, flights beside). ``twice``: pairs of parts that may not
    both be on. ``new``: results that take off. ``halts``: parts that halt. ``landing``: branches that may redirect now.
    ``waiting``, ``refreshed``: the contexts after a hold and a wait for a fresh operand, None where there is none.
    ``turned``: after each of ``landing``, None if it goes nowhere. ``fallen``: without a redirect, None behind the last
    bundle or where there always is one.
    """

    context: Context
    prepared: Prepared
    leave: bool
    due: tuple[Flight, ...]
    staying: tuple[Flight, ...]
    guard_holds: tuple[Flight, ...] = ()
    holds: tuple[Flight, ...] = ()
    held: bool = False
    crowds: tuple[tuple[int, tuple[tuple[int, int], ...], tuple[Flight, ...]], ...] = ()
    twice: tuple[tuple[int, int], ...] = ()
    new: tuple[tuple[int, Flight], ...] = ()
    issued: tuple[Turn, ...] = ()
    halts: tuple[int, ...] = ()
    landing: tuple[Turn, ...] = ()
    waiting: Context | None = None
    refreshed: Context | None = None
    turned: tuple[Context | None, ...] = ()
    fallen: Context | None = None

    @property
    def successors(self) -> tuple[Context, ...]:
        found = (self.waiting, self.refreshed, *self.turned, self.fallen)
        return tuple(dict.fromkeys(c for c in found if c is not None))

    @property
    def ways(self) -> int:
        """How many ways lead out, the halt among them."""
        return len(self.successors) + bool(self.halts)


def always_taken(part: Part) -> bool:
    """Whether a branch whose guard is on is taken whatever its operands."""
    return not part.operation.count and part.operation.inputs in ((), ("link",))


class Contexts:
    """Steps contexts of one program."""

    def __init__(self, ready: Preparation) -> None:
        self.ready = ready
        self.core: Core = ready.core
        self.registers = [site.write.register for site in ready.sites]
        self.sticky = [site.write.what == "sticky" for site in ready.sites]

    def register(self, flight: Flight) -> int:
        return self.registers[flight.number]

    def cluster(self, number: int) -> int:
        return self.core.register_clusters[self.registers[number]]

    def step(self, context: Context) -> Step:
        prepared = self.ready[context.at]
        due = tuple(f for f in context.flights if f.beats == 0)
        staying = tuple(f for f in context.flights if f.beats > 0)
        base = Step(context, prepared, True, due, staying)
        if self.core.interlocked:
            waiting = self._waiting(base)
            if waiting.held or waiting.leave:
                return waiting
            base = waiting
        return self._issue(base)

    # ---------------------------------------------------------------------------------------------------------- wait

    def _waiting(self, step: Step) -> Step:
        """Why an interlocked bundle may wait."""
        parts, context = step.prepared.parts, step.context
        guards = {p.instruction.guard.register for p in parts if p.instruction.guard}
        named = {r.register for p in parts for r in p.effects.reads} | {
            w.register for p in parts for w in p.effects.writes
        }
        busy = dict(context.busy)
        guard_holds = tuple(f for f in step.staying if self.register(f) in guards)
        holds = tuple(f for f in step.staying if self.register(f) in named)
        held = any(f.sure for f in guard_holds)
        twice, leave = self._twice(parts)
        if not held and leave:
            return step._replace(leave=True)
        held = held or any(f.sure for f in holds) or any(p.instruction.slot in busy for p in parts)
        crowds = () if held else self._crowds(parts, step.staying)
        waiting = None
        if held or guard_holds or holds or crowds:
            waiting = self._next(step, context.at, context.within, context.turns, step.staying, {}, context.waited)
        refreshed = None
        if not held and not context.waited and self._may_be_fresh(step):
            refreshed = self._next(step, context.at, context.within, context.turns, step.staying, {}, True)
        return step._replace(
            leave=False, guard_holds=guard_holds, holds=holds, held=held, crowds=crowds, twice=twice,
            waiting=waiting, refreshed=refreshed,
        )  # fmt: skip

    def _may_be_fresh(self, step: Step) -> bool:
        landed = {self.register(f) for f in step.due}
        return any(link.fresh == "stall" and r in landed for _, r, link in step.prepared.fresh)

    @staticmethod
    def _twice(parts: Sequence[Part]) -> tuple[tuple[tuple[int, int], ...], bool]:
        """Pairs of parts that name one register as written, and whether some pair is on for sure."""
        pairs, sure = [], False
        for k, part in enumerate(parts):
            own = {w.register for w in part.effects.writes if w.what != "sticky"}
            for j, other in enumerate(parts[:k]):
                if own & {w.register for w in other.effects.writes if w.what != "sticky"}:
                    pairs.append((j, k))
                    sure |= part.instruction.guard is None and other.instruction.guard is None
        return tuple(pairs), sure

    def _crowds(
        self, parts: Sequence[Part], staying: Sequence[Flight]
    ) -> tuple[tuple[int, tuple[tuple[int, int], ...], tuple[Flight, ...]], ...]:
        own: dict[tuple[int, int], list[tuple[int, int]]] = {}
        for k, part in enumerate(parts):
            for write, n in zip(part.effects.writes, part.numbers, strict=True):
                own.setdefault((write.latency, self.cluster(n)), []).append((k, n))
        found, may_wait = [], False
        for (latency, cluster), mine in own.items():
            beside = tuple(f for f in staying if f.beats == latency and self.cluster(f.number) == cluster)
            ports = self.core.clusters[cluster].write_ports
            if len(mine) + len(beside) > ports:
                found.append((ports, tuple(mine), beside))
                may_wait |= bool(beside)
        return tuple(found) if may_wait else ()

    # --------------------------------------------------------------------------------------------------------- issue

    def _issue(self, step: Step) -> Step:
        context, prepared, core = step.context, step.prepared, self.core
        parts = prepared.parts
        branches = [k for k, part in enumerate(parts) if part.branches]
        busy = dict(context.busy)
        leave = (
            prepared.static is not None
            or any(p.instruction.slot in busy for p in parts)
            or (branches and not core.branch.overlap and (len(branches) > 1 or bool(context.turns)))
            or any(parts[k].target_register is not None and self._sure(parts[k]) for k in branches)
            or any(parts[k].uses_link and parts[k].link is None and self._on(parts[k]) for k in branches)
        )
        if leave:
            return Step(context, prepared, True, step.due, step.staying)
        new = [
            (k, Flight(write.latency, n, self._on(part) and write.what != "count"))
            for k, part in enumerate(parts)
            for write, n in zip(part.effects.writes, part.numbers, strict=True)
        ]
        latency = core.branch.latency
        issued = tuple(Turn(latency, context.at, k, self._sure(parts[k])) for k in branches)
        turns = [*context.turns, *issued]
        landing = tuple(t for t in turns if t.bundles == 1)
        flying = tuple(t._replace(bundles=t.bundles - 1) for t in turns if t.bundles > 1)
        flights = (*step.staying, *(f for _, f in new))
        taken = {p.instruction.slot: p.effects.busy for p in parts}
        step = step._replace(
            leave=False, new=tuple(new), issued=issued, landing=landing,
            halts=tuple(k for k, p in enumerate(parts) if p.operation.kind is Kind.HALT),
        )  # fmt: skip
        if any(self._on(parts[k]) for k in step.halts):
            return step
        turned = []
        for turn in landing:
            target = self.ready[turn.bundle].parts[turn.part].target
            turned.append(None if target is None else self._next(step, target, 0, flying, flights, taken, False))
        fallen = None
        if not any(t.sure for t in landing):
            within = context.within + 1
            at, within = (context.at, within) if within < prepared.bundle.beats else (context.at + 1, 0)
            if at < len(self.ready.program.bundles):
                fallen = self._next(step, at, within, flying, flights, taken, False)
        return step._replace(turned=tuple(turned), fallen=fallen)

    @staticmethod
    def _on(part: Part) -> bool:
        return part.instruction.guard is None

    def _sure(self, part: Part) -> bool:
        """Whether a branch is taken for sure."""
        return self._on(part) and always_taken(part)

    def _next(
        self,
        step: Step,
        at: int,
        within: int,
        turns: Iterable[Turn],
        flights: Iterable[Flight],
        taken: dict[int, int],
        waited: bool,
    ) -> Context:
        busy = {slot: beats - 1 for slot, beats in step.context.busy if beats > 1}
        for slot, beats in taken.items():
            if beats > 1:
                busy[slot] = max(busy.get(slot, 0), beats - 1)
        return Context(
            at,
            within,
            waited,
            tuple(sorted(f.later for f in flights)),
            tuple(sorted(turns)),
            tuple(sorted(busy.items())),
        )
