"""One beat of a context, on every data it may meet: the contexts it leads to and the rules it may break.

The phases are those of :mod:`vliwsim.machine.beat`, with conditions in place of data. Where a rule depends on what is
not known, the finding says so (``sure`` is False); where the way on does, the step forks and each side learns its fact.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind
from vliwsim.flow.context import Context, Flight, Turn, normal
from vliwsim.flow.follow import Follow
from vliwsim.flow.values import ALWAYS, Condition, Constant, Knowledge, Known, Literal, both, literal
from vliwsim.machine.bundle_rules import BUSY, ROUND_ONE
from vliwsim.machine.prepared import Preparation, Prepared

HALTED = -1
"""Stands for the end of the program among successors."""


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


class _Fork(Exception):
    """The step needs to know more: it is taken once with each side of this literal."""

    def __init__(self, item: Literal) -> None:
        self.item = item


class Stepper:
    """Steps contexts of one program."""

    def __init__(self, ready: Preparation) -> None:
        self.ready = ready
        self.core: Core = ready.core
        self.follow = Follow(ready)

    def entry(self, facts: Sequence[tuple[int, bool]] = ()) -> Context:
        """The context before the first beat; ``facts``: (register number, is it nonzero) known of the inputs."""
        registers = self.follow.registers
        values: list[Known] = list(range(len(registers)))
        for name in self.core.zero_registers:
            if self.core.register_numbers[name] in registers:
                values[registers.index(self.core.register_numbers[name])] = Constant(0)
        knowledge = Knowledge()
        knowledge.learn(Literal(registers.index(r), nonzero) for r, nonzero in facts if r in registers)
        context = normal(0, 0, (), (), (), self.core.branch.latency, values, knowledge, False)
        assert context is not None
        return context

    def step(self, context: Context) -> Beat:
        """One beat of ``context``, or a fork of it."""
        try:
            return _Step(self, context).run()
        except _Fork as fork:
            return Beat("fork", tuple(c for c in _sides(context, fork.item) if c is not None), ())


def _sides(context: Context, item: Literal) -> Iterable[Context | None]:
    for side in (item, item.opposite):
        knowledge = context.knowledge
        if knowledge.learn([side]):
            yield normal(
                context.at,
                context.within,
                context.flights,
                context.turns,
                context.busy,
                context.behind,
                context.values,
                knowledge,
                context.waited,
            )


class _Step:
    """One beat under way."""

    def __init__(self, stepper: Stepper, context: Context) -> None:
        self.stepper, self.context = stepper, context
        self.ready, self.core, self.follow = stepper.ready, stepper.core, stepper.follow
        self.knowledge = context.knowledge
        self.values = list(context.values)
        self.prepared: Prepared = self.ready[context.at]
        self.findings: list[Finding] = []
        self.landed: list[tuple[int, bool]] = []
        self.guards: tuple[bool | None, ...] = ()
        self.flights = [f for f in context.flights if f.beats > 0]
        self.next_identity = 1 + max(
            [v for v in context.values if isinstance(v, int)]
            + [i.value for f in context.flights for i in f.on]
            + [v for f in context.flights for v in (f.value, f.since) if isinstance(v, int)]
            + [i.value for t in context.turns for i in t.on],
            default=-1,
        )  # fmt: skip

    def run(self) -> Beat:
        self.land([f for f in self.context.flights if f.beats == 0])
        cause = self.wait() if self.core.interlocked else None
        if cause:
            waited = self.context.waited or cause == "fresh"
            return self.beat(cause, [self.later(self.context.at, self.context.within, self.context.turns, waited)])
        if not self.read():
            return self.beat("issue", [])
        conditions = [self.guard(k) for k in range(len(self.prepared.parts))]
        self.guards = tuple(None if on else on is not None for on in conditions)
        turns, halts = self.execute()
        return self.redirect(turns, halts)

    # ------------------------------------------------------------------------------------------------------ helpers

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
            raise _Fork(item)
        return True

    # --------------------------------------------------------------------------------------------------------- land

    def land(self, due: Sequence[Flight]) -> None:
        self.landed += [(flight.number, not flight.on) for flight in due]
        self.judge_landing(due)
        for flight in due:
            if self.register(flight) in self.follow.index:
                self.bring(flight)

    def judge_landing(self, due: Sequence[Flight], sure: bool = True) -> None:
        """``lands-twice`` and ``write-ports`` of results that land together, ``sure`` if they land at all."""
        by_register: dict[int, list[Flight]] = {}
        for flight in due:
            if self.ready.sites[flight.number].write.what != "sticky":
                by_register.setdefault(self.register(flight), []).append(flight)
        for register, flights in by_register.items():
            for k, one in enumerate(flights):
                for other in flights[k + 1 :]:
                    if self.knowledge.possible(one.on, other.on):
                        both_on = sure and not one.on and not other.on
                        self.find("lands-twice", [self.site(one), self.site(other)], both_on, register=register)
        self.judge_ports(due, sure)

    def judge_ports(self, due: Sequence[Flight], sure: bool) -> None:
        for index, cluster in enumerate(self.core.clusters):
            here = [f for f in due if self.core.register_clusters[self.register(f)] == index]
            if len(here) <= cluster.write_ports or self.most(f.on for f in here) <= cluster.write_ports:
                continue
            all_on = sure and sum(not f.on for f in here) > cluster.write_ports
            self.find("write-ports", [self.site(f) for f in here], all_on, detail=cluster.name)

    def most(self, conditions: Iterable[Condition]) -> int:
        """An upper bound of how many of the conditions may hold together: literals of one value exclude each other."""
        count, sides = 0, dict[int, list[int]]()
        for on in conditions:
            if len(on) == 1:
                (item,) = on
                sides.setdefault(item.value, [0, 0])[item.nonzero] += 1
            else:
                count += 1
        return count + sum(max(pair) for pair in sides.values())

    def bring(self, flight: Flight) -> None:
        """A result reaches a register whose value is followed."""
        register = self.register(flight)
        if self.core.register_names[register] in self.core.zero_registers:
            return
        index = self.follow.index[register]
        old, new = self.values[index], flight.value
        assert new is not None
        if not flight.on or old == new:
            self.values[index] = new
        elif flight.since is not None and old == flight.since and flight.on == literal(flight.since, True):
            self.values[index] = new  # counted down where not zero, and still the same zero where it is
        else:
            self.values[index] = self.fresh_identity()

    # --------------------------------------------------------------------------------------------------------- wait

    def wait(self) -> str | None:
        parts = self.prepared.parts
        for part in parts:
            if part.instruction.guard and self.pending(part.instruction.guard.register):
                return "hold"
        self.judge_written_twice()
        busy = dict(self.context.busy)
        for part in parts:
            registers = [r.register for r in part.effects.reads] + [w.register for w in part.effects.writes]
            if any(self.pending(register) for register in registers) or part.instruction.slot in busy:
                return "hold"
        if not self.fits_ports():
            return "hold"
        if not self.context.waited:
            for _, register, link in self.prepared.fresh:
                if link.fresh == "stall" and self.just_landed(register):
                    return "fresh"
        return None

    def pending(self, register: int) -> bool:
        """Whether a register has a result in flight; forks where that depends on a guard."""
        return any([self.decide(self.knowledge.settle(f.on)) for f in self.flights if self.register(f) == register])

    def just_landed(self, register: int) -> bool:
        due = [f for f in self.context.flights if f.beats == 0 and self.register(f) == register]
        return any([self.decide(f.on) for f in due])

    def judge_written_twice(self) -> None:
        named: list[tuple[int, int, Condition]] = []
        for k, part in enumerate(self.prepared.parts):
            on = self.guard(k)
            if on is None:
                continue
            for register in dict.fromkeys(w.register for w in part.effects.writes if w.what != "sticky"):
                for other, j, other_on in named:
                    if other == register and self.knowledge.possible(on, other_on):
                        sure = not on and not other_on
                        self.find("written-twice", [self.here(j), self.here(k)], sure, register=register)
                named.append((register, k, on))

    def fits_ports(self) -> bool:
        """Whether the results fit the ports beside those in flight; forks where guards decide."""
        clusters = self.core.register_clusters
        beside: dict[tuple[int, int], list[Flight]] = {}
        for flight in self.flights:
            beside.setdefault((flight.beats, clusters[self.register(flight)]), []).append(flight)
        own: dict[tuple[int, int], list[int]] = {}
        for k, part in enumerate(self.prepared.parts):
            for write in part.effects.writes:
                own.setdefault((write.latency, clusters[write.register]), []).append(k)
        crowded = [key for key, mine in own.items() if len(mine) + len(beside.get(key, ())) > self.ports(key)]
        if not crowded:
            return True
        counts = {key: sum(self.decide(self.writes(k)) for k in mine) for key, mine in own.items()}
        if any(count > self.ports(key) for key, count in counts.items()):
            return True
        for key in crowded:
            if counts[key] and counts[key] + sum(self.decide(f.on) for f in beside.get(key, ())) > self.ports(key):
                return False
        return True

    def ports(self, key: tuple[int, int]) -> int:
        return self.core.clusters[key[1]].write_ports

    def writes(self, k: int) -> Condition | None:
        """The condition that instruction ``k`` has results: its guard, and for a ``count`` that it branches."""
        part, on = self.prepared.parts[k], self.guard(k)
        if part.operation.count:
            counted = literal(self.value(part.inputs[0].index), True)
            joined = both(on, counted)
            return None if joined is None else self.knowledge.settle(joined)
        return on

    # --------------------------------------------------------------------------------------------------------- read

    def read(self) -> bool:
        """Judge both rounds; False where the bundle cannot issue on any data."""
        prepared, static = self.prepared, self.prepared.static
        busy = dict(self.context.busy)
        taken = [k for k, part in enumerate(prepared.parts) if part.instruction.slot in busy]
        if taken and not (static and (static[0], static[1]) < (taken[0], BUSY)):
            self.find("busy", [self.here(taken[0])], True)
            return False
        if static:
            self.find(ROUND_ONE[static[1]], [self.here(static[0])], True, detail=static[2])
            return False
        for k, register, link in prepared.fresh:
            if link.fresh != "reject":
                continue
            for flight in self.context.flights:
                if flight.beats == 0 and self.register(flight) == register:
                    self.find("fresh", [self.here(k), self.site(flight)], not flight.on, register=register)
        for k, part in enumerate(prepared.parts):
            guard, on = part.instruction.guard, self.guard(k)
            if guard:
                self.judge_early(k, guard.register, ALWAYS)
            if on is not None:
                for register in dict.fromkeys(r.register for r in part.effects.reads):
                    self.judge_early(k, register, on)
        return True

    def judge_early(self, k: int, register: int, on: Condition) -> None:
        flights = [f for f in self.flights if self.register(f) == register and self.knowledge.possible(on, f.on)]
        if flights:
            sure = not on and any(not f.on for f in flights)
            sites = [self.here(k), *(self.site(f) for f in flights)]
            beats = min(f.beats for f in flights)
            self.find("early-read", sites, sure, register=register, beats=beats)

    # ------------------------------------------------------------------------------------------------------ execute

    def execute(self) -> tuple[list[Turn], Condition | None]:
        """Results take off; the branches issued, and the condition that the bundle halts."""
        turns: list[Turn] = []
        halts: list[Condition] = []
        started: list[Flight] = []
        for k, part in enumerate(self.prepared.parts):
            on = self.guard(k)
            if on is None:
                continue
            if part.operation.kind is Kind.HALT:
                halts.append(on)
            brings, since = self.follow.result(self, part)
            if part.branches:
                taken = both(on, self.follow.taken(self, part))
                taken = None if taken is None else self.knowledge.settle(taken)
                if taken is not None:
                    target = self.follow.target(self, part)
                    turns.append(Turn(self.core.branch.latency, self.here(k), taken, target))
                if part.operation.count:
                    on = taken
            if on is None:
                continue
            for write, number in zip(part.effects.writes, part.numbers, strict=True):
                value = None
                if write.register in self.follow.index:
                    value = (
                        brings if write.what in ("result", "count") and brings is not None else self.fresh_identity()
                    )
                started.append(Flight(write.latency, number, on, value, since if write.what == "count" else None))
        self.flights += started
        if not halts:
            return turns, None
        return turns, ALWAYS if any(not h for h in halts) else halts[0]

    # ----------------------------------------------------------------------------------------------------- redirect

    def redirect(self, issued: list[Turn], halts: Condition | None) -> Beat:
        context, prepared = self.context, self.prepared
        for k, one in enumerate(issued):
            for other in issued[k + 1 :]:
                if self.knowledge.possible(one.on, other.on):
                    self.find("two-redirects", [one.site, other.site], not one.on and not other.on)
        self.judge_branches()
        turns = [*context.turns, *issued]
        successors: list[Context | None] = []
        if halts is not None:
            for turn in turns:
                if self.knowledge.possible(turn.on, halts):
                    at_halt = [self.here(k) for k, p in enumerate(prepared.parts) if p.operation.kind is Kind.HALT]
                    self.find("branch-past-halt", [turn.site, *at_halt], not turn.on and not halts)
            self.drain(halts)
            successors.append(None)
            if not halts:
                return self.beat("issue", successors)
            if not self.learn_opposite(halts):
                return self.beat("issue", successors)
        landing = [t for t in turns if t.bundles == 1]
        flying = [t for t in turns if t.bundles > 1]
        for turn in landing:
            successors += self.taken(turn, flying)
        if all(turn.on for turn in landing):
            successors += self.not_taken(landing, flying)
        return self.beat("issue", successors)

    def drain(self, halts: Condition) -> None:
        """Judge what lands behind a ``halt``."""
        kept = self.knowledge
        self.knowledge = Knowledge(kept.facts, kept.implied)
        if self.knowledge.learn(sorted(halts)):
            by_beat: dict[int, list[Flight]] = {}
            for flight in self.flights:
                on = self.knowledge.settle(flight.on)
                if on is not None:
                    by_beat.setdefault(flight.beats, []).append(attrs.evolve(flight, on=on))
            for _, flights in sorted(by_beat.items()):
                self.judge_landing(flights, not halts)
        self.knowledge = kept

    def learn_opposite(self, condition: Condition) -> bool:
        """Go on where ``condition`` does not hold; False if it then cannot go on."""
        return len(condition) > 1 or self.knowledge.learn(item.opposite for item in condition)

    def taken(self, turn: Turn, flying: Sequence[Turn]) -> list[Context]:
        knowledge = Knowledge(self.knowledge.facts, self.knowledge.implied)
        if not knowledge.learn(sorted(turn.on)):
            return []
        if turn.target is None:
            self.find("indirect-target", [turn.site], False)
            return []
        if turn.target < 0:
            self.find("ran-off-the-end", [turn.site], True, detail="a branch goes where no bundle begins")
            return []
        return self.some(self.later(turn.target, 0, flying, False, knowledge))

    def not_taken(self, landing: Sequence[Turn], flying: Sequence[Turn]) -> list[Context]:
        knowledge = Knowledge(self.knowledge.facts, self.knowledge.implied)
        for turn in landing:
            if len(turn.on) == 1 and not knowledge.learn(item.opposite for item in turn.on):
                return []
        at, within = self.context.at, self.context.within + 1
        if within >= self.prepared.bundle.beats:
            at, within = at + 1, 0
        if at >= len(self.ready.program.bundles):
            self.find("ran-off-the-end", [], True, detail="the program ends without halt")
            return []
        return self.some(self.later(at, within, flying, False, knowledge))

    @staticmethod
    def some(context: Context | None) -> list[Context]:
        return [] if context is None else [context]

    def judge_branches(self) -> None:
        branches = [k for k, part in enumerate(self.prepared.parts) if part.branches]
        crowded = len(branches) > 1 or self.context.behind < self.core.branch.latency
        if branches and crowded and not self.core.branch.overlap:
            self.find("branch-overlap", [self.here(k) for k in branches], True)
        for k in branches:
            part, on = self.prepared.parts[k], self.guard(k)
            if part.uses_link and part.link is None and on is not None:
                self.find("link-nowhere", [self.here(k)], not on)

    def later(
        self, at: int, within: int, turns: Iterable[Turn], waited: bool, knowledge: Knowledge | None = None
    ) -> Context | None:
        """The context of the next beat. With ``knowledge`` given a bundle has issued, else the same bundle waits."""
        issued = knowledge is not None
        busy = {slot: beats - 1 for slot, beats in self.context.busy}
        behind = self.context.behind
        if issued:
            for part in self.prepared.parts:
                slot = part.instruction.slot
                busy[slot] = max(busy.get(slot, 0), part.effects.busy - 1)
            has_branch = any(part.branches for part in self.prepared.parts)
            behind = 1 if has_branch else min(behind + 1, self.core.branch.latency)
            turns = [attrs.evolve(t, bundles=t.bundles - 1) for t in turns]
        flights = [attrs.evolve(f, beats=f.beats - 1) for f in self.flights]
        return normal(
            at,
            within,
            flights,
            turns,
            [(s, n) for s, n in busy.items() if n > 0],
            behind,
            self.values,
            knowledge or self.knowledge,
            waited,
        )
