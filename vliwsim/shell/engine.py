"""What takes a state forward in time: one small interface, so that a faster engine can be plugged in."""

from __future__ import annotations

from typing import Protocol

from vliwsim.machine.state import State


class Engine(Protocol):
    """Anything that advances a state exactly as :meth:`vliwsim.machine.stepper.Machine.advance` does.

    A :class:`~vliwsim.machine.stepper.Machine` is one. An engine that hands over its state at a cycle limit is another:
    it may leave ``State.landed`` (and ``State.ready`` of a core that does not ask for it) as they were.
    """

    def advance(self, state: State, until: int) -> None:
        """Take ``state`` to cycle ``until`` exactly, or to where everything behind ``halt`` has landed.

        Raises :class:`~vliwsim.machine.hazards.HazardMet` with the hazard's cycle; the state is then of no more use.
        """
        ...
