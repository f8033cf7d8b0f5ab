"""What a bundle does in its issue beat, before any of it is done; and how a phase stops."""

from __future__ import annotations

from collections.abc import Iterable

import attrs

from vliwsim.description.values import Value
from vliwsim.machine.hazards import Cause, Hazard, HazardMet
from vliwsim.machine.memory import Touch
from vliwsim.machine.state import Batch, NoteSite, State


@attrs.define(eq=False, repr=False)
class Issued:
    """What a bundle does in its issue beat, not yet done: results by landing distance, stores, branches, freezes."""

    on: tuple[bool, ...]
    """For every instruction, whether its guard is on."""
    results: list[tuple[int, Batch]] = attrs.field(factory=list)
    stores: list[tuple[int, int, Value]] = attrs.field(factory=list)
    """(address, size, value)"""
    taken: list[tuple[int, int | None]] = attrs.field(factory=list)
    """(instruction, bundle index it goes to or None for nowhere) of every taken branch"""
    halts: bool = False
    freezes: list[tuple[str, int]] = attrs.field(factory=list)
    touches: list[Touch] = attrs.field(factory=list)
    notes: list[NoteSite] = attrs.field(factory=list)


def stop(name: str, state: State, bundle: int, found: str, causes: Iterable[Cause]) -> HazardMet:
    """The exception for a hazard in this beat."""
    ordered = tuple(sorted(set(causes), key=lambda c: (c.beat, c.bundle, c.instruction)))
    return HazardMet(Hazard(name, state.beat, state.cycle, bundle, found, ordered))
