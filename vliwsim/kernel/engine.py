"""The one place where the kernel room meets the machine: a setup goes in, the end of a run comes out."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from time import perf_counter
from typing import TYPE_CHECKING

import attrs

from vliwsim.description.values import Value
from vliwsim.kernel.binding import Setup
from vliwsim.kernel.diagnose import Hazard
from vliwsim.kernel.outputs import ReadMemory
from vliwsim.machine.memory import Region
from vliwsim.machine.recorder import Record, record
from vliwsim.machine.stepper import Machine
from vliwsim.problems import OptionError, problem

if TYPE_CHECKING:
    from vliwsim.native.engine import Native

SLICE = 1 << 12
"""Cycles before the first look at whether to go on."""

SHORT = 0.05
"""Seconds between two looks, about: as many cycles as are done in that time, whatever runs them."""

LONG = 1 << 15
"""Cycles after which ``auto`` takes a run for a long one and goes on with machine code."""

ENGINES = ("auto", "step", "native")

Watch = Callable[[int], bool]
"""Called now and then with the cycle; true asks the run to stop there."""


@attrs.frozen(eq=False)
class Simulation:
    """How a run ended.

    ``reason``: ``halt``, ``hazard``, ``limit`` or ``stopped``. ``counts``: beats each bundle issued in; ``begun``: how
    often its first beat did. ``halted_in``: index of the bundle with the halt that ended the run. ``notes``: (name,
    bundle, instruction, first beat).
    """

    reason: str
    counts: Sequence[int]
    begun: Sequence[int]
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
    engine: str = "auto",
    machine: Machine | None = None,
) -> Simulation:
    """Run the program of ``setup`` to its halt, a hazard, ``limit`` cycles, or until ``watch`` asks to stop.

    ``engine``: ``step``; ``native``, machine code wherever there is some; ``auto``, that only once a run is long.
    ``interrupt_at``: the cycle, from 0, at or after which one interrupt is taken. ``listen`` gets a record
    of every beat. ``machine``: one of the program that is there already.

    Raises :class:`~vliwsim.problems.OptionError` for any other engine.
    """
    if engine not in ENGINES:
        raise OptionError(problem("unknown-engine", f"engine {engine!r}", f"one of {', '.join(ENGINES)}"))
    machine = machine or Machine(setup.kernel.program)
    regions = [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas]
    state = machine.start(dict(setup.registers), setup.memory, regions)
    if listen:
        record(machine, listen)
        engine = "step"  # every beat by definition, so that each can be recorded
    native, ahead = None, SLICE
    stopped: list[bool] = []

    def look(cycle: int) -> bool:
        if watch and watch(cycle):
            stopped.append(True)
        return bool(stopped)

    while True:
        if native is None and (engine == "native" or (engine == "auto" and state.cycle >= LONG)):
            native = fast(machine, setup)
        began = perf_counter()
        if native:
            outcome = native.run(state, limit=limit, interrupt_at=interrupt_at, progress=look)
        else:
            outcome = machine.run(state, limit=min(limit, state.cycle + ahead), interrupt_at=interrupt_at)
        interrupt_at = None
        reason = outcome.reason
        if reason != "limit" or state.cycle >= limit:
            break
        passed = perf_counter() - began
        ahead = 2 * ahead if passed < SHORT / 2 else max(SLICE, ahead // 2) if passed > SHORT else ahead
        if stopped or look(state.cycle):
            reason = "stopped"
            break
    return Simulation(
        reason,
        outcome.counts,
        outcome.begun,
        outcome.stalls,
        outcome.drain,
        outcome.hazard,  # type: ignore[arg-type]
        tuple((site.name, site.bundle, site.instruction, beat) for site, beat in outcome.notes.items()),
        outcome.registers,
        outcome.memory.read,
        state.at if state.halt_beat is not None else None,
    )


def fast(machine: Machine, setup: Setup) -> Native:
    """The fast engine for ``machine``, with a translation from the first beat on."""
    from vliwsim.native.engine import Native

    native = Native(machine, quick=True)
    native.begin(setup.registers)
    return native
