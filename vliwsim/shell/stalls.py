"""Why a cycle issues nothing: the cause, and the operations, registers, units or addresses behind it."""

from __future__ import annotations

import attrs

from vliwsim.machine.memory import Touch
from vliwsim.machine.state import State
from vliwsim.shell.history import Watch
from vliwsim.shell.moment import Flight, Moment, guard_is_on, resting
from vliwsim.shell.session import Session


@attrs.frozen(eq=False)
class Access:
    """One access behind a memory freeze: instruction ``instruction`` of the bundle, and the banks it takes."""

    instruction: int
    address: int
    banks: tuple[int, ...]
    wait: int


@attrs.frozen(eq=False)
class Stall:
    """One stalled cycle. ``bundle`` is the one that waits, for a freeze the one that issued before it.

    ``flights``: results it waits for, or that a service lets land. ``unit``: a slot that is taken, until ``beat``.
    ``accesses``: those that meet in a bank. ``left``: cycles of the freeze still to pass, this one included.
    """

    cycle: int
    cause: str
    bundle: int
    within: int
    left: int = 1
    flights: tuple[tuple[str, Flight], ...] = ()
    units: tuple[tuple[str, int], ...] = ()
    accesses: tuple[Access, ...] = ()
    ports: bool = False
    crossing: tuple[str, ...] = ()


def stall_here(session: Session, watch: Watch | None = None) -> Stall | None:
    """The stall of this cycle, or the latest one before it; None where there was none."""
    cause = session.looker.stalls(session.state)
    state = session.machine.start({}, (), session.state.memory.regions)
    session.history.put(state, session.cycle)
    if cause is None:
        total = sum(state.stalls.values())
        if not total:
            return None
        first, _ = session.first_cycle(lambda s: sum(s.stalls.values()) >= total, 0, watch)
        assert first is not None
        session.history.put(state, first - 1)
        cause = session.looker.stalls(state)
        assert cause is not None
    return _explained(session, state, cause)


def _explained(session: Session, state: State, cause: str) -> Stall:
    if state.frozen:
        return _freeze(session, state, cause)
    moment = session.looker.look(state)
    if cause == "interrupt":
        flights = tuple((session.layout.register(f.register), f) for f in (*moment.landings, *moment.out))
        return Stall(state.cycle, cause, state.at, state.within, max(1, state.service), flights)
    parts = session.machine.ready[state.at].parts
    wanted: dict[int, str] = {}
    for part in parts:
        if part.instruction.guard:
            wanted.setdefault(part.instruction.guard.register, "guard")
        wanted |= {r.register: "operand" for r in part.effects.reads if r.register not in wanted}
        wanted |= {w.register: "destination" for w in part.effects.writes if w.register not in wanted}
    if cause == "fresh":
        fresh = {register for _, register, link in session.machine.ready[state.at].fresh if link.fresh == "stall"}
        crossing = tuple(session.layout.register(f.register) for f in moment.landings if f.register in fresh)
        return Stall(state.cycle, cause, state.at, state.within, crossing=crossing)
    waits = tuple((wanted[f.register], f) for f in moment.out if f.register in wanted)
    slots = session.kernel.core.slots
    units = tuple(
        (slots[p.instruction.slot].name, state.busy_until[p.instruction.slot])
        for p in parts
        if state.busy_until[p.instruction.slot] > state.beat
    )
    ports = not waits and not units
    return Stall(state.cycle, cause, state.at, state.within, flights=waits, units=units, ports=ports)


def _freeze(session: Session, state: State, cause: str) -> Stall:
    """A freeze belongs to the bundle that issued last before it."""
    left = int(state.frozen[0][1])
    before = session.machine.start({}, (), session.state.memory.regions)
    cycle = state.cycle - 1
    session.history.put(before, cycle)
    while resting(before) and cycle > 0:
        cycle -= 1
        session.history.put(before, cycle)
    moment = session.looker.look(before)
    accesses = _accesses(session, moment) if cause in ("bank", "wait") else ()
    crossing: tuple[str, ...] = ()
    if cause == "fresh":
        fresh = {register for _, register, _ in session.machine.ready[before.at].fresh}
        crossing = tuple(session.layout.register(f.register) for f in moment.landings if f.register in fresh)
    return Stall(state.cycle, cause, before.at, before.within, left, accesses=accesses, crossing=crossing)


def _accesses(session: Session, moment: Moment) -> tuple[Access, ...]:
    memory, found = session.state.memory, []
    registers = list(moment.registers)
    for k, part in enumerate(moment.parts):
        access, reach = part.operation.access, part.reach
        if access is None or reach is None or not guard_is_on(part, registers):
            continue
        address = reach.address(registers[reach.base], registers[reach.step])
        if isinstance(address, int):
            touch = Touch(address, access.bytes, access.store)
            found.append(Access(k, address, tuple(memory.banks_of(touch)), memory.wait_of(touch)))
    return tuple(found)
