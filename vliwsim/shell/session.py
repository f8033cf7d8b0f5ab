"""One kernel on one set of inputs, standing at a cycle: moving both ways, stops, and what-if."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import attrs

from vliwsim.kernel.binding import Setup
from vliwsim.kernel.diagnose import hazard_problem
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.outputs import Output
from vliwsim.machine.hazards import Hazard
from vliwsim.machine.memory import Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.problems import Problem
from vliwsim.shell.conditions import Condition, condition
from vliwsim.shell.engine import Engine
from vliwsim.shell.faults import listed, nearest, unclear
from vliwsim.shell.history import Edit, History, Watch
from vliwsim.shell.judging import Judge
from vliwsim.shell.layout import Layout
from vliwsim.shell.moment import Looker, Moment, resting
from vliwsim.shell.places import Place
from vliwsim.shell.terms import Array, Names, UndefinedHere, term

CHUNK = 4096
"""Cycles that are run at once before a search looks whether to look closer."""


@attrs.frozen(eq=False)
class Arrival:
    """How a move ended. ``why``: ``there``, ``start``, ``end``, ``hazard``, ``alarm``, ``nowhere``, ``stopped``.

    ``alarm``: the number of the alarm. ``nowhere``: what was sought holds nowhere that way; the run has not moved.
    """

    why: str
    alarm: int = 0


class Session:
    """``state`` stands at :attr:`cycle`. ``expected``: the reference's outputs, None where there are none.

    ``interrupt_at``: the cycle at or after which the run takes one interrupt. ``engine`` makes what goes through time.
    """

    def __init__(
        self,
        setup: Setup,
        expected: Mapping[str, Output] | None = None,
        *,
        interrupt_at: int | None = None,
        engine: Callable[[Machine], Engine] = lambda machine: machine,
    ) -> None:
        self.setup = setup
        self.kernel = setup.kernel
        self.layout = Layout(setup.kernel)
        self.names = Names(setup, self.layout)
        self.judge = Judge(self.names, expected)
        self.machine = Machine(setup.kernel.program)
        regions = [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas]
        self.state = self.machine.start(dict(setup.registers), setup.memory, regions)
        self.state.interrupt_at = interrupt_at
        self.looker = Looker(self.machine, self.state)
        self.recorded = History(self.machine, self.state.save(), engine=engine(self.machine))
        self.history = self.recorded
        self.alarms: dict[int, Condition] = {}
        self._numbered = 0
        self._scratch = self.machine.start({}, (), regions)
        self._moment: Moment | None = None

    # ------------------------------------------------------------------------------------------------------- standing

    @property
    def cycle(self) -> int:
        return self.state.cycle

    @property
    def supposing(self) -> bool:
        """Whether time is on a branch that a ``suppose`` made."""
        return self.history is not self.recorded

    def moment(self) -> Moment:
        """What is seen at this cycle; made once a cycle."""
        if self._moment is None:
            self._moment = self.looker.look(self.state)
            course = self.history.course(self.cycle)
            if self._moment.hazard and course.hazard is None:
                course.hazard, course.last = self._moment.hazard, self._moment.cycle
        return self._moment

    def hazard_at(self, cycle: int) -> Hazard | None:
        """What stops the run at this cycle, if that is known to be so."""
        hazard = self.history.course(cycle).hazard
        return hazard if hazard and hazard.cycle == cycle else None

    def hazard_problem(self, hazard: Hazard) -> Problem:
        return hazard_problem(self.setup, hazard)  # type: ignore[arg-type]

    def need_reference(self) -> None:
        """Raise :class:`~vliwsim.shell.faults.Unclear` where there is nothing to compare with."""
        if self.judge.expected is None:
            raise unclear("there is no reference to judge by", "a reference.py beside the source", name="no-reference")

    def output_named(self, word: str) -> str:
        """Check the name of an output."""
        outputs = interface_of(self.kernel).outputs
        if word not in outputs:
            found = f"{word} is no output"
            raise unclear(found, listed(outputs) or "none", nearest(word, outputs), name="unknown-output")
        return word

    def range_of(self, array: Array, low: str | None, high: str | None) -> tuple[int, int]:
        """Element indices of ``x[low:high]``, of ``x[low]`` where ``high`` is None, of all of x where ``low`` is too.

        The texts are expressions judged now; raises :class:`~vliwsim.shell.faults.Unclear`.
        """
        if low is None:
            return 0, array.length
        first = self.whole(low) if low.strip() else 0
        end = first + 1 if high is None else self.whole(high) if high.strip() else array.length
        if not 0 <= first < end <= array.length:
            found = f"{array.name}[{first}]" if high is None else f"{array.name}[{first}:{end}]"
            raise unclear(found, f"elements {array.name}[0] to {array.name}[{array.length - 1}]", name="out-of-array")
        return first, end

    def whole(self, text: str) -> int:
        """The value of an expression that has to be a whole number."""
        value = self.value(text)
        if isinstance(value, bool) or not isinstance(value, int):
            raise unclear(f"{text.strip()} is {value}", "a whole number")
        return value

    def value(self, text: str) -> Any:
        """The value of an expression now; raises :class:`~vliwsim.shell.faults.Unclear`."""
        parsed = term(self.names, text)
        try:
            return parsed.value(self.names, self.state, list(self.moment().registers), {})
        except UndefinedHere as here:
            raise unclear(f"{here.what} is undefined here", "defined values", name="undefined") from None

    # ---------------------------------------------------------------------------------------------------------- moving

    def go(self, cycle: int, watch: Watch | None = None) -> Arrival:
        """Go to a cycle, in either direction."""
        self._moment = None
        through = self.history.go_on(self.state, cycle, watch)
        if not through:
            return Arrival("stopped")
        if self.state.cycle >= cycle >= 0:
            return Arrival("there")
        return self._edge(cycle)

    def _edge(self, cycle: int) -> Arrival:
        """Why time goes no further towards ``cycle``."""
        if cycle < 0:
            return Arrival("start")
        return Arrival("hazard" if self.history.course(self.state.cycle).hazard else "end")

    def move(self, cycles: int, watch: Watch | None = None) -> Arrival:
        """Go so many cycles ahead, or back where negative; alarms stop a move ahead."""
        if cycles <= 0:
            before = self.cycle + cycles
            return attrs.evolve(self.go(max(0, before), watch), why="start") if before < 0 else self.go(before, watch)
        return self._ahead(self.cycle + cycles, watch)

    def _ahead(self, target: int, watch: Watch | None) -> Arrival:
        if not self.alarms:
            return self.go(target, watch)
        held = {n: self._rings(n, False) for n in self.alarms}
        found = 0

        def rings(state: State) -> bool:
            nonlocal found
            rang = 0
            for number in self.alarms:
                now = self.alarms[number].holds(self, state)
                if now and not (held[number] and not self.alarms[number].eventful):
                    rang = rang or number
                held[number] = now
            found = found or rang
            return bool(rang)

        came = self._first(rings, target, watch)
        if came is None:
            return Arrival("stopped") if self.cycle < target and not self._at_last() else self._arrived(target)
        return Arrival("alarm", found)

    def _rings(self, number: int, default: bool) -> bool:
        return self.alarms[number].holds(self, self.state) if not self.alarms[number].eventful else default

    def _arrived(self, target: int) -> Arrival:
        return Arrival("there") if self.cycle >= target else self._edge(target)

    def _at_last(self) -> bool:
        last = self.history.last
        return last is not None and self.cycle >= last

    def _first(self, test: Callable[[State], bool], target: int, watch: Watch | None) -> int | None:
        """Go ahead a cycle at a time to the first cycle after this one where ``test`` holds, at most to ``target``."""
        self._moment = None
        state, look = self.state, 0
        while state.cycle < target and not self._at_last():
            self.history.go_on(state, state.cycle + 1)
            if test(state):
                return state.cycle
            look += 1
            if watch and look % 256 == 0 and watch(state.cycle):
                return None
        return None

    def to_end(self, watch: Watch | None = None) -> Arrival:
        """Go to where everything has landed, or to the hazard."""
        came = self._ahead(FOREVER, watch)
        return came if came.why in ("alarm", "stopped") else self._edge(FOREVER)

    def to_place(self, place: Place, watch: Watch | None = None) -> Arrival:
        """Go to a place; ``wrong`` goes to where the first wrong element is stored."""
        if place.kind == "cycle":
            return self._ahead(place.number, watch) if place.number > self.cycle else self.go(place.number, watch)
        if place.kind == "end":
            return self.to_end(watch)
        assert place.kind == "bundle"
        if place.pass_ is not None:
            return self._to_pass(place, watch)
        return self._to_bundle(place, watch)

    # --------------------------------------------------------------------------------------------------------- seeking

    def seek(self, wanted: Condition, back: bool = False, watch: Watch | None = None) -> Arrival:
        """Go to the nearest cycle after this one, or before it, where the condition holds. Alarms do not stop it."""
        stood = self.cycle
        if wanted.text == "illegal" and not back:  # there is one such cycle at most, the last
            self._moment = None
            if not self.history.go_on(self.state, FOREVER, watch):
                return Arrival("stopped")
            if self.hazard_at(self.cycle) is not None and self.cycle > stood:
                return Arrival("there")
            self.go(stood)
            return Arrival("nowhere")
        try:
            if back:
                return self.search_back(lambda state: wanted.holds(self, state), watch)
            came = self._first(lambda state: wanted.holds(self, state), FOREVER, watch)
        except BaseException:
            self.go(stood)
            raise
        if came is not None:
            return Arrival("there")
        if self._at_last():
            self.go(stood)
            return Arrival("nowhere")
        return Arrival("stopped")

    def search_back(self, test: Callable[[State], bool], watch: Watch | None = None) -> Arrival:
        """Go to the latest cycle before this one where ``test`` holds, looking at ever longer stretches."""
        high, length = self.cycle, 64
        scratch = self._scratch
        while high > 0:
            low = max(0, high - length)
            found = None
            self.history.put(scratch, low)
            while True:
                if test(scratch):
                    found = scratch.cycle
                if scratch.cycle + 1 >= high:
                    break
                self.history.go_on(scratch, scratch.cycle + 1)
            if found is not None:
                return self.go(found)
            high, length = low, min(length * 2, 1 << 14)
            if watch and watch(high):
                self.go(high)
                return Arrival("stopped")
        return Arrival("nowhere")

    def first_cycle(
        self, grown: Callable[[State], bool], start: int, watch: Watch | None = None
    ) -> tuple[int | None, bool]:
        """The first cycle from ``start`` at which ``grown`` holds, None if it never does; and False if stopped.

        Once it holds it has to hold ever after.
        """
        scratch, history = self._scratch, self.history
        low, length = start, CHUNK
        history.put(scratch, low)
        if grown(scratch):
            return low, True
        while True:
            history.go_on(scratch, low + length)
            if grown(scratch):
                break
            if scratch.cycle < low + length:
                return None, True
            low, length = scratch.cycle, min(2 * length, 1 << 20)
            if watch and watch(low):
                return None, False
        high = scratch.cycle
        while high - low > 1:
            middle = (low + high) // 2
            history.put(scratch, middle)
            low, high = (low, middle) if grown(scratch) else (middle, high)
        return high, True

    def _visits(self, place: Place) -> Callable[[State], bool]:
        """Whether a state stands at the bundle of a place."""
        layout = self.layout
        section = layout.sections[place.name]
        found = layout.bundle_of(section, place.number)
        if found is None:
            raise unclear(f"{place.name}@{place.number} is behind the last bundle", "", name="unknown-place")
        index, within = found

        def here(state: State) -> bool:
            if state.at != index or state.within != within or resting(state) or state.halt_beat is not None:
                return False
            return place.pass_ is None or layout.pass_of(state) == place.pass_

        return here

    def _to_pass(self, place: Place, watch: Watch | None) -> Arrival:
        section, here = self.layout.sections[place.name], self._visits(place)
        wanted = int(place.pass_ or 1)
        start, through = self.first_cycle(lambda state: state.begun[section.first] >= wanted, 0, watch)
        if not through:
            return Arrival("stopped")
        stood = self.cycle
        before = max(0, start - 1) if start is not None else None
        if before is None:  # the pass may begin at the very last cycle
            self.go(FOREVER)
            before = max(0, self.cycle - 1)
        self.go(before)
        if here(self.state):
            self._back_to_arrival(here)
        elif self._first(here, before + CHUNK + 64 * section.beats, watch) is None:
            self.go(stood)
            return Arrival("nowhere")
        return self._stop_at_alarm(stood, watch)

    def _back_to_arrival(self, here: Callable[[State], bool]) -> None:
        """From where a bundle issues back to where it first stood at the point of issue."""
        while self.cycle > 0:
            self.history.put(self._scratch, self.cycle - 1)
            if not here(self._scratch):
                break
            self.go(self.cycle - 1)

    def _to_bundle(self, place: Place, watch: Watch | None) -> Arrival:
        """The next visit ahead; where there is none the latest one before."""
        here = self._visits(place)
        stood, index = self.cycle, self.layout.bundle_of(self.layout.sections[place.name], place.number)
        assert index is not None
        scratch, low = self._scratch, self.cycle
        self.history.put(scratch, low)
        while True:
            count, was_here = scratch.counts[index[0]], scratch.at == index[0]
            self.history.go_on(scratch, low + CHUNK)
            if scratch.counts[index[0]] != count or was_here or scratch.at == index[0]:
                self.go(low)
                if self._first(here, low + CHUNK, None) is not None:
                    return self._stop_at_alarm(stood, watch)
            if scratch.cycle < low + CHUNK:
                break
            low = scratch.cycle
            if watch and watch(low):
                self.go(low)
                return Arrival("stopped")
        self.go(stood)
        return self.search_back(here, watch)

    def _stop_at_alarm(self, stood: int, watch: Watch | None) -> Arrival:
        """Standing alarms between where the run stood and where it is now go first."""
        there = self.cycle
        if not self.alarms or there <= stood:
            return Arrival("there")
        self.go(stood)
        return self._ahead(there, watch)

    # ---------------------------------------------------------------------------------------------------------- alarms

    def set_alarm(self, text: str) -> int:
        """Set a standing stop for moves ahead; its number. Raises :class:`~vliwsim.shell.faults.Unclear`."""
        made = condition(self, text)
        self._numbered += 1
        self.alarms[self._numbered] = made
        return self._numbered

    def silence(self, number: int) -> Condition:
        """Remove a standing stop."""
        if number not in self.alarms:
            raise unclear(f"no alarm {number}", listed(str(n) for n in self.alarms) or "there are none")
        return self.alarms.pop(number)

    # -------------------------------------------------------------------------------------------------------- what if

    def branch(self, edited: Callable[[State], frozenset[Edit]]) -> None:
        """Go on from here on a branch of time, from this state as ``edited`` changes it; it returns what it changed."""
        changed = edited(self.state)
        first = self.state.save()
        self.history = History(self.machine, first, self.history, self.history.engine)
        self.history.edits = changed
        self._moment = None

    def forget(self) -> int:
        """Return to the recorded run, to the cycle at which it was left."""
        if not self.supposing:
            raise unclear("nothing is supposed", "forget after suppose", "suppose g14 = 7")
        course = self.history
        while course.parent is not None and course.parent is not self.recorded:
            course = course.parent
        self.history = self.recorded
        self.go(course.begin)
        return self.cycle
