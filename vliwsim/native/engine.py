"""The fast engine: machine code where there is some for what the machine is in the middle of, the stepper elsewhere."""

from __future__ import annotations

from collections.abc import Callable, Collection
from concurrent.futures import Future, ThreadPoolExecutor
from time import perf_counter

from vliwsim.description.values import Undefined
from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.outcome import Outcome
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.native import cache
from vliwsim.native.compiler import Code, compile_text
from vliwsim.native.contexts import Context, Contexts, Flight, Turn
from vliwsim.native.loaded import Loaded
from vliwsim.native.region import MOST_CONTEXTS, Region
from vliwsim.native.translate import Translation

MOST_REGIONS = 8
"""Translations of one program; beyond that the stepper goes on alone where none fits."""

FIRST_SLICE = 1 << 20
"""Cycles between two looks at whether to go on; as many more as the engine does in :data:`SHORT`."""

SHORT = 0.03
"""Seconds; between two looks there are hardly ever more than thrice as many, so that Ctrl-C is heard at once."""

PATIENCE = 4096
"""Cycles the stepper goes on, where no context fits, before a translation from there is made."""


LONG = 1.0
"""Seconds of machine code after which a run is long: it is worth a better translation, made beside it."""


class Better:
    """A translation whose code is made beside a run, in a thread: LLVM does not hold the interpreter up."""

    def __init__(self, translation: Translation, text: str, effort: int) -> None:
        self.translation, self.text, self.effort = translation, text, effort
        self.making: Future[Code] | None = None

    def code(self) -> Code | None:
        """The code once it is there; begins to make it when first asked."""
        if self.making is None:
            pool = ThreadPoolExecutor(1)
            self.making = pool.submit(cache.code_of, self.text, self.effort)
            pool.shutdown(wait=False)
        return self.making.result() if self.making.done() else None


class Native:
    """One program on its core, run fast.

    ``regions``: what has been translated. ``patience``: cycles the stepper goes on, where no context fits, before a
    translation from there is made. ``effort``: LLVM's optimisation level.
    ``following``: carry undefined bytes along, which is slower, instead of leaving them to the stepper. ``most``:
    contexts of a translation; the ways beyond lead back to the stepper. ``quick``: begin with a translation that is
    made at once, unless a better one is kept from before, and make the better one beside a run that proves to be long.
    """

    def __init__(
        self,
        machine: Machine,
        *,
        patience: int = PATIENCE,
        effort: int = 2,
        following: bool = False,
        most: int = MOST_CONTEXTS,
        quick: bool = False,
    ) -> None:
        self.machine, self.most = machine, most
        self.patience, self.effort, self.following = patience, effort, following
        self.walker = Contexts(machine.ready)
        self.regions: list[Loaded] = []
        self.alone, self.ran = 0, 0.0
        self.quick = quick and effort > 0
        self.better: dict[int, Better] = {}

    # -------------------------------------------------------------------------------------------------- translations

    def begin(self, given: Collection[int]) -> Loaded:
        """The translation from the program's first beat, with the registers of these numbers defined."""
        zero = {self.machine.core.register_numbers[name] for name in self.machine.core.zero_registers}
        registers = range(len(self.machine.core.register_names))
        return self._translate(Context(0), sum(1 << r for r in registers if r not in given and r not in zero))

    def translate(self, state: State) -> Loaded | None:
        """A translation that begins at ``state``; None where there is none to begin with."""
        seed = self.context_of(state)
        if seed is None or len(self.regions) >= MOST_REGIONS:
            return None
        registers = range(len(self.machine.core.register_names))
        return self._translate(seed, sum(1 << r for r in registers if isinstance(state.operands[r], Undefined)))

    def _translate(self, seed: Context, undefined: int) -> Loaded:
        translation = Translation(Region(self.walker, seed, undefined, self.most), self.following)
        text = translation.text("run")
        code = cache.kept(text, self.effort) if self.quick else self.code(text)
        if code is None:
            self.better[len(self.regions)] = Better(translation, text, self.effort)
            region = Region(self.walker, seed, undefined, self.most, thorough=False)
            translation = Translation(region, self.following)
            code = Code(compile_text(translation.text("run"), 0))
        made = Loaded(self.machine, translation, code)
        self.regions.append(made)
        return made

    def improve(self) -> None:
        """Take up the better translations that are ready."""
        for number, better in list(self.better.items()):
            code = better.code()
            if code is not None:
                self.regions[number] = Loaded(self.machine, better.translation, code)
                del self.better[number]

    def code(self, text: str) -> Code:
        """The loaded code of a text; what took effort to compile is kept between runs."""
        return cache.code_of(text, self.effort) if self.effort else Code(compile_text(text, 0))

    def context_of(self, state: State) -> Context | None:
        """The context of a state; None in a freeze, a service, behind ``halt`` or with undefined data in flight."""
        if state.frozen or state.service or state.halt_beat is not None:
            return None
        flights = []
        for beat, batches in state.flight.items():
            for numbers, values in batches:
                if not self.following and any(isinstance(value, Undefined) for value in values):
                    return None
                flights += [Flight(beat - state.beat, n, True) for n in numbers]
        turns = self._turns_of(state)
        if turns is None:
            return None
        busy = tuple((slot, until - state.beat) for slot, until in enumerate(state.busy_until) if until > state.beat)
        return Context(state.at, state.within, state.waited_fresh, tuple(sorted(flights)), tuple(sorted(turns)), busy)

    def _turns_of(self, state: State) -> list[Turn] | None:
        """The branches in flight, each from some bundle that could have sent it; None where none is found."""
        sites = [
            (index, k, part.target)
            for index in range(len(self.machine.program.bundles))
            for k, part in enumerate(self.machine.ready[index].parts)
            if part.branches and part.target is not None
        ]
        turns = []
        for index, target in state.redirects.items():
            found = next(((b, k) for b, k, t in sites if t == target), None)
            if found is None:
                return None
            turns.append(Turn(index - state.issue, *found, sure=True))
        left = self.machine.core.branch.latency - (state.issue - state.last_branch)
        if left > 0 and all(turn.bundles != left for turn in turns):
            if not sites:
                return None
            turns.append(Turn(left, *sites[0][:2], sure=False))
        return turns

    # ------------------------------------------------------------------------------------------------------- running

    def advance(self, state: State, until: int = FOREVER) -> None:
        """As :meth:`vliwsim.machine.stepper.Machine.advance`."""
        while not state.finished and state.cycle < until:
            self.go_on(state, until)

    def go_on(self, state: State, until: int, most: int = FOREVER) -> None:
        """Run on: machine code for about ``most`` cycles, never beyond ``until``, or else a little by the stepper."""
        machine, asked = self.machine, state.interrupt_at
        if state.halt_beat is not None or state.frozen or (asked is not None and state.cycle >= asked):
            machine.advance(state, min(until, state.cycle + 1))
            return
        if self.leap(state, until if asked is None else min(until, asked), most):
            self.alone = 0
            return
        machine.advance(state, min(until, state.cycle + 1))
        self.alone += 1
        if self.alone > self.patience and self.translate(state) is None and len(self.regions) >= MOST_REGIONS:
            machine.advance(state, min(until, state.cycle + (1 << 13)))

    def leap(self, state: State, until: int, most: int = FOREVER) -> bool:
        """Run machine code from here if there is some; whether time has passed."""
        if not self.regions:
            self.translate(state)
        for loaded in self.regions:
            match = loaded.match(state)
            if match is None:
                continue
            # it may first come to a head, and at last leave all heads behind
            fuel = (until - state.cycle - loaded.region.reach) // loaded.region.span - 1
            if fuel < (match[0] in loaded.region.heads):
                self.alone = 0  # a translation fits: no other is wanted
                return False
            before = state.cycle
            began = perf_counter()
            loaded.run(state, match, min(fuel, 1 + most // loaded.region.span, 1 << 60))
            self.ran += perf_counter() - began
            if self.better and self.ran > LONG:
                self.improve()
            return state.cycle > before
        return False

    def run(
        self,
        state: State,
        *,
        limit: int | None = None,
        interrupt_at: int | None = None,
        progress: Callable[[int], bool | None] | None = None,
    ) -> Outcome:
        """As :meth:`vliwsim.machine.stepper.Machine.run`; ``progress`` may end it there by returning true."""
        machine = self.machine
        if interrupt_at is not None:
            state.interrupt_at = interrupt_at
        end = FOREVER if limit is None else limit
        slice_, seen = FIRST_SLICE, perf_counter()
        try:
            while not state.finished and state.cycle < end:
                began = perf_counter()
                self.go_on(state, end, slice_)
                now = perf_counter()
                if now - began < SHORT:
                    slice_ *= 2
                elif now - began > 2 * SHORT:
                    slice_ = max(FIRST_SLICE, slice_ // 2)
                if progress and now - seen >= SHORT:
                    seen = now
                    if progress(state.cycle):
                        return machine.outcome(state, "limit")
        except HazardMet as met:
            return machine.stopped_by(state, met.hazard)
        return machine.run(state, limit=end)
