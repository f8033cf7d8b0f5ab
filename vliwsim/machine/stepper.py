"""The stepper: the machine a beat at a time, every rule enforced, everything observable.

:meth:`Machine.step` is one beat by definition (:mod:`vliwsim.machine.beat`). :meth:`Machine.advance` runs many; unless
``step`` has been wrapped by a recorder, it does so in the hot loop (:mod:`vliwsim.machine.hurry`), which equals
repeated ``step`` and falls back to it wherever a beat is out of the ordinary.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

from vliwsim.description.core import Core
from vliwsim.description.values import Value
from vliwsim.machine import beat as phases
from vliwsim.machine.hazards import Hazard, HazardMet
from vliwsim.machine.hurry import HotLoop
from vliwsim.machine.issued import Issued
from vliwsim.machine.memory import Memory, Region
from vliwsim.machine.outcome import Outcome
from vliwsim.machine.prepared import Preparation
from vliwsim.machine.state import State, fresh_operands
from vliwsim.program.code import Program

FOREVER = 1 << 62
PROGRESS_EVERY = 1 << 18
"""Cycles between two calls of a progress function."""


class Machine:
    """One program on its core. States are made by :meth:`start`; a machine itself never changes.

    ``careful`` makes :meth:`advance` always step by definition.
    """

    def __init__(self, program: Program, *, careful: bool = False) -> None:
        if not program.bundles:
            raise ValueError("a program needs at least one bundle")
        self.program = program
        self.core: Core = program.core
        self.ready = Preparation(program)
        self.careful = careful
        self.hot = HotLoop(self.ready)

    def start(
        self,
        registers: Mapping[int, Value] | None = None,
        memory: Sequence[tuple[int, bytes]] = (),
        regions: Sequence[Region] = (),
    ) -> State:
        """A state before the first cycle.

        ``registers``: raw values by register number, all others undefined. ``memory``: (address, bytes) pieces that are
        defined from the start. ``regions``: the arrays and scratch; nothing else may be accessed.
        """
        data = Memory(self.core.memory, regions)
        for address, piece in memory:
            data.define(address, piece)
        operands = fresh_operands(self.core, dict(registers or {}), self.ready.constants)
        return State(self.core, len(self.program.bundles), operands, data)

    # --------------------------------------------------------------------------------------------------- by definition

    def step(self, state: State) -> Issued | str:
        """One beat by definition; raises :class:`HazardMet`. Not after ``halt``, nor with freeze cycles to pass.

        Returns what the bundle did, or why none issued: ``hold``, ``fresh`` or ``interrupt``.
        """
        ready = self.ready
        self._take_interrupt(state)
        phases.land(ready, state)
        if state.service:
            state.service -= 1
            self._idle_beat(state, "interrupt")
            return "interrupt"
        prepared = ready[state.at]
        cause = phases.wait(ready, state, prepared) if self.core.interlocked else None
        if cause:
            state.waited_fresh |= cause == "fresh"
            self._idle_beat(state, cause)
            return cause
        issued = phases.read(ready, state, prepared)
        phases.execute(ready, state, prepared, issued)
        phases.commit(ready, state, prepared, issued)
        try:
            phases.redirect(ready, state, prepared, issued)
        finally:
            state.cycle += 1
            state.beat += 1
        return issued

    def _take_interrupt(self, state: State) -> None:
        """Begin service if one is asked for and this beat may take it."""
        asked = state.interrupt_at
        if asked is None or state.cycle < asked or phases.branch_in_flight(self.core, state):
            return
        state.interrupt_at = None
        last = state.in_flight
        state.service = max(self.core.interrupt.service, 0 if last is None else last - state.beat + 1)

    @staticmethod
    def _idle_beat(state: State, cause: str) -> None:
        state.stalls[cause] += 1
        state.cycle += 1
        state.beat += 1

    def _drain(self, state: State, until: int) -> None:
        """After ``halt``: land what is in flight, a beat a cycle; the last landing costs no cycle."""
        while state.flight and state.cycle < until:
            phases.land(self.ready, state)
            state.beat += 1
            if state.flight:
                state.drain += 1
                state.cycle += 1

    # --------------------------------------------------------------------------------------------------------- running

    def advance(self, state: State, until: int = FOREVER) -> None:
        """Run until ``cycle`` is ``until``, exactly, or everything behind ``halt`` has landed; raises HazardMet."""
        hurried = not self.careful and "step" not in vars(self)
        while True:
            self._thaw(state, until)
            if state.halt_beat is not None and not state.frozen:
                return self._drain(state, until)
            if state.cycle >= until or state.frozen:
                return None
            if hurried and not state.service and not state.waited_fresh and state.interrupt_at is None:
                self.hot.run(state, until)
                if state.halt_beat is not None or state.cycle >= until or state.frozen:
                    continue
            self.step(state)

    @staticmethod
    def _thaw(state: State, until: int) -> None:
        """Pass freeze cycles, but not beyond ``until``."""
        while state.frozen and state.cycle < until:
            cause, left = state.frozen[0]
            passed = min(int(left), until - state.cycle)
            state.stalls[str(cause)] += passed
            state.cycle += passed
            if passed == left:
                state.frozen.pop(0)
            else:
                state.frozen[0] = [cause, int(left) - passed]

    def run(
        self,
        state: State,
        *,
        limit: int | None = None,
        interrupt_at: int | None = None,
        progress: Callable[[int], None] | None = None,
    ) -> Outcome:
        """Run to ``halt``, a hazard, or ``limit`` cycles, drain included where it halts.

        ``interrupt_at``: the cycle, from 0, at or after which one interrupt is taken. ``progress`` is called with the
        cycle now and then.
        """
        if interrupt_at is not None:
            state.interrupt_at = interrupt_at
        end = FOREVER if limit is None else limit
        try:
            while not state.finished and state.cycle < end:
                self.advance(state, min(end, state.cycle + PROGRESS_EVERY))
                if progress:
                    progress(state.cycle)
            if state.halt_beat is not None and state.in_flight == state.beat:
                self._drain(state, FOREVER)  # what lands first behind halt costs no cycle
        except HazardMet as met:
            return self.stopped_by(state, met.hazard)
        return self.outcome(state, "halt" if state.finished else "limit")

    def stopped_by(self, state: State, hazard: Hazard) -> Outcome:
        """The account of a run that met ``hazard``; freeze cycles due by then have passed."""
        self._thaw(state, FOREVER)
        return self.outcome(state, "hazard", hazard)

    def outcome(self, state: State, reason: str, hazard: Hazard | None = None) -> Outcome:
        """The account of ``state`` as it is."""
        return Outcome(
            reason,
            sum(state.counts),
            dict(state.stalls),
            state.drain,
            tuple(state.counts),
            tuple(state.begun),
            hazard,
            dict(state.notes),
            tuple(state.registers(self.core)),
            state.memory,
        )
