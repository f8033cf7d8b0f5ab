"""What happened, looked up backwards: stretches of a run are run again and written down, a stretch at a time.

Nothing is kept of a run but its snapshots. A question about the past goes backwards through the stretches between
them, leaves out those in which nothing happened that it asks for (the snapshots' own counts of bundles say so), and
runs the others again; at most :data:`LONGEST` cycles are written down at any time.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cached_property

import attrs

from vliwsim.description.operations import Kind
from vliwsim.description.values import Value
from vliwsim.machine.state import State
from vliwsim.shell.history import SLICE, History, Saved, Watch
from vliwsim.shell.moment import guard_is_on, seen
from vliwsim.shell.session import Session

LONGEST = 4096
"""Cycles of one stretch."""


@attrs.frozen(eq=False)
class Beat:
    """One issued bundle: ``registers`` is the operand file it read, ``counted`` the pass of its section, from 1."""

    cycle: int
    beat: int
    bundle: int
    within: int
    counted: int
    registers: list[Value]


@attrs.frozen(eq=False)
class Landed:
    """One result that landed in ``beat``, by write number."""

    beat: int
    number: int
    value: Value


@attrs.frozen(eq=False)
class Store:
    """One store: ``size`` bytes at ``address`` by an instruction of the bundle issued in ``beat``."""

    beat: int
    bundle: int
    instruction: int
    address: int
    size: int


@attrs.frozen(eq=False)
class Stretch:
    """What happened in a stretch: the beats that issued, by beat; landings by register, in order."""

    session: Session
    beats: dict[int, Beat]
    landings: dict[int, list[Landed]]

    @cached_property
    def stores(self) -> list[Store]:
        """Every store, in order."""
        found = []
        parts_of = self.session.machine.ready
        storing = {
            index
            for index in {b.bundle for b in self.beats.values()}
            if any(part.operation.kind is Kind.STORE for part in parts_of[index].parts)
        }
        for b in self.beats.values():
            if b.bundle in storing:
                found += stores_in(self.session, b)
        return found

    @cached_property
    def stores_by_byte(self) -> dict[int, list[Store]]:
        """Stores by the bytes they write, in order."""
        found: dict[int, list[Store]] = {}
        for store in self.stores:
            for byte in range(store.address, store.address + store.size):
                found.setdefault(byte, []).append(store)
        return found


def stores_in(session: Session, beat: Beat) -> list[Store]:
    """What an issued bundle stored."""
    found = []
    for k, part in enumerate(session.machine.ready[beat.bundle].parts):
        access = part.operation.access
        if access and access.store and part.reach and guard_is_on(part, beat.registers):
            address = part.reach.address(beat.registers[part.reach.base], beat.registers[part.reach.step])
            assert isinstance(address, int)
            found.append(Store(beat.beat, beat.bundle, k, address, access.bytes))
    return found


def written_down(session: Session, history: History, saved: Saved, until: int, ended: bool) -> Stretch:
    """Run again from a snapshot to cycle ``until`` (not included), written down.

    ``until`` does not lie beyond where this course is known to go. ``ended``: the run is over there, so that what lands
    last, which costs no cycle, belongs to the stretch.
    """
    machine, layout, engine = session.machine, session.layout, history.engine
    state = machine.start({}, (), session.state.memory.regions)
    state.restore(saved)
    stretch = Stretch(session, {}, {})
    while not state.finished and (state.cycle < until or ended):
        if state.frozen:
            engine.advance(state, min(until, state.cycle + sum(int(n) for _, n in state.frozen)))
            if state.cycle >= until:
                break
            continue
        if state.halt_beat is not None:  # beats and cycles go together in the drain
            after = state.beat + until - state.cycle
            _note_landings(session, stretch, state, [b for b in sorted(state.flight) if ended or b < after])
            break
        _note_landings(session, stretch, state, [state.beat])
        registers, issue = seen(machine, state), state.issue
        event = Beat(state.cycle, state.beat, state.at, state.within, layout.pass_of(state), registers)
        engine.advance(state, state.cycle + 1)
        if state.issue != issue:
            stretch.beats[event.beat] = event
    return stretch


def _note_landings(session: Session, stretch: Stretch, state: State, beats: list[int]) -> None:
    sites = session.machine.ready.sites
    for beat in beats:
        for numbers, values in state.flight.get(beat, ()):
            for n, value in zip(numbers, values, strict=True):
                register = sites[n].write.register
                stretch.landings.setdefault(register, []).append(Landed(beat, n, value))


Quiet = Callable[[Saved, Saved], bool]
"""(state at the beginning, state at the end of a stretch) → nothing in between that matters."""


def backwards(
    session: Session, history: History, until: int, quiet: Quiet, watch: Watch | None = None
) -> Iterator[Stretch]:
    """Stretches of one course of time before cycle ``until``, latest first, without those that are ``quiet``.

    Ends at the beginning of the course; what came before belongs to its parent. Ends early when ``watch`` asks to stop.
    """
    end = session.machine.start({}, (), session.state.memory.regions)
    history.put(end, until)
    high, after = end.cycle, end.save()
    ended = end.finished
    for cycle, saved in list(history.snapshots(high)):
        yield from _within(session, history, (saved, cycle), (after, high), ended, quiet, watch)
        high, after, ended = cycle, saved, False
        if watch and watch(cycle):
            return


def _within(
    session: Session,
    history: History,
    low: tuple[Saved, int],
    high: tuple[Saved, int],
    ended: bool,
    quiet: Quiet,
    watch: Watch | None,
) -> Iterator[Stretch]:
    """The stretches between two snapshots, halving what is too long."""
    (before, first), (after, end) = low, high
    if quiet(before, after):
        return
    if end - first <= LONGEST:
        yield written_down(session, history, before, end, ended)
        return
    state = session.machine.start({}, (), session.state.memory.regions)
    state.restore(before)
    middle = (first + end) // 2
    while state.cycle < middle:
        history.engine.advance(state, min(middle, state.cycle + SLICE))
        if watch and watch(state.cycle):
            return
    between = (state.save(), middle)
    yield from _within(session, history, between, high, ended, quiet, watch)
    yield from _within(session, history, low, between, False, quiet, watch)
