"""The hot loop of the stepper: ordinary beats, a look-up each.

Equals repeated :meth:`vliwsim.machine.stepper.Machine.step`, and tests hold it to that: it inlines ``land``, ``read``,
``execute``, ``commit`` and ``redirect`` of :mod:`vliwsim.machine.beat`; what a bundle computes is a generated function
(:mod:`vliwsim.machine.generated`). ``tools/bench`` shows what the inlining pays.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial
from operator import itemgetter
from typing import Any

from vliwsim.description.values import UndefinedOperand, Value
from vliwsim.machine import beat as phases
from vliwsim.machine.generated import bundle_function, landing_function
from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.memory import ALL_DEFINED, SIZES
from vliwsim.machine.prepared import Preparation
from vliwsim.machine.state import Batch, State

Entry = tuple[Any, Any, bool, tuple[int, ...], tuple[tuple[int, int], ...], int, int | None, bool]
"""A bundle for the hot loop: its function, what picks from ``State.ready`` the registers it watches, whether it cares
for freshness, its slots, (latency, most results) pairs, beats, branch target, and whether it holds a branch."""

Land = Callable[[list[Value], Sequence[Batch]], None]

STEPPED_FIRST = 4
"""Beats a bundle is stepped, in all runs of a machine, before a function is generated for it: most code of a program
runs only a few times."""

REMEMBERED = 4096
"""Landing sets whose verdict is kept; beyond that it starts afresh."""


class HotLoop:
    """The hot loop of one program, and what it remembers of it: bundles' functions, and verdicts on landing sets."""

    def __init__(self, ready: Preparation) -> None:
        self.ready, self.core = ready, ready.core
        self.entries: list[Entry | None] = [None] * len(ready.program.bundles)
        self.stepped = [0] * len(self.entries)
        self.verdicts: dict[object, Land] = {}
        self.met: dict[object, int] = {}

    def run(self, state: State, until: int) -> None:
        """Run ordinary beats. Returns at the start of one that is not, or at ``until`` (a cycle).

        Whatever it cannot decide in a look-up it leaves to ``step``: nothing of a beat is changed before the beat is
        known to be ordinary, but for landings, which may be made twice.
        """
        core, sites = self.core, self.ready.sites
        operands, flight, redirects = state.operands, state.flight, state.redirects
        counts, begun = state.counts, state.begun
        views, status, memory = state.memory.views, state.memory.status_views, state.memory
        verdicts, entries, size_of_program = self.verdicts, self.entries, len(self.ready.program.bundles)
        branch_latency, overlapping = core.branch.latency, core.branch.overlap
        penalties = bool(core.branch.taken_penalty or core.words.straddle_freeze)
        rejects = core.memory.conflict == "reject"
        interlocked, track = core.interlocked, core.interlocked or core.issue.early != "old"
        least_ports = min(c.write_ports for c in core.clusters)
        stalls, latest, busy_until = state.stalls, state.ready, state.busy_until
        horizon = max(busy_until)
        cycle, beat, issue, at, within = state.cycle, state.beat, state.issue, state.at, state.within
        last_branch = state.last_branch
        following: int | None
        entry = entries[at]
        try:
            while cycle < until:
                if entry is None:
                    entry = self._entry(at)
                    if entry is None:
                        return
                run, watch, cares, slots, writes, beats, target, branches = entry
                if track and watch is not None and max(watch(latest)) > beat:
                    return
                if branches and not overlapping and issue - last_branch < branch_latency:
                    return
                if beat < horizon and any([busy_until[slot] > beat for slot in slots]):
                    return
                if interlocked and _crowded(flight, writes, beat, least_ports):
                    return

                # land: a verdict on the set of write numbers is remembered. Landing again by definition does no harm,
                # so what is due stays in flight until the beat is known to be ordinary.
                due = flight.get(beat)
                if due is not None:
                    if cares:
                        return
                    key: object = due[0][0] if len(due) == 1 else tuple([batch[0] for batch in due])
                    land = verdicts.get(key) or self._judge_landing(state, due, key)
                    if land is None:
                        return
                    land(operands, due)

                # read and execute: an undefined operand raises, and the definition takes over
                done = run(operands, views, status, memory)
                if done is None:
                    return
                results, stores, taken, charged = done
                after = cycle + 1
                if charged is not None:
                    conflict, waited = charged
                    after += conflict + waited
                    if (conflict and rejects) or after > until:
                        return

                # redirect
                index = issue + 1
                landed = False
                if taken and branch_latency == 1:
                    following, landed = target, True
                elif index in redirects:
                    following, landed = redirects[index], True
                elif within + 1 < beats:
                    following = at
                else:
                    following = at + 1
                if following is None or following >= size_of_program:
                    return
                if landed and penalties:
                    penalty = phases.redirect_freezes(self.ready, following)
                    after += sum([cycles for _, cycles in penalty])
                    if after > until:
                        return

                # commit
                if due is not None:
                    del flight[beat]
                for latency, numbers, values in results:
                    lands = beat + latency
                    batches = flight.get(lands)
                    if batches is None:
                        flight[lands] = [(numbers, values)]
                    else:
                        batches.append((numbers, values))
                    if track:
                        for n in numbers:
                            register = sites[n].write.register
                            latest[register] = max(latest[register], lands)
                for size, place, value in stores:
                    views[size][place] = value
                    status[size][place] = ALL_DEFINED[SIZES[size]]
                counts[at] += 1
                if not within:
                    begun[at] += 1
                if charged is not None:
                    stalls["bank"] += conflict
                    stalls["wait"] += waited
                if branches:
                    last_branch = issue
                    if taken:
                        redirects[issue + branch_latency] = target
                cycle = after
                beat += 1
                issue = index
                if landed:
                    del redirects[index]
                    within = 0
                    if penalties:
                        for cause, cycles in penalty:
                            stalls[cause] += cycles
                elif following == at:
                    within += 1
                else:
                    within = 0
                if following != at:
                    at = following
                    entry = entries[at]
        except (UndefinedOperand, IndexError):
            return  # an undefined operand, or an address beyond memory: the definition says what it means
        finally:
            state.cycle, state.beat, state.issue, state.at, state.within = cycle, beat, issue, at, within
            state.last_branch = last_branch

    def _judge_landing(self, state: State, due: list[Batch], key: object) -> Land | None:
        """What lands these batches, or None if only the definition can (a hazard, or sticky results)."""
        sites, core = self.ready.sites, self.core
        numbers = [n for batch, _ in due for n in batch]
        if any(sites[n].write.what == "sticky" for n in numbers):
            return None
        try:
            phases.judge_landing(self.ready, state, numbers)
        except HazardMet:
            return None
        zero = {core.register_numbers[name] for name in core.zero_registers}
        nowhere = -1  # the operand file's last place
        targets = tuple(
            tuple(nowhere if sites[n].write.register in zero else sites[n].write.register for n in batch)
            for batch, _ in due
        )
        if len(self.met) >= REMEMBERED:
            self.verdicts.clear()
            self.met.clear()
        self.met[key] = self.met.get(key, 0) + 1
        if self.met[key] < STEPPED_FIRST:
            return partial(_land, targets)
        land = self.verdicts[key] = landing_function(targets)
        return land

    def _entry(self, index: int) -> Entry | None:
        """What the hot loop needs of a bundle, made once it has been stepped often enough; None to step it again."""
        prepared = self.ready[index]
        rows = prepared.rows
        if rows is None:
            return None
        self.stepped[index] += 1
        if self.stepped[index] <= STEPPED_FIRST:
            return None
        watch = itemgetter(*prepared.watch, *prepared.watch[:1]) if prepared.watch else None
        target = rows.branch.target if rows.branch else None
        slots = tuple(part.instruction.slot for part in prepared.parts)
        entry = self.entries[index] = (
            bundle_function(index, rows, self.core, self.ready.constants),
            watch,
            bool(prepared.fresh),
            slots,
            prepared.writes,
            prepared.bundle.beats,
            target,
            rows.branch is not None,
        )
        return entry


def _land(targets: Sequence[Sequence[int]], operands: list[Value], due: Sequence[Batch]) -> None:
    """Equals the function that :func:`landing_function` makes."""
    for places, (_, landing) in zip(targets, due, strict=True):
        for place, value in zip(places, landing, strict=True):
            operands[place] = value


def _crowded(flight: Mapping[int, list[Batch]], writes: Sequence[tuple[int, int]], beat: int, least_ports: int) -> bool:
    """Whether results might not fit the write ports beside those in flight, so that an interlocked bundle may wait."""
    for latency, most in writes:
        batches = flight.get(beat + latency)
        if batches and most + sum(len(numbers) for numbers, _ in batches) > least_ports:
            return True
    return False
