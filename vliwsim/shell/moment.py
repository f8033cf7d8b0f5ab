"""What one beat does, looked at without doing it: what lands, what issues, what waits, what stays out."""

from __future__ import annotations

from collections.abc import Iterator

import attrs

from vliwsim.description.values import Value
from vliwsim.machine.hazards import Hazard, HazardMet
from vliwsim.machine.issued import Issued
from vliwsim.machine.landing import either, judge_landing
from vliwsim.machine.parts import Part, WriteSite
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine


@attrs.frozen(eq=False)
class Flight:
    """One result on its way: ``value`` for ``register`` by ``site``, sent in beat ``sent``, lands in beat ``lands``."""

    register: int
    value: Value
    site: WriteSite
    sent: int
    lands: int


@attrs.frozen(eq=False)
class Moment:
    """One cycle as the bundle at the point of issue sees it.

    ``cause``: why nothing issues (a stall's cause, ``drain`` or ``end``), None where the bundle issues or ``hazard``
    stops it. ``registers``: the operand file after landing. ``landings``: what lands now. ``out``: what is still out,
    by landing beat. ``beat``: the beat, which a freeze holds up.
    """

    cycle: int
    beat: int
    bundle: int
    within: int
    cause: str | None
    hazard: Hazard | None
    issued: Issued | None
    registers: tuple[Value, ...]
    landings: tuple[Flight, ...]
    out: tuple[Flight, ...]
    parts: tuple[Part, ...]

    @property
    def results(self) -> dict[int, Value]:
        """What the bundle sends, by write number."""
        batches = [batch for _, batch in self.issued.results] if self.issued else []
        return {n: v for numbers, values in batches for n, v in zip(numbers, values, strict=True)}


def resting(state: State) -> bool:
    """Whether this cycle begins no beat: it is a freeze cycle, or all is over."""
    return bool(state.frozen) or state.finished


def flights(machine: Machine, state: State) -> Iterator[Flight]:
    """Everything in flight, by landing beat, then as sent."""
    for beat in sorted(state.flight):
        for numbers, values in state.flight[beat]:
            for n, value in zip(numbers, values, strict=True):
                site = machine.ready.sites[n]
                yield Flight(site.write.register, value, site, beat - site.write.latency, beat)


def seen(machine: Machine, state: State) -> list[Value]:
    """The operand file as the bundle of this cycle reads it: what lands in its beat has landed."""
    operands = list(state.operands)
    due = () if resting(state) else state.flight.get(state.beat, ())
    if not due:
        return operands
    numbers = [n for batch, _ in due for n in batch]
    try:
        judge_landing(machine.ready, state, numbers)
    except HazardMet:
        return operands  # neither lands
    core = machine.core
    zero = {core.register_numbers[name] for name in core.zero_registers}
    landings = [(machine.ready.sites[n].write, v) for batch, values in due for n, v in zip(batch, values, strict=True)]
    for write, value in sorted(landings, key=lambda landing: landing[0].what == "sticky"):
        if write.register not in zero:
            old = operands[write.register]
            operands[write.register] = either(old, value) if write.what == "sticky" else value
    return operands


class Looker:
    """Looks at states of one machine with a state of its own, which it steps instead."""

    def __init__(self, machine: Machine, state: State) -> None:
        self.machine = machine
        self._own = machine.start({}, (), state.memory.regions)

    def step(self, state: State) -> Issued | str | Hazard:
        """What the beat of this cycle would do; not in a freeze and not behind ``halt``. ``state`` stays as it is."""
        own = self._own
        own.restore(state.save())
        try:
            return self.machine.step(own)
        except HazardMet as met:
            return met.hazard

    def look(self, state: State) -> Moment:
        """The moment at which ``state`` stands."""
        cause: str | None = None
        hazard: Hazard | None = None
        issued: Issued | None = None
        if state.finished:
            cause = "end"
        elif state.frozen:
            cause = str(state.frozen[0][0])
        elif state.halt_beat is not None:
            cause, hazard = "drain", self._drain_hazard(state)
        else:
            did = self.step(state)
            cause = did if isinstance(did, str) else None
            hazard = did if isinstance(did, Hazard) else None
            issued = did if isinstance(did, Issued) else None
        every = tuple(flights(self.machine, state))
        now = () if resting(state) else tuple(f for f in every if f.lands == state.beat)
        return Moment(
            state.cycle,
            state.beat,
            state.at,
            state.within,
            cause,
            hazard,
            issued,
            tuple(seen(self.machine, state)),
            now,
            tuple(f for f in every if f not in now),
            self.machine.ready[state.at].parts,
        )

    def _drain_hazard(self, state: State) -> Hazard | None:
        due = [n for batch, _ in state.flight.get(state.beat, ()) for n in batch]
        try:
            judge_landing(self.machine.ready, state, due)
        except HazardMet as met:
            return met.hazard
        return None

    def stalls(self, state: State) -> str | None:
        """The cause for which this cycle issues nothing, None where it issues or the run is over."""
        if state.frozen:
            return str(state.frozen[0][0])
        if state.halt_beat is not None:
            return None
        core = self.machine.core
        if not core.interlocked and not state.service and state.interrupt_at is None:
            return None
        did = self.step(state)
        return did if isinstance(did, str) else None


def guard_is_on(part: Part, registers: list[Value]) -> bool:
    """Whether a guard is on; an undefined one counts as off."""
    guard = part.instruction.guard
    if guard is None:
        return True
    value = registers[guard.register]
    return isinstance(value, int) and (value == 0) == guard.negated
