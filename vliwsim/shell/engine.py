"""What takes a state forward in time: one small interface, and the two engines behind it."""

from __future__ import annotations

import time
from typing import Protocol

from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine


class Engine(Protocol):
    """Anything that advances a state exactly as :meth:`vliwsim.machine.stepper.Machine.advance` does.

    It may leave ``State.landed`` (and ``State.ready`` of a core that does not ask for it) as they were.
    """

    def advance(self, state: State, until: int) -> None:
        """Take ``state`` to cycle ``until`` exactly, or to where everything behind ``halt`` has landed.

        Raises :class:`~vliwsim.machine.hazards.HazardMet` with the hazard's cycle; the state is then of no more use.
        """
        ...


class Swift:
    """The stepper, and machine code for long ways once so much has been run that translating pays.

    ``reach``: the cycles it likes to be asked for at once; 0 while the stepper does all.
    """

    WARM = 1 << 18
    """Cycles that the stepper runs before anything is translated."""
    LEAST = 1 << 14
    """A way shorter than this is the stepper's: handing a state over costs more than that."""
    MOST = 1 << 19

    def __init__(self, machine: Machine) -> None:
        self.machine = machine
        self.reach = 0
        self._ran = 0
        self._native: Engine | None = None
        self._given_up = False

    def advance(self, state: State, until: int) -> None:
        """As :meth:`vliwsim.machine.stepper.Machine.advance`."""
        way = until - state.cycle
        if self._native is None or way < self.LEAST:
            self.machine.advance(state, until)
            self._ran += min(way, self.LEAST)
            if self._ran > self.WARM and self._native is None and not self._given_up:
                self._begin()
            return
        began, before = time.thread_time(), state.cycle
        self._native.advance(state, until)
        gone, seconds = state.cycle - before, time.thread_time() - began
        if seconds > 2.0 and gone < 1e6 * seconds:  # no faster than the stepper: this program is none for machine code
            self.reach, self._native, self._given_up = 0, None, True
        elif gone >= self.reach:
            self.reach = min(2 * self.reach, self.MOST)

    def _begin(self) -> None:
        try:
            from vliwsim.native.engine import Native
        except ImportError:
            self._given_up = True
            return
        self._native, self.reach = Native(self.machine, quick=True), 1 << 16
