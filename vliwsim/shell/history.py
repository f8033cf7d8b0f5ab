"""Time both ways: a run that can be put at any cycle, exactly, from snapshots that take bounded memory.

Snapshots stand on two grids. A coarse one covers all that has been run; its spacing doubles whenever it would hold more
than :data:`COARSE` of them. A fine one thins out exponentially with the distance from where the run stands:
:data:`NEAR` multiples of 256 cycles before it, as many multiples of 2048, of 16384 and so on. Going anywhere is putting
back the nearest snapshot before it and running on, so a step back costs at most :data:`FINE` cycles of replay, and a
jump at most 8 fine steps or one coarse one. An array that did not change is kept once for all snapshots that have it.
"""

from __future__ import annotations

import bisect
from collections.abc import Callable, Iterator
from typing import Any

from vliwsim.machine.hazards import Hazard, HazardMet
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.shell.engine import Engine

FINE = 256
"""Cycles between the finest snapshots."""
STEP = 8
"""How much coarser each further fine grid is."""
NEAR = 8
"""Snapshots kept before the present on each fine grid."""
COARSE = 64
"""Snapshots of the coarse grid, at most twice as many for a moment."""
BUDGET = 64 << 20
"""Bytes that all snapshots of a history take, at most, as long as the run's own start is not larger than that."""
SLICE = 1 << 14
"""Cycles between two looks at whether to go on."""

Saved = dict[str, Any]
Edit = tuple[str, int]
"""What a branch of time begins with: (``register``, number) or (``byte``, address)."""
Watch = Callable[[int], bool]
"""Called now and then with the cycle; true asks to stop there."""


class History:
    """One course of time from ``first``, a snapshot; before that, time is that of ``parent``.

    ``hazard`` is what stops this course, once that is known; ``last`` the last cycle there is, by hazard or end.
    """

    def __init__(
        self, machine: Machine, first: Saved, parent: History | None = None, engine: Engine | None = None
    ) -> None:
        self.machine = machine
        self.engine: Engine = engine or machine
        self.parent = parent
        self.begin: int = first["cycle"]
        self.first = first
        self.hazard: Hazard | None = None
        self.last: int | None = None
        self.edits: frozenset[Edit] = frozenset()
        self._cycles = [self.begin]
        self._kept: dict[int, Saved] = {self.begin: first}
        self._spacing = FINE * STEP

    # ------------------------------------------------------------------------------------------------------------ going

    def put(self, state: State, cycle: int, watch: Watch | None = None) -> bool:
        """Put ``state`` at ``cycle``, or at the last cycle there is; False if ``watch`` stopped it on the way."""
        if cycle < self.begin and self.parent is not None:
            return self.parent.put(state, cycle, watch)
        target = max(self.begin, cycle if self.last is None else min(cycle, self.last))
        nearest = self._cycles[bisect.bisect_right(self._cycles, target) - 1]
        state.restore(self._kept[nearest])
        return self._run(state, target, watch)

    def go_on(self, state: State, cycle: int, watch: Watch | None = None) -> bool:
        """Like :meth:`put`, for a ``state`` that stands on this course: goes on from there where that is shorter."""
        if cycle < self.begin and self.parent is not None:
            return self.parent.go_on(state, cycle, watch)
        if self.begin <= state.cycle <= cycle:
            target = cycle if self.last is None else min(cycle, self.last)
            if state.cycle >= self._cycles[bisect.bisect_right(self._cycles, max(target, self.begin)) - 1]:
                return self._run(state, target, watch)
        return self.put(state, cycle, watch)

    def _run(self, state: State, target: int, watch: Watch | None) -> bool:
        """Run on to ``target`` with a snapshot wherever one belongs."""
        while state.cycle < target and not state.finished:
            pace = max(SLICE, getattr(self.engine, "reach", 0))
            stop = min(target, self._next_stop(state.cycle, target), state.cycle + pace)
            try:
                self.advance(state, stop)
            except HazardMet as met:
                self._stopped_by(state, met.hazard)
                return True
            if state.cycle == stop and self._wanted(stop, target):
                self._keep(state, target)
            if watch and watch(state.cycle):
                return state.cycle >= target
        if state.finished:
            self.last = state.cycle
        return True

    def advance(self, state: State, until: int) -> None:
        """To cycle ``until``; behind the last landing there is nothing to wait for."""
        self.engine.advance(state, until)
        met_here = self.hazard is not None and self.hazard.cycle == state.cycle
        if state.halt_beat is not None and not state.frozen and state.in_flight == state.beat and not met_here:
            self.engine.advance(state, FOREVER)  # what lands first behind halt costs no cycle

    def _stopped_by(self, state: State, hazard: Hazard) -> None:
        """Stand before the beat that met the hazard."""
        self.hazard, self.last = hazard, hazard.cycle
        nearest = self._cycles[bisect.bisect_right(self._cycles, hazard.cycle) - 1]
        state.restore(self._kept[nearest])
        self.advance(state, hazard.cycle)

    # -------------------------------------------------------------------------------------------------------- snapshots

    def _next_stop(self, cycle: int, target: int) -> int:
        """The next cycle after ``cycle`` that wants a snapshot on the way to ``target``."""
        spacing = max(self._spacing, getattr(self.engine, "reach", 0))
        stop = (cycle // spacing + 1) * spacing
        grid = FINE
        while grid < self._spacing:
            first = max(cycle + 1, target - NEAR * grid)
            stop = min(stop, -(-first // grid) * grid)
            grid *= STEP
        return stop

    def _wanted(self, cycle: int, target: int) -> bool:
        if cycle in self._kept:
            return False
        if cycle % self._spacing == 0:
            return True
        grid = FINE
        while grid < self._spacing:
            if cycle % grid == 0 and target - NEAR * grid <= cycle:
                return True
            grid *= STEP
        return False

    def _keep(self, state: State, present: int) -> None:
        saved: Saved = state.save()
        place = bisect.bisect_right(self._cycles, state.cycle)
        neighbour = self._kept[self._cycles[place - 1]]
        saved["memory"] = _shared(saved["memory"], neighbour["memory"], self.first["memory"])
        self._cycles.insert(place, state.cycle)
        self._kept[state.cycle] = saved
        while sum(1 for c in self._cycles if c % self._spacing == 0) > COARSE:
            self._spacing *= 2
        self._thin(present)
        while self.kept_bytes() > BUDGET and len(self._cycles) > 2:
            self._spacing *= 2
            before = len(self._cycles)
            self._thin(present)
            if len(self._cycles) == before:
                self._drop(self._cycles[1:-1:2] or self._cycles[1:])

    def _thin(self, present: int) -> None:
        """Drop what is on no grid as seen from ``present``."""

        def stays(cycle: int) -> bool:
            if cycle == self.begin or cycle % self._spacing == 0:
                return True
            grid = FINE
            while grid < self._spacing:
                if cycle % grid == 0 and abs(present - cycle) <= NEAR * grid:
                    return True
                grid *= STEP
            return False

        self._drop([c for c in self._cycles if not stays(c)])

    def _drop(self, cycles: list[int]) -> None:
        for cycle in cycles:
            del self._kept[cycle]
        gone = set(cycles)
        self._cycles = [c for c in self._cycles if c not in gone]

    def kept_bytes(self) -> int:
        """Bytes that the snapshots take, an array they share counted once."""
        pieces = {id(piece): len(piece) for s in self._kept.values() for area in s["memory"] for piece in area[1:]}
        fixed = sum(8 * (len(s["counts"]) + len(s["operands"]) + 200) for s in self._kept.values())
        return sum(pieces.values()) + fixed

    def snapshots(self, before: int) -> Iterator[tuple[int, Saved]]:
        """(cycle, snapshot) of those before cycle ``before``, latest first, then those of the parent."""
        for cycle in reversed([c for c in self._cycles if c < before]):
            yield cycle, self._kept[cycle]

    def course(self, cycle: int) -> History:
        """The course that cycle ``cycle`` belongs to: this one, or that of an ancestor."""
        here = self
        while cycle < here.begin and here.parent is not None:
            here = here.parent
        return here


def _shared(memory: tuple[Any, ...], *others: tuple[Any, ...]) -> tuple[Any, ...]:
    """``memory`` with every piece that is equal in one of ``others`` taken from there."""
    areas = []
    for k, (start, data, status) in enumerate(memory):
        for other in others:
            data = other[k][1] if other[k][1] == data else data
            status = other[k][2] if other[k][2] == status else status
        areas.append((start, data, status))
    return tuple(areas)
