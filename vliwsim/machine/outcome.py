"""What a run gives back."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

from vliwsim.description.values import Value
from vliwsim.machine.hazards import Hazard
from vliwsim.machine.memory import Memory
from vliwsim.machine.state import NoteSite


class Outcome(NamedTuple):
    """The account and final state of a run.

    ``reason``: ``halt``, ``hazard`` or ``limit`` (the cycle limit, or a stop asked for). ``stalls``: cycles by cause,
    every cause named. ``counts``: for every bundle of the program, beats it issued in; ``begun``: how often its first
    beat did. ``notes``: sites with the beat they were first met in. Always ``cycles == bundles + sum(stalls.values()) +
    drain``.
    """

    reason: str
    bundles: int
    stalls: Mapping[str, int]
    drain: int
    counts: tuple[int, ...]
    begun: tuple[int, ...]
    hazard: Hazard | None
    notes: Mapping[NoteSite, int]
    registers: tuple[Value, ...]
    memory: Memory

    @property
    def cycles(self) -> int:
        return self.bundles + sum(self.stalls.values()) + self.drain
