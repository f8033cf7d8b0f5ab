"""One run by definition with everything in view: what each beat read, sent, landed and cost."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import attrs

from vliwsim.description.values import Value
from vliwsim.kernel.binding import Setup
from vliwsim.machine.issued import Issued
from vliwsim.machine.memory import Region
from vliwsim.machine.outcome import Outcome
from vliwsim.machine.prepared import Preparation
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine


@attrs.frozen(eq=False)
class Seen:
    """One beat. ``operands`` is the operand file as the bundle read it: look at it now, it is not kept.

    ``landed``: (write number, value) of what landed in this beat. ``issued`` is None where no bundle issued, for
    ``cause``. ``flight``: (write number, landing beat) of everything in flight behind the beat.
    """

    ready: Preparation
    cycle: int
    beat: int
    bundle: int
    within: int
    landed: Sequence[tuple[int, Value]]
    issued: Issued | None
    cause: str
    operands: Sequence[Value]
    state: State

    @property
    def flight(self) -> list[tuple[int, int]]:
        return [(n, beat) for beat, batches in self.state.flight.items() for numbers, _ in batches for n in numbers]


See = Callable[[Seen], None]


def started(setup: Setup) -> tuple[Machine, State]:
    """The machine of a setup and its state before the first cycle."""
    machine = Machine(setup.kernel.program)
    regions = [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas]
    return machine, machine.start(dict(setup.registers), setup.memory, regions)


def observe(setup: Setup, see: See, *, limit: int, interrupt_at: int | None = None) -> Outcome:
    """Run ``setup``, calling ``see`` after every beat; ``limit`` in cycles, ``interrupt_at`` a cycle from 0."""
    machine, state = started(setup)
    step = machine.step

    def seeing(state: State) -> Issued | str:
        cycle, beat, bundle, within = state.cycle, state.beat, state.at, state.within
        due = [(n, v) for numbers, values in state.flight.get(beat, ()) for n, v in zip(numbers, values, strict=True)]
        did = step(state)
        issued, cause = (None, did) if isinstance(did, str) else (did, "")
        # results are in flight for a beat at least, so the operand file still is what the bundle read
        see(Seen(machine.ready, cycle, beat, bundle, within, due, issued, cause, state.operands, state))
        return did

    machine.step = seeing  # type: ignore[method-assign]
    return machine.run(state, limit=limit, interrupt_at=interrupt_at)
