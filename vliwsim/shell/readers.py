"""Who uses a value next: reads of a register until it is overwritten, loads of an element until it is stored to."""

from __future__ import annotations

import attrs

from vliwsim.machine.parts import Part
from vliwsim.machine.state import State
from vliwsim.shell.history import Watch
from vliwsim.shell.moment import guard_is_on, resting, seen
from vliwsim.shell.session import Session
from vliwsim.shell.trace import Beat

FARTHEST = 100_000
"""Cycles that are looked through, at most."""
MOST = 1000
"""Uses that are remembered."""


@attrs.frozen(eq=False)
class Use:
    """One operation that reads the value, ``off`` if its guard is off; ``operands`` names where."""

    cycle: int
    bundle: int
    within: int
    instruction: int
    counted: int
    operands: tuple[str, ...]
    off: bool


@attrs.frozen(eq=False)
class Uses:
    """``ended``: what ends the value's life: the cycle, and the operation (bundle, instruction) that replaced it.

    ``why``: ``replaced``, ``end``, ``far`` or ``stopped``.
    """

    found: tuple[Use, ...]
    more: int
    why: str
    cycle: int
    by: tuple[int, int] | None = None


def uses_of_register(session: Session, register: int, watch: Watch | None = None) -> Uses:
    """Reads of the value that the bundle of this cycle sees in a register, from this cycle on."""
    machine = session.machine
    sites = machine.ready.sites
    found: list[Use] = []
    more = 0
    state = machine.start({}, (), session.state.memory.regions)
    session.history.put(state, session.cycle)
    first = True
    while not state.finished and state.cycle - session.cycle < FARTHEST:
        if watch and state.cycle % 256 == 0 and watch(state.cycle):
            return Uses(tuple(found), more, "stopped", state.cycle)
        if not resting(state):
            landed = [n for b, _ in state.flight.get(state.beat, ()) for n in b if sites[n].write.register == register]
            if landed and not first:
                site = sites[landed[0]]
                return Uses(tuple(found), more, "replaced", state.cycle, (site.bundle, site.instruction))
            first = False
        event, before = _before(session, state), state.issue
        if state.halt_beat is not None:
            session.history.go_on(state, state.cycle + 1)
            continue
        if not _on(session, state):
            break
        if state.issue != before:
            for use in _reads(session, event, register):
                more += len(found) >= MOST
                found += [use] if len(found) < MOST else []
    why = "end" if state.finished or state.cycle - session.cycle < FARTHEST else "far"
    return Uses(tuple(found), more, why, state.cycle)


def uses_of_bytes(session: Session, address: int, size: int, watch: Watch | None = None) -> Uses:
    """Loads of any of these bytes, from this cycle on, until a store to one of them."""
    machine = session.machine
    found: list[Use] = []
    more = 0
    state = machine.start({}, (), session.state.memory.regions)
    session.history.put(state, session.cycle)
    while state.halt_beat is None and state.cycle - session.cycle < FARTHEST:
        if watch and state.cycle % 256 == 0 and watch(state.cycle):
            return Uses(tuple(found), more, "stopped", state.cycle)
        event, before = _before(session, state), state.issue
        if not _on(session, state):
            break
        if state.issue == before:
            continue
        touching = list(_touching(session, event, address, size))
        for k, part in touching:
            access = part.operation.access
            if access and not access.store:
                more += len(found) >= MOST
                use = Use(event.cycle, event.bundle, event.within, k, event.counted, ("memory",), False)
                found += [use] if len(found) < MOST else []
        for k, part in touching:
            if part.operation.access and part.operation.access.store:
                return Uses(tuple(found), more, "replaced", event.cycle, (event.bundle, k))
    why = "far" if state.cycle - session.cycle >= FARTHEST else "end"
    return Uses(tuple(found), more, why, state.cycle)


def _before(session: Session, state: State) -> Beat:
    machine = session.machine
    return Beat(
        state.cycle,
        state.beat,
        state.at,
        state.within,
        session.layout.pass_of(state),
        seen(machine, state),
    )


def _on(session: Session, state: State) -> bool:
    """A cycle on; False where there is none."""
    cycle = state.cycle
    session.history.go_on(state, cycle + 1)
    return bool(state.cycle > cycle or state.finished)


def _reads(session: Session, event: Beat, register: int) -> list[Use]:
    found = []
    for k, part in enumerate(session.machine.ready[event.bundle].parts):
        names = [read.operand for read in part.effects.reads if read.register == register]
        guard = part.instruction.guard
        on = guard_is_on(part, event.registers)
        if guard and guard.register == register:
            names.append("guard")
        if names:
            off = not on and names != ["guard"]
            found.append(Use(event.cycle, event.bundle, event.within, k, event.counted, tuple(names), off))
    return found


def _touching(session: Session, event: Beat, address: int, size: int) -> list[tuple[int, Part]]:
    """The accesses of an issued bundle to any of these bytes."""
    found = []
    for k, part in enumerate(session.machine.ready[event.bundle].parts):
        access, reach = part.operation.access, part.reach
        if access and reach and guard_is_on(part, event.registers):
            at = reach.address(event.registers[reach.base], event.registers[reach.step])
            if isinstance(at, int) and at < address + size and at + access.bytes > address:
                found.append((k, part))
    return found
