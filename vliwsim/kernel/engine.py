"""The one place where the kernel room meets the machine: a setup goes in, the end of a run comes out."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import attrs

from vliwsim.description.values import Value
from vliwsim.kernel.binding import Setup
from vliwsim.kernel.diagnose import Hazard
from vliwsim.kernel.outputs import ReadMemory
from vliwsim.machine.memory import Region
from vliwsim.machine.recorder import Record, record
from vliwsim.machine.stepper import Machine

SLICE = 1 << 14
"""Cycles between two looks at whether to go on."""

Watch = Callable[[int], bool]
"""Called now and then with the cycle; true asks the run to stop there."""


@attrs.frozen(eq=False)
class Simulation:
    """How a run ended.

    ``reason``: ``halt``, ``hazard``, ``limit`` or ``stopped``. ``counts``: beats each bundle issued in. ``halted_in``:
    index of the bundle with the halt that ended the run. ``notes``: (name, bundle, instruction, first beat).
    """

    reason: str
    counts: Sequence[int]
    stalls: Mapping[str, int]
    drain: int
    hazard: Hazard | None
    notes: tuple[tuple[str, int, int, int], ...]
    registers: Sequence[Value]
    read_memory: ReadMemory
    halted_in: int | None


def simulate(
    setup: Setup,
    *,
    limit: int,
    interrupt_at: int | None = None,
    watch: Watch | None = None,
    listen: Callable[[Record], None] | None = None,
) -> Simulation:
    """Run the program of ``setup`` to its halt, a hazard, ``limit`` cycles, or until ``watch`` asks to stop.

    ``interrupt_at``: the cycle, from 0, at or after which one interrupt is taken. ``listen`` gets a record
    of every beat.
    """
    machine = Machine(setup.kernel.program)
    regions = [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas]
    state = machine.start(dict(setup.registers), setup.memory, regions)
    if listen:
        record(machine, listen)
    while True:
        outcome = machine.run(state, limit=min(limit, state.cycle + SLICE), interrupt_at=interrupt_at)
        interrupt_at = None
        reason = outcome.reason
        if reason != "limit" or state.cycle >= limit:
            break
        if watch and watch(state.cycle):
            reason = "stopped"
            break
    return Simulation(
        reason,
        outcome.counts,
        outcome.stalls,
        outcome.drain,
        outcome.hazard,  # type: ignore[arg-type]
        tuple((site.name, site.bundle, site.instruction, beat) for site, beat in outcome.notes.items()),
        outcome.registers,
        outcome.memory.read,
        state.at if state.halt_beat is not None else None,
    )
