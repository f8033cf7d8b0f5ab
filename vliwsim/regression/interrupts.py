"""Interrupting a run wherever an interrupt can be taken, and seeing what becomes of its outputs."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

import attrs
import numpy as np

from vliwsim.kernel.binding import Setup
from vliwsim.kernel.diagnose import hazard_problem, line_of, where
from vliwsim.kernel.outputs import Output, Outputs, read_outputs
from vliwsim.machine.beat import branch_in_flight
from vliwsim.machine.outcome import Outcome
from vliwsim.problems import VliwsimError
from vliwsim.regression.claims import Claim
from vliwsim.regression.legality import unsafe_bundles
from vliwsim.regression.observe import started

if TYPE_CHECKING:
    from vliwsim.regression.judge import Judge

A_CONTEXT = 2
"""Interrupts a case at one and the same bundle with the same results in flight, in a regression."""
LONGEST = 600
"""Cycles of a case that a regression interrupts, at most."""
MOST_CASES = 6
"""Cases that a regression interrupts: the shortest of different lengths."""
SLOWER = 64
"""Times as many cycles as undisturbed after which an interrupted run is given up."""


@attrs.frozen
class Harm:
    """An interrupt that changed what a run gives.

    ``cycle``, ``place`` (``start@2``): where it came. ``found``: what became of the outputs. ``flight``: what was in
    flight and landed too early: register, line that sent it. ``here``: lines of the bundle it came before. ``lines``:
    all of these.
    """

    cycle: int
    place: str
    found: str
    flight: tuple[tuple[str, int], ...]
    here: tuple[int, ...]
    lines: tuple[int, ...]

    def __str__(self) -> str:
        sent = ", ".join(f"{register} (line {line})" for register, line in self.flight)
        before = f" ({', '.join(f'line {line}' for line in self.here)})" if self.here else ""
        return f"{self.place}{before}, cycle {self.cycle}: {self.found}" + (f"; landed early: {sent}" if sent else "")


@attrs.frozen
class Stretch:
    """Cycles in a row, from ``first``, at which no interrupt can be taken without harm: at and up to which places."""

    cycles: int
    first: int
    place: str
    until: str


@attrs.frozen
class Injected:
    """What interrupting one run showed. ``tried`` interrupts; ``harms`` in order of cycles; ``longest`` stretch."""

    tried: int
    harms: tuple[Harm, ...]
    longest: Stretch | None

    @property
    def unsafe(self) -> tuple[str, ...]:
        """The bundles at which an interrupt did harm."""
        return tuple(dict.fromkeys(harm.place for harm in self.harms))


def inject(setup: Setup, limit: int, a_context: int | None = None) -> Injected:
    """Interrupt a run of ``setup`` at every cycle at which it can be, once each, and compare with the undisturbed run.

    ``a_context``: at most so many times at one bundle with the same results in flight; None for every cycle. ``limit``
    in cycles. The undisturbed run must halt.
    """
    return _Injection(setup, limit, a_context).injected()


class _Injection:
    def __init__(self, setup: Setup, limit: int, a_context: int | None) -> None:
        self.setup, self.kernel, self.limit, self.a_context = setup, setup.kernel, limit, a_context
        self.machine, self.state = started(setup)
        self.harms: list[Harm] = []
        self.bad: dict[object, Harm] = {}
        self.seen: dict[object, int] = {}
        self.tried = 0

    def injected(self) -> Injected:
        begin = self.state.save()
        whole = self.machine.run(self.state, limit=self.limit)
        assert whole.reason == "halt"
        self.expected = self._outputs(whole)
        self.patience = min(self.limit, SLOWER * (whole.cycles + 64))
        self.state.restore(begin)
        safe: list[tuple[int, str]] = []
        places: list[tuple[int, str]] = []
        while self.state.halt_beat is None:
            place = where(self.kernel, self.state.at, self.state.within)
            places.append((self.state.cycle, place))
            if not self.state.frozen and not branch_in_flight(self.machine.core, self.state) and self._safe(place):
                safe.append((self.state.cycle, place))
            self.machine.advance(self.state, self.state.cycle + 1)
        return Injected(self.tried, tuple(self.harms), _longest(safe, places))

    def _outputs(self, outcome: Outcome) -> Outputs:
        return read_outputs(self.setup, outcome.registers, outcome.memory.read)

    def _safe(self, place: str) -> bool:
        """Interrupt here, unless that was done often enough where all is alike."""
        state = self.state
        flight = sorted((n, beat - state.beat) for beat, some in state.flight.items() for ns, _ in some for n in ns)
        context = (state.at, state.within, tuple(flight))
        if self.a_context is not None and self.seen.get(context, 0) >= self.a_context:
            return context not in self.bad
        self.seen[context] = self.seen.get(context, 0) + 1
        self.tried += 1
        saved = state.save()
        cycle = state.cycle
        outcome = self.machine.run(state, limit=cycle + self.patience, interrupt_at=cycle)
        found = self._harm(outcome)
        state.restore(saved)
        if not found:
            return True
        harm = Harm(cycle, place, found, *self._flight(flight))
        self.bad.setdefault(context, harm)
        self.harms.append(harm)
        return False

    def _harm(self, outcome: Outcome) -> str:
        """What is not as in the undisturbed run; empty if all is."""
        if outcome.reason == "hazard" and outcome.hazard:
            return hazard_problem(self.setup, outcome.hazard).name  # type: ignore[arg-type]
        if outcome.reason != "halt":
            return "does not end"
        got = self._outputs(outcome)
        for name, before in self.expected.values.items():
            text = _changed(name, before, got.values[name], self.expected.undefined[name], got.undefined[name])
            if text:
                return text
        return ""

    def _flight(
        self, flight: Sequence[tuple[int, int]]
    ) -> tuple[tuple[tuple[str, int], ...], tuple[int, ...], tuple[int, ...]]:
        """What was in flight and would have landed later: registers with lines; lines of the bundle; all lines."""
        sent, lines = [], []
        names = self.kernel.core.register_names
        for number, beats in flight:
            site = self.machine.ready.sites[number]
            place = line_of(self.kernel, site.bundle, site.instruction)
            if place and beats > 0:
                sent.append((names[site.write.register], place.line))
                lines.append(place.line)
        here = [p.line for p in self.kernel.map.instruction_places[self.state.at]]
        return tuple(dict.fromkeys(sent)), tuple(dict.fromkeys(here)), tuple(dict.fromkeys([*lines, *here]))


def _changed(name: str, before: Output, after: Output, unknown: np.ndarray, unknown_now: np.ndarray) -> str:
    one, other = np.atleast_1d(np.asarray(before)), np.atleast_1d(np.asarray(after))
    same = (one == other) | ((one != one) & (other != other))
    wrong = ~same | (np.atleast_1d(unknown) != np.atleast_1d(unknown_now))
    if not wrong.any():
        return ""
    index = int(np.flatnonzero(wrong)[0])
    where_ = name if np.ndim(before) == 0 else f"{name}[{index}]"
    got = "undefined" if np.atleast_1d(unknown_now)[index] else other[index]
    return f"{where_} becomes {got} instead of {one[index]}"


def _longest(safe: Sequence[tuple[int, str]], places: Sequence[tuple[int, str]]) -> Stretch | None:
    """The longest stretch between safe points, the begin and the end of the run included."""
    if not places:
        return None
    stops = {cycle for cycle, _ in safe}
    best: Stretch | None = None
    first: tuple[int, str] | None = None
    last_cycle = places[-1][0] + 1
    for (cycle, place), (following, _) in zip(places, [*places[1:], (last_cycle, "")]):
        if cycle in stops:
            first = None
            continue
        first = first or (cycle, place)
        length = following - first[0]
        if best is None or length > best.cycles:
            best = Stretch(length, first[0], first[1], place)
    return best


def interrupt_claim(judge: Judge) -> tuple[Claim, dict[str, Any]]:
    """The claim that no interrupt changes an output in any case, and what was found, as plain data."""
    tried, cases, data = 0, 0, list[dict[str, Any]]()
    longest: tuple[Stretch, str] | None = None
    harms: list[tuple[str, Harm]] = []
    for name, setup in _runs(judge):
        judge.about(f"interrupting case {name}")
        found = inject(setup, judge.options.limit, A_CONTEXT)
        tried, cases = tried + found.tried, cases + 1
        harms += [(name, harm) for harm in found.harms]
        if found.longest and (longest is None or found.longest.cycles > longest[0].cycles):
            longest = found.longest, name
        data += [{"case": name, **attrs.asdict(harm)} for harm in found.harms[:20]]
    places = list(dict.fromkeys(harm.place for _, harm in harms))
    measured: dict[str, Any] = {"tried": tried, "cases": cases, "unsafe": places, "harms": data[:100]}
    checked = unsafe_bundles(judge.kernel)
    measured["check"] = None if checked is None else [where(judge.kernel, bundle) for bundle in sorted(checked)]
    if longest:
        measured["longest"] = {**attrs.asdict(longest[0]), "case": longest[1]}
    if not cases:
        return Claim("interrupts", "interrupts", None, "no case that finished to interrupt"), measured
    stretch = f"; longest stretch without a safe point: {_stretch(*longest)}" if longest else ""
    if not harms:
        says = f"{tried} interrupts in {cases} cases changed nothing{stretch}"
        return Claim("interrupts", "interrupts", True, says), measured
    says = f"unsafe at {', '.join(places[:6])}{' …' if len(places) > 6 else ''}{stretch}"
    shown = {harm.place: (name, harm) for name, harm in reversed(harms)}
    detail = [f"  {shown[place][1]} (case {shown[place][0]})" for place in places[:8]]
    detail.append("  try      a branch in flight over these bundles, or registers of their own for what is in flight")
    lines = tuple(dict.fromkeys(line for _, harm in harms for line in harm.lines))
    return Claim("interrupts", "interrupts", False, says, "\n".join(detail), lines), measured


def _stretch(stretch: Stretch, case: str) -> str:
    return f"{stretch.cycles} cycles, {stretch.place} to {stretch.until} ({case})"


def _runs(judge: Judge) -> Iterator[tuple[str, Setup]]:
    """The cases to interrupt: those that finish, each longer than the one before, the shortest first."""
    lengths: dict[int, tuple[str, Setup]] = {}
    for case in judge.cases:
        try:
            run = judge.run(case)
        except VliwsimError:
            continue
        if run.reason == "halt" and run.cycles <= LONGEST:
            lengths.setdefault(run.cycles, (case.name, run.setup))
    for cycles in sorted(lengths)[:MOST_CASES]:
        yield lengths[cycles]
