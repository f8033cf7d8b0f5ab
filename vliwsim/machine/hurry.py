"""The hot loop of the stepper: ordinary beats, a look-up each.

Equals repeated :meth:`vliwsim.machine.stepper.Machine.step`, and tests hold it to that: it inlines ``land``, ``read``,
``execute``, ``commit`` and ``redirect`` of :mod:`vliwsim.machine.beat` for bundles laid out as rows. ``tools/bench``
shows what the inlining pays.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from itertools import pairwise
from operator import itemgetter
from typing import TYPE_CHECKING, Any

from vliwsim.description.values import UndefinedOperand, join
from vliwsim.machine import beat as phases
from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.memory import ALL_DEFINED, ALL_OWNED, Touch
from vliwsim.machine.parts import WORD
from vliwsim.machine.prepared import Prepared
from vliwsim.machine.rows import LOAD, MANY, ONE, TWO
from vliwsim.machine.state import Batch, State

if TYPE_CHECKING:
    from vliwsim.machine.stepper import Machine

SHIFTS = {1: 0, 2: 1, 4: 2, 8: 3}
REMEMBERED = 4096
"""Landing sets whose verdict is kept; beyond that it starts afresh."""


def _judge_landing(machine: Machine, state: State, due: list[Batch], key: object) -> tuple[tuple[int, ...], ...] | None:
    """Operand indices each batch lands in, or None if it needs the definition (a hazard, or sticky results)."""
    sites, core = machine.ready.sites, machine.core
    numbers = [n for batch, _ in due for n in batch]
    if any(sites[n].write.what == "sticky" for n in numbers):
        return None
    try:
        phases.judge_landing(machine.ready, state, numbers)
    except HazardMet:
        return None
    zero = {core.register_numbers[name] for name in core.zero_registers}
    nowhere = -1  # the operand file's last place
    targets = tuple(
        tuple(nowhere if sites[n].write.register in zero else sites[n].write.register for n in batch)
        for batch, _ in due
    )
    if len(machine.verdicts) >= REMEMBERED:
        machine.verdicts.clear()
    machine.verdicts[key] = targets
    return targets


def _watcher(machine: Machine, index: int) -> Callable[[Sequence[int]], tuple[int, ...]]:
    """Picks from ``State.ready`` what bundle ``index`` watches."""
    found = machine.watchers.get(index)
    if found is None:
        watch = machine.ready[index].watch
        found = machine.watchers[index] = itemgetter(*watch, *watch[:1]) if watch else lambda _: (0, 0)
    return found


def hurry(machine: Machine, state: State, until: int) -> None:
    """The hot loop: beats that need nothing special. Returns at the start of one that does, or at ``until``.

    Equals repeated :meth:`step` (tests hold them to it); it inlines ``land``, ``read``, ``execute``, ``commit`` and
    ``redirect`` of :mod:`vliwsim.machine.beat` for bundles laid out as rows. Whatever it cannot decide in a look-up
    it leaves to ``step``: nothing of a beat is changed before the beat is known to be ordinary. `tools/bench` shows
    what the inlining pays.
    """
    ready, core, sites = machine.ready, machine.core, machine.ready.sites
    operands, flight, redirects, counts = state.operands, state.flight, state.redirects, state.counts
    views, status = state.memory.views, state.memory.status_views
    verdicts, size_of_program = machine.verdicts, len(machine.program.bundles)
    memory, branch_latency, overlap = core.memory, core.branch.latency, core.branch.overlap
    penalties = bool(core.branch.taken_penalty or core.words.straddle_freeze)
    width, banks = memory.bank_width, memory.banks
    waits = bool(memory.waits)
    track = core.interlocked or core.issue.early != "old"
    least_ports = min(c.write_ports for c in core.clusters)
    interlocked, rejects = core.interlocked, memory.conflict == "reject"
    update_latency, stalls = core.latency.of_class("update"), state.stalls
    latest, busy_until = state.ready, state.busy_until
    horizon = max(busy_until)
    touched: list[tuple[int, int, bool]] = []
    cycle, beat, issue, at, within = state.cycle, state.beat, state.issue, state.at, state.within
    last_branch = state.last_branch
    prepared = ready[at]
    rows = prepared.rows
    try:
        while cycle < until:
            if rows is None or (track and max(_watcher(machine, at)(latest)) > beat):
                return
            if not overlap and rows.branch and issue - last_branch < branch_latency:
                return
            if beat < horizon and any(busy_until[p.instruction.slot] > beat for p in prepared.parts):
                return
            if interlocked and _crowded(flight, prepared, beat, least_ports):
                return

            # land: a verdict on the set of write numbers is remembered. Landing again by definition does no harm,
            # so what is due stays in flight until the beat is known to be ordinary.
            due = flight.get(beat)
            if due is not None:
                if prepared.fresh:
                    return
                key: object = due[0][0] if len(due) == 1 else tuple([batch[0] for batch in due])
                targets = verdicts.get(key) or _judge_landing(machine, state, due, key)
                if targets is None:
                    return
                for places, (_, landing) in zip(targets, due):
                    for place, value in zip(places, landing):
                        operands[place] = value

            # read and execute: an undefined operand raises, and the definition takes over
            if rows.accesses:
                touched.clear()
            out: list[tuple[int, tuple[int, ...], list[Any]]] = []
            for latency, numbers, row_list in rows.groups:
                values: list[Any] = []
                numbers_on: list[int] = []
                for guard, negated, shape, function, a, b, c, own in row_list:
                    if guard >= 0 and (operands[guard] == 0) != negated:
                        continue
                    if numbers is None:
                        numbers_on += own
                    if shape == TWO:
                        values.append(function(operands[a], operands[b]))
                    elif shape == LOAD:
                        address = (operands[a] + operands[b]) & WORD
                        if address & (c - 1):
                            return
                        place = address >> SHIFTS[c]
                        if status[c][place] != ALL_DEFINED[c]:
                            return
                        touched.append((address, c, False))
                        if len(own) == 1:
                            values.append(function(views[c][place]))
                        else:
                            values += function(views[c][place])
                    elif shape == ONE:
                        values.append(function(operands[a]))
                    elif shape == MANY:
                        values += function(*[operands[k] for k in a])
                    else:
                        values.append(function(operands[a], operands[b], operands[c]))
                if values:
                    out.append((latency, numbers or tuple(numbers_on), values))
            stores: list[tuple[int, int, int]] = []
            for guard, negated, function, source, odd, base, step, size in rows.stores:
                if guard >= 0 and (operands[guard] == 0) != negated:
                    continue
                address = (operands[base] + operands[step]) & WORD
                if address & (size - 1):
                    return
                place = address >> SHIFTS[size]
                owned = ALL_OWNED[size]
                if status[size][place] & owned != owned:
                    return
                value = function(operands[source] if odd < 0 else join(operands[source], operands[odd]))
                if value.__class__ is not int:
                    return
                touched.append((address, size, True))
                stores.append((size, place, value))
            if len(stores) > 1 and _overlap(touched):
                return
            freeze = 0
            if rows.accesses and (waits or (len(touched) > 1 and not _two_banks(touched, width, banks))):
                conflict, waited = state.memory.charge([Touch(*touch) for touch in touched])
                freeze = conflict + waited
                if (conflict and rejects) or (freeze and cycle + 1 + freeze > until):
                    return

            # branch, and where to go next
            taken = False
            following: int | None
            branch = rows.branch
            if branch is not None:
                guard, negated, decide, sources, target, number = branch
                if guard < 0 or (operands[guard] == 0) == negated:
                    if decide is None:
                        taken = True
                    elif number < 0:
                        taken = bool(decide(*[operands[k] for k in sources]))
                    else:
                        value, taken = decide(operands[sources[0]])
                        if taken:
                            out.append((update_latency, (number,), [value]))
            index = issue + 1
            landed = False
            if taken and branch_latency == 1:
                following, landed = target, True
            elif redirects and index in redirects:
                following, landed = redirects[index], True
            elif within + 1 < prepared.bundle.beats:
                following = at
            else:
                following = at + 1
            if following is None or following >= size_of_program:
                return
            if landed and penalties:
                penalty = phases.redirect_freezes(ready, following)
                if cycle + 1 + freeze + sum(n for _, n in penalty) > until:
                    return

            # commit
            if due is not None:
                del flight[beat]
            for latency, numbers, values in out:
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
                status[size][place] = ALL_DEFINED[size]
            counts[at] += 1
            if freeze:
                stalls["bank"] += conflict
                stalls["wait"] += waited
                cycle += freeze
            if branch is not None:
                last_branch = issue
                if taken:
                    redirects[issue + branch_latency] = target
            cycle += 1
            beat += 1
            issue = index
            if landed:
                del redirects[index]
                within = 0
                if penalties:
                    for cause, cycles in penalty:
                        stalls[cause] += cycles
                        cycle += cycles
                if following != at:
                    at = following
                    prepared = ready[at]
                    rows = prepared.rows
            elif following == at:
                within += 1
            else:
                at, within = following, 0
                prepared = ready[at]
                rows = prepared.rows
    except (UndefinedOperand, IndexError):
        return  # an undefined operand, or an address beyond memory: the definition says what it means
    finally:
        state.cycle, state.beat, state.issue, state.at, state.within = cycle, beat, issue, at, within
        state.last_branch = last_branch


def _crowded(flight: Mapping[int, list[Batch]], prepared: Prepared, beat: int, least_ports: int) -> bool:
    """Whether results might not fit the write ports beside those in flight, so that an interlocked bundle may wait."""
    for latency, most in prepared.writes:
        batches = flight.get(beat + latency)
        if batches and most + sum(len(numbers) for numbers, _ in batches) > least_ports:
            return True
    return False


def _two_banks(touched: Sequence[tuple[int, int, bool]], width: int, banks: int) -> bool:
    """Whether the accesses are two, each within one word, of different banks: then nothing freezes."""
    if len(touched) != 2:
        return False
    (one, size, _), (other, another, _) = touched
    return size <= width and another <= width and one // width % banks != other // width % banks


def _overlap(touched: Sequence[tuple[int, int, bool]]) -> bool:
    """Whether two stores touch one byte."""
    ends = sorted((address, address + size) for address, size, store in touched if store)
    return any(start < end for (_, end), (start, _) in pairwise(ends))
