"""A recording far longer than a frame, run through a kernel frame by frame, with what ``changes`` kept in between.

The first cycles are the stepper's; once it is seen to take long the program is translated, once for all frames, and the
frames run in a compiled loop. Where frames do not depend on each other they run on all processors. The reference is
called meanwhile, frame by frame, with what the kernel itself left before, so that one wrong frame does not make all
later ones wrong.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from vliwsim.kernel.binding import Setup, bind
from vliwsim.kernel.compare import Difference, compare
from vliwsim.kernel.crew import Crew, Job, Total, batch_of
from vliwsim.kernel.cutting import Cut
from vliwsim.kernel.engine import LONG, simulate
from vliwsim.kernel.frames_run import FramesRun
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.outputs import Output
from vliwsim.kernel.recording import Computed, judge
from vliwsim.kernel.reference import Reference, call_reference
from vliwsim.kernel.runner import LIMIT, KernelRun, budget_of, judged
from vliwsim.kernel.runner import whole_number as within_of
from vliwsim.kernel.stacked import Stack, layout_names, of_case
from vliwsim.kernel.tallies import Tally
from vliwsim.machine.stepper import Machine
from vliwsim.problems import InterfaceError, Problem, problem
from vliwsim.program.kernel import Kernel

if TYPE_CHECKING:
    from vliwsim.native.batch import Batch, Results

CHUNK_BYTES = 1 << 21
"""Bytes of inputs and outputs that are prepared at a time, unless one frame has more."""

MOST_CHUNK = 2048
"""Frames that are prepared at a time."""

COST = 2000
"""Cycles of the stepper that take as long as it takes to prepare one frame by itself."""

SHORT = 0.08
"""Seconds that a stretch of frames takes before the next is made a shorter one."""

Take = Callable[[str, np.ndarray], None]
"""Gets an output's name and what some frames gave, in order."""


def run_frames(
    kernel: Kernel,
    frames: Mapping[str, Any],
    given: Mapping[str, Any],
    *,
    hop: int | Mapping[str, int] | None = None,
    lead: int | Mapping[str, int] = 0,
    pad: bool = False,
    reference: Reference | None = None,
    limit: int = LIMIT,
    engine: str = "auto",
    look: Callable[[int], bool | None] | None = None,
    take: Take | None = None,
    batch: Callable[[], Batch] | None = None,
) -> FramesRun:
    """Run ``kernel`` on every frame of a recording.

    ``frames``: inputs that differ from frame to frame: an array of one dimension is cut into frames, of a matrix each
    row is one; of a scalar a vector with a value a frame, or an expression of ``frame``, its number from 0, and sizes.
    ``given``: everything else, as for one run; of ``changes`` what there is before the first frame.

    ``hop``: samples from one frame's beginning to the next one's, the frame's length unless told, for all arrays that
    are cut or by name. ``lead``: zeros before the first sample. ``pad``: fill the last frame up with zeros; without it
    samples behind the last whole frame are left out. ``limit``: cycles a frame. ``engine``: ``auto``, ``step``,
    ``native``. ``look`` is called with the number of frames done now and then, and stops the run by returning true.
    ``take`` gets the outputs as they come, which are then not kept. ``batch`` makes the kernel's code for many runs.

    Raises :class:`~vliwsim.problems.InterfaceError` for inputs that do not fit, and
    :class:`~vliwsim.problems.ReferenceFailure`.
    """
    cut = Cut(kernel, frames, given, hop, lead, pad)
    return _Frames(kernel, cut, reference, limit, look, take, batch or (lambda: batch_of(kernel))).run(engine)


class _Frames:
    """One call of :func:`run_frames`: frames go through it in order."""

    def __init__(
        self,
        kernel: Kernel,
        cut: Cut,
        reference: Reference | None,
        limit: int,
        look: Callable[[int], bool | None] | None,
        take: Take | None,
        batch: Callable[[], Batch],
    ) -> None:
        self.kernel, self.cut, self.reference, self.limit = kernel, cut, reference, limit
        self.watch, self.take, self.batch = look, take, batch
        self.interface, self.machine = interface_of(kernel), Machine(kernel.program)
        self.done, self.stopped = 0, False
        self.carried: dict[str, Any] = {}
        self.total = Total(kernel)
        self.crew: Crew | None = None
        self.cycles, self.budgets = Tally(), Tally()
        self.over = 0
        self.first_over: int | None = None
        self.kept: dict[str, list[np.ndarray]] = {name: [] for name in self.interface.outputs}
        self.wrong = 0
        self.differences: dict[str, tuple[int, Difference]] = {}
        self.ending: KernelRun | None = None
        self.notes: dict[tuple[object, ...], Problem] = {}

    def look(self) -> bool:
        if self.watch and self.watch(self.done):
            self.stopped = True
        return self.stopped

    def run(self, engine: str) -> FramesRun:
        self.scaled = [n for s in self.cut.sources.values() if not isinstance(s, Computed) for n in judge(s, self.look)]
        first = self._bound(0, {})
        self._judge_layout()
        changes = [name for name, item in self.interface.inputs.items() if item.kind == "changes"]
        known: dict[str, Any] = {**first.arrays, **first.values}
        self.carried = {name: known[name] for name in changes}
        self.stack = Stack(first, list(self.cut.sources), changes)
        self.stepwise = self.stack.depends_on_carried
        if self.stepwise:  # what is computed of it differs from frame to frame: each frame is prepared by itself
            self.stack = Stack(first, [*self.cut.sources, *changes])
        self._prepare(first)
        passed = 0
        # the first always by itself: what is to be noted is noted there
        while self.going and (not self.done or engine == "step" or (engine == "auto" and passed < LONG)):
            passed += self._alone() + COST
        while self.going:
            self._together()
            if self.going:
                self._alone()  # a frame that compiled code gave back
        return self._gathered(first)

    @property
    def going(self) -> bool:
        return self.done < self.cut.count and self.ending is None and not self.look()

    def _bound(self, frame: int, carried: Mapping[str, Any]) -> Setup:
        try:
            return bind(self.kernel, self.cut.inputs(frame, carried))
        except InterfaceError as error:
            if not frame:  # what is wrong with the first is mostly wrong with all
                raise
            raise InterfaceError([of_case(p, f"frame {frame}") for p in error.problems]) from None

    def _judge_layout(self) -> None:
        """What decides where arrays stand is the same for all frames."""
        changes = {name for name, item in self.interface.inputs.items() if item.kind == "changes"}
        differing = sorted(layout_names(self.kernel) & ({*self.cut.sources} | changes))
        if differing:
            found = f"sizes, places or tables of {self.kernel.name} depend on {', '.join(differing)}"
            raise InterfaceError(problem("frame-layout", found, "sizes and tables that are the same for all frames"))

    def _prepare(self, first: Setup) -> None:
        """How a frame's budget is found: once for all where nothing in it differs."""
        budget = self.kernel.budget
        same = {*first.names} - {*self.cut.sources} - {*self.carried} - {item.name for item in self.stack.late}
        self.budgeted = budget is not None
        self.budget = budget_of(first, {}) if budget is not None and budget.names <= same else None
        self.judged_singly = self.reference is not None or (self.budgeted and self.budget is None)

    # ------------------------------------------------------------------------------------------------- one by itself

    def _alone(self) -> int:
        """Run the next frame by itself; the cycles it took."""
        setup = self._bound(self.done, self.carried)
        simulation = simulate(setup, limit=self.limit, watch=lambda _: self.look(), machine=self.machine)
        if simulation.reason == "stopped":
            return 0
        expected = call_reference(self.reference, setup) if self.reference and simulation.reason == "halt" else None
        run = judged(setup, simulation, case="given", expected=expected, limit=self.limit)
        for note in run.notes:
            if note.name not in ("scaled", "rounded"):  # which are said of the whole recording
                self.notes.setdefault((note.name, note.place, note.found), note)
        if run.reason != "halt" or not run.legal:
            self.ending = run
            return 0
        self.total.add_simulation(simulation)
        self._differ({name: d for name, d in run.differences.items() if d})
        self._account(np.array([run.cycles]), [run.budget])
        self._keep({name: np.asarray(value)[None] for name, value in run.outputs.items()})
        self._next(run.outputs)
        return run.cycles

    def _account(self, cycles: np.ndarray, budgets: list[Any]) -> None:
        """Note what frames took and might have taken; before it is gone on to the next ones."""
        begun = self.cycles.count
        self.cycles.add(cycles)
        if self.budgeted:
            allowed = np.array(budgets)
            self.budgets.add(allowed)
            over = np.flatnonzero(cycles > allowed)
            self.over += len(over)
            if len(over) and self.first_over is None:
                self.first_over = begun + int(over[0])

    def _next(self, outputs: Mapping[str, Any]) -> None:
        """Go on to the next frame, with what this one left."""
        self.carried = {name: outputs[name] for name in self.carried}
        self.done += 1

    def _differ(self, differences: Mapping[str, Difference]) -> None:
        self.wrong += bool(differences)
        for name, difference in differences.items():
            self.differences.setdefault(name, (self.done, difference))

    def _keep(self, outputs: Mapping[str, np.ndarray]) -> None:
        """Outputs of some frames, an entry a frame."""
        for name, array in outputs.items():
            joined = array.reshape(-1) if self.interface.items[name].kind == "returns" else array
            joined = np.asarray(joined, self.interface.element(name).dtype)
            if self.take:
                self.take(name, joined)
            else:
                self.kept[name].append(joined)

    # -------------------------------------------------------------------------------------------------- many together

    def _together(self) -> None:
        """Run frames in compiled code until all are done, one is given back, or somebody stops it."""
        if self.crew is None:
            chained = bool(self.carried) and not self.stepwise
            self.crew = Crew(self.batch(), self.limit, self.look, chained=chained, eager=not self.stepwise)
        running = self.crew.run(self._stepwise() if self.stepwise else self._stretches())
        try:
            for job, found in running:
                self._accept(job, found)
                if self.done < job.tag[0] + len(job.rows) or not self.going:
                    return
        finally:
            running.close()  # type: ignore[attr-defined]

    def _stretches(self) -> Iterator[Job]:
        """Longer and longer stretches of frames, so that little is lost where one is given back or it is stopped."""
        first, size, asked = self.done, 1, time.monotonic()
        before: np.ndarray | None = self.stack.before(self.carried)
        most = max(1, min(MOST_CHUNK, CHUNK_BYTES // max(1, self.stack.plan.row + self.stack.plan.result)))
        while first < self.cut.count:
            last = min(self.cut.count, first + size)
            yield self._job(first, last, {}, before)
            first, before, now = last, None, time.monotonic()
            size = min(2 * size, most) if now - asked < SHORT else max(1, size // 2)
            asked = now

    def _stepwise(self) -> Iterator[Job]:
        """A frame at a time, made of what the one before left."""
        nothing = np.zeros(self.stack.plan.result, np.uint8)
        while self.done < self.cut.count:
            carried = {name: np.asarray(value)[None] for name, value in self.carried.items()}
            yield self._job(self.done, self.done + 1, carried, nothing)

    def _job(self, first: int, last: int, carried: Mapping[str, Any], before: np.ndarray | None) -> Job:
        given = {**self.cut.frames(first, last), **carried}
        rows, inputs = self.stack.rows(given, lambda k: f"frame {first + k}")
        return Job(self.stack, rows, before, (first, inputs))

    def _accept(self, job: Job, found: Results) -> None:
        """Take what frames gave, up to one that compiled code did not take to its end, or that looking on stopped."""
        assert self.crew is not None
        good = found.finished & found.defined
        count = len(good) if good.all() else int(np.argmin(good))
        outputs, before = self.stack.outputs(found), self.stack.before(self.carried)
        budgets: list[Any] = []
        if self.judged_singly:
            count = self._judge(job.tag[1], outputs, count, budgets)
        else:
            budgets = [self.budget] * count
            self.done += count
            if count:
                self.carried = {name: outputs[name][count - 1] for name in self.carried}
        self.crew.take(found if count == len(found.rows) else self.crew.again(job, count, before))
        self._account(found.cycles[:count], budgets)
        self._keep({name: array[:count] for name, array in outputs.items()})

    def _judge(
        self, inputs: Mapping[str, np.ndarray], outputs: Mapping[str, np.ndarray], count: int, budgets: list[Any]
    ) -> int:
        """Hold frames against the reference; how many of them before somebody stopped it."""
        for k in range(count):
            if self.look():
                return k
            own = {name: array[k] for name, array in outputs.items()}
            setup = self.stack.setup_of(inputs, k, self.carried)
            if self.reference:
                expected = call_reference(self.reference, setup)
                differing = [name for name in own if not _same(own[name], expected[name])]
                self._differ(self._differences(setup, own, expected) if differing else {})
            budgets.append(self.budget if self.budget is not None or not self.budgeted else self._budget(setup, own))
            self._next(own)
        return count

    def _differences(
        self, setup: Setup, outputs: Mapping[str, np.ndarray], expected: Mapping[str, Output]
    ) -> dict[str, Difference]:
        found = {}
        for name, value in outputs.items():
            item, element = self.interface.items[name], self.interface.element(name)
            difference = compare(element, value, expected[name], within_of(setup, item.within))
            if difference:
                found[name] = difference
        return found

    def _budget(self, setup: Setup, outputs: Mapping[str, np.ndarray]) -> int | float | None:
        scalars = {n: v.item() for n, v in outputs.items() if v.ndim == 0}
        return budget_of(setup, scalars)

    # ------------------------------------------------------------------------------------------------------- the end

    def _gathered(self, first: Setup) -> FramesRun:
        outputs = {}
        for name, arrays in self.kept.items():
            if not self.take:
                empty = np.zeros(self._shape(first, name), self.interface.element(name).dtype)
                outputs[name] = np.concatenate([empty, *arrays])
        ending = self.ending
        reason = "halt" if ending is None else ending.reason if ending.reason != "halt" else "undefined"
        if self.stopped and self.done < self.cut.count and ending is None:
            reason = "stopped"
        problems = [of_case(p, f"frame {self.done}") for p in ending.problems] if ending else []
        budgets = self.budgets if self.budgeted else None
        return FramesRun(
            self.kernel,
            first,
            self.cut.count,
            reason,
            self.total.account(self.crew.counted() if self.crew else None, budgets.total if budgets else None),
            self.cycles,
            budgets,
            self.over,
            self.first_over,
            outputs,
            self.wrong if self.reference else None,
            self.differences,
            self.cut.signals,
            (*problems, *self.scaled, *self.notes.values()),
        )

    def _shape(self, first: Setup, name: str) -> tuple[int, ...]:
        """Of an output of no frame at all."""
        item = self.interface.items[name]
        if item.size is None or item.kind == "returns":
            return (0,)
        return (0, first.area(name).bytes // self.interface.element(name).bytes)


def _same(got: np.ndarray, expected: Output) -> bool:
    """Equal in all their bits."""
    return got.tobytes() == np.asarray(expected, got.dtype).tobytes()
