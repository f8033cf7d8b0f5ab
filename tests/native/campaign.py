"""Generated programs on model, stepper and fast engine: any range of seeds, to be divided and gone on with.

    python -m tests.native.campaign --first 1000000 --count 100000

prints progress and every difference with its seed; ends with 1 if there was one. The same seeds mean the same programs
as long as the generator is the same.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from random import Random
from typing import NamedTuple

from tests.differential import compare, model, real
from tests.differential.generator import Trial, trial
from tests.differential.loops import loop_trials
from tests.differential.plain import Outcome
from vliwsim.machine.prepared import Preparation
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.native.contexts import Context, Contexts, Step
from vliwsim.native.loaded import Loaded
from vliwsim.native.region import MOST_CONTEXTS, Region
from vliwsim.native.translate import Translation

from .pinned import PROGRAMS
from .together import Job, Shared, together

BATCH = 100
"""Programs compiled together."""

AHEAD = 1 << 14
"""Cycles beyond a run's end at which its limit is."""

MOST_FOUND = 1_000
"""Lines of differences after which a campaign is given up."""

LONG = 10_000
"""Cycles from which on a run is held to the stepper alone: the model takes too long."""

FEW, SOME = 16, 64
"""Contexts of a translation for most programs, and for most loops; the ways beyond lead back to the stepper, and to
another translation."""


@dataclass
class Tally:
    """What came out: differences by seed, how the model's runs ended, cycles by what passed them."""

    programs: int = 0
    runs: int = 0
    found: list[tuple[int, str]] = field(default_factory=list)
    ends: Counter[str] = field(default_factory=Counter)
    cycles: Counter[str] = field(default_factory=Counter)
    late: Counter[str] = field(default_factory=Counter)
    """Hazards met in a beat that machine code had led to."""

    def add(self, other: Tally) -> None:
        self.programs += other.programs
        self.runs += other.runs
        self.found += other.found
        self.ends += other.ends
        self.cycles += other.cycles
        self.late += other.late

    def __str__(self) -> str:
        share = self.cycles["machine code"] / max(1, self.cycles["all"])
        return f"{self.programs} programs, {self.runs} runs, {self.cycles['all']} cycles, {share:.0%} in machine code"


class How(NamedTuple):
    """How a seed's program is run: LLVM's effort, undefined bytes carried along, contexts of a translation.

    ``whole``: contexts are translated that no run comes to, too. ``thorough``: with unrolled loops and strips, as the
    better translation of a long run is. ``begin``: the first translation knows only which registers are given.
    ``patience``: cycles that the stepper goes on before there is another translation. ``slice``: cycles after which
    machine code is asked to come back, 0 for never.
    """

    effort: int
    following: bool
    most: int
    whole: bool
    thorough: bool
    begin: bool
    patience: int
    slice: int


def how(seed: int) -> How:
    """Most at LLVM's lowest effort, and without what no run comes to, which LLVM would take most of the time for."""
    if seed < 0:
        return How(0, seed % 2 == 0, MOST_CONTEXTS, whole=True, thorough=True, begin=False, patience=3, slice=0)
    r = Random(f"how {seed}")
    whole = r.random() < 0.06
    return How(
        effort=2 if r.random() < 0.03 else 0,
        following=r.random() < 0.12,
        most=MOST_CONTEXTS if whole and r.random() < 0.5 else SOME if looping(seed) else FEW,
        whole=whole,
        thorough=r.random() < (0.8 if looping(seed) else 0.3),
        begin=r.random() < 0.5,
        patience=r.choice((3, 30, 30, 30)),
        slice=r.choice((0, 0, 0, 0, 1, 10)),
    )


PINNED = range(-2 * len(PROGRAMS), 0)
"""The seeds of programs that are written down, each in plain code and with undefined bytes carried along."""


def looping(seed: int) -> bool:
    """Whether it is a loop with two sets of data, one in five, else one freely drawn."""
    return seed % 5 == 0


class Needed(Contexts):
    """Steps only what these bundles begin: all else is left to the stepper, and not translated."""

    def __init__(self, ready: Preparation, bundles: set[int]) -> None:
        super().__init__(ready)
        self.bundles = bundles

    def step(self, context: Context) -> Step:
        if context.at in self.bundles:
            return super().step(context)
        due, staying = (tuple(f for f in context.flights if (f.beats == 0) is now) for now in (True, False))
        return Step(context, self.ready[context.at], True, due, staying)


class Counted(Shared):
    """Counts the cycles that machine code passes, and is led as ``way`` says."""

    def __init__(self, job: Job[Tally], machine: Machine, way: How) -> None:
        super().__init__(job, machine, patience=way.patience, effort=way.effort, following=way.following, most=way.most)
        self.way = way
        self.passed, self.last = 0, -1
        """Cycles, and the one that machine code led to last."""

    def _translate(self, seed: Context, undefined: int) -> Loaded:
        region = Region(self.walker, seed, undefined, self.most, thorough=self.way.thorough)
        translation = Translation(region, self.following)
        self.regions.append(Loaded(self.machine, translation, self.code(translation.text("run"))))
        return self.regions[-1]

    def leap(self, state: State, *limits: int) -> bool:
        before = state.cycle
        done = super().leap(state, *limits)
        self.passed += state.cycle - before
        if state.cycle > before:
            self.last = state.cycle
        return done

    def advance(self, state: State, until: int = FOREVER) -> None:
        if not self.way.slice:
            super().advance(state, until)
        while not state.finished and state.cycle < until:
            self.go_on(state, until, self.way.slice)


class Prepared(NamedTuple):
    """A seed's program with its data, and what model and stepper make of each."""

    trials: list[Trial]
    machine: Machine
    ends: list[tuple[Outcome, State]]
    tally: Tally


def prepared(seed: int) -> Prepared:
    trials, tally = trials_of(seed), Tally(1)
    machine = real.machine_of(trials[0].core, trials[0].program)
    return Prepared(trials, machine, [by_model_and_stepper(seed, made, machine, tally) for made in trials], tally)


def examine(seed: int) -> Callable[[Job[Tally]], Tally]:
    def work(job: Job[Tally]) -> Tally:
        trials, machine, ends, before = prepared(seed)
        tally = Tally()
        tally.add(before)
        way = how(seed)
        native = Counted(job, machine, way)
        if not way.whole:
            gone = [sum(counts) for counts in zip(*(state.counts for _, state in ends))]
            native.walker = Needed(machine.ready, {k for k, n in enumerate(gone) if n} | {s.at for _, s in ends})
        if way.begin:
            native.begin([n for n, value in trials[0].registers.items() if not value.unknown])
        for made, end in zip(trials, ends, strict=True):
            by_machine_code(seed, made, *end, machine, native, tally)
        return tally

    return work


def trials_of(seed: int) -> list[Trial]:
    """One program with its data."""
    if seed < 0:
        return [PROGRAMS[-seed - 1 >> 1]]
    r = Random(seed)
    return loop_trials(r) if looping(seed) else [trial(r)]


def by_model_and_stepper(seed: int, made: Trial, machine: Machine, tally: Tally) -> tuple[Outcome, State]:
    """What the model says, and the stepper's state. ``made.limit`` beyond :data:`LONG`: the stepper says it."""
    given = made.registers, made.regions
    stepped, state = real.finish(machine, machine.advance, *given, made.interrupt_at, made.limit)
    wanted = stepped = compare.plainly(stepped)
    if made.limit < LONG:
        said = model.run(made.core, made.program, *given, interrupt_at=made.interrupt_at, limit=made.limit)
        wanted = compare.plainly(said)
    tally.found += [(seed, f"stepper: {line}") for line in compare.between(wanted, stepped)]
    tally.runs += 1
    tally.ends[wanted.hazard.name if wanted.hazard else wanted.stop] += 1
    tally.cycles["all"] += wanted.cycles
    return wanted, state


def by_machine_code(
    seed: int, made: Trial, wanted: Outcome, state: State, machine: Machine, native: Counted, tally: Tally
) -> None:
    """One run by the fast engine."""
    limit = made.limit
    if wanted.stop != "limit":  # near a limit the fast engine leaves all to the stepper
        limit = wanted.cycles + AHEAD
    before = native.passed
    fast, fast_state = real.finish(machine, native.advance, made.registers, made.regions, made.interrupt_at, limit)
    passed = native.passed - before
    tally.cycles["machine code"] += passed
    if wanted.hazard and passed and native.last == wanted.hazard.cycle:
        tally.late[wanted.hazard.name] += 1
    tally.found += [(seed, f"native: {line}") for line in compare.between(wanted, compare.plainly(fast))]
    tally.found += [(seed, f"native, stepper: {line}") for line in rest(state, fast_state)]


REST = ("cycle", "beat", "issue", "counts", "begun", "stalls", "drain", "notes", "halt_beat", "at", "within")


def rest(one: State, other: State) -> Iterator[str]:
    """What the model does not have: where two machines' states differ, parts that do not outlive the run left out."""
    for name in REST:
        a, b = getattr(one, name), getattr(other, name)
        if a != b:
            yield f"{name}: stepper {a!r}, native {b!r}"


def run(seeds: Sequence[int]) -> Tally:
    """All programs of these seeds."""
    tally = Tally()
    for first in range(0, len(seeds), BATCH):
        some = seeds[first : first + BATCH]
        for seed, made in zip(some, together([examine(seed) for seed in some]), strict=True):
            if isinstance(made, Tally):
                tally.add(made)
            else:
                tally.found.append((seed, f"{type(made).__name__}: {made}"))
    return tally


def main() -> int:
    options = argparse.ArgumentParser(prog="python -m tests.native.campaign")
    options.add_argument("--first", type=int, default=1_000_000, help="the first seed")
    options.add_argument("--count", type=int, default=5_000, help="programs")
    asked = options.parse_args()
    tally, began, told = Tally(), time.monotonic(), 0.0
    for first in range(asked.first, asked.first + asked.count, BATCH):
        seeds = range(first, min(first + BATCH, asked.first + asked.count))
        part = run(seeds)
        for seed, line in part.found:
            print(f"seed {seed}: {line}", flush=True)
        tally.add(part)
        if len(tally.found) > MOST_FOUND:
            print("enough is wrong to stop")
            break
        if time.monotonic() - told > 20:
            told = time.monotonic()
            pace = 1000 * (told - began) / max(1, tally.programs)
            print(f"up to seed {seeds[-1]}: {tally}, {pace:.1f} ms a program", flush=True)
    print(f"seeds {asked.first} to {seeds[-1]}: {tally}, {len(tally.found)} differences")
    print("ends:", ", ".join(f"{name} {n}" for name, n in tally.ends.most_common()))
    print("met behind machine code:", ", ".join(f"{name} {n}" for name, n in tally.late.most_common()))
    return 1 if tally.found else 0


if __name__ == "__main__":
    sys.exit(main())
