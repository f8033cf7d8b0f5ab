"""Many cases of one kernel at once: one translation, a compiled loop over the cases, all processors."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from functools import partial
from itertools import islice
from typing import TYPE_CHECKING, Any

import attrs
import numpy as np

from vliwsim.kernel.account import Account
from vliwsim.kernel.binding import bind
from vliwsim.kernel.crew import Crew, Job, Total, batch_of
from vliwsim.kernel.engine import simulate
from vliwsim.kernel.interface import Interface, interface_of
from vliwsim.kernel.runner import LIMIT, KernelRun, judged
from vliwsim.kernel.stacked import Stack, layout_names, of_case
from vliwsim.problems import InterfaceError, problem
from vliwsim.program.kernel import Kernel

if TYPE_CHECKING:
    from vliwsim.native.batch import Batch, Results

CHUNK = 2048
"""Cases that are prepared at a time, unless they are large."""

CHUNK_BYTES = 1 << 22
"""Bytes of inputs that are prepared at a time, unless one case has more."""

MOST_KEPT = 1000
"""Runs of exceptions that are kept whole."""

MOST_KEPT_BYTES = 1 << 27
"""Bytes of inputs in those."""

MOST_STACKS = 256
"""Layouts that are remembered."""

Cases = Mapping[str, Any] | Iterable[Mapping[str, Any]]


@attrs.frozen(eq=False)
class ManyRuns:
    """``outputs`` by name: an entry a case (of arrays a row; a list of arrays where their sizes differ). ``cycles`` of
    each, drain included. ``finished``: did it halt with all outputs defined; where it did not its outputs hold what
    there is, zeros where nothing is.

    ``exceptions``: the runs of those that did not, by case number, a thousand at most, fewer large ones. ``account``:
    all that finished, added up. ``stopped``: somebody stopped it, and these are the cases until then.
    """

    kernel: Kernel
    outputs: Mapping[str, np.ndarray | list[np.ndarray]]
    cycles: np.ndarray
    finished: np.ndarray
    exceptions: Mapping[int, KernelRun]
    account: Account
    stopped: bool = False

    @property
    def ok(self) -> bool:
        return bool(self.finished.all())


def run_many(
    kernel: Kernel,
    cases: Cases,
    *,
    limit: int = LIMIT,
    progress: Callable[[int], bool | None] | None = None,
    batch: Batch | None = None,
) -> ManyRuns:
    """Run ``kernel`` on many cases.

    ``cases``: inputs by name, of arrays a matrix, a row a case, of scalars a vector, an entry a case; what is given as
    for a single run (one dimension, one number) is the same for all. Or dicts of inputs, a case each, of any sizes;
    these may come from a generator, of which a few thousand are held at a time.

    ``limit``: cycles a case. ``progress`` is called with the number of cases done, and stops everything by returning
    true. ``batch``: the kernel's, if it has been made ready before. Nothing is compared: outputs are ready to be held
    against a reference computed at once.
    Raises :class:`~vliwsim.problems.InterfaceError` for inputs that do not fit, with the number of the case.
    """
    return _Many(kernel, limit, progress, batch).run(cases)


@attrs.frozen(eq=False)
class _Group:
    """Cases of one layout. ``numbers`` of the cases; ``given``: what differs, the first axis the case; ``single`` makes
    the inputs of one, by its place in the group."""

    numbers: np.ndarray
    given: Mapping[str, Any]
    single: Callable[[int], Mapping[str, Any]]


class _Many:
    """One call of :func:`run_many`."""

    def __init__(
        self, kernel: Kernel, limit: int, progress: Callable[[int], bool | None] | None, batch: Batch | None
    ) -> None:
        self.kernel, self.limit, self.progress = kernel, limit, progress
        self.batch = batch or batch_of(kernel)
        self.interface = interface_of(kernel)
        self.deciding = layout_names(kernel)
        self.stacks: dict[object, Stack] = {}
        self.alone = Total(kernel)
        self.stopped = False
        self.done = self.kept = 0
        self.parts: list[tuple[np.ndarray, dict[str, np.ndarray]]] = []
        self.cycles: list[np.ndarray] = []
        self.finished: list[np.ndarray] = []
        self.exceptions: dict[int, KernelRun] = {}

    def run(self, cases: Cases) -> ManyRuns:
        groups = self._stacked(cases) if isinstance(cases, Mapping) else self._listed(iter(cases))
        jobs = map(self._job, groups)
        first = next(jobs, None)
        if first is None:
            raise InterfaceError(problem("case-count", "no case", "at least one"))
        crew = Crew(self.batch, self.limit, self._look)
        results = crew.run(_behind(first, jobs))
        for job, found in results:
            if len(found.rows) < len(job.rows):
                self.stopped = True
                break
            self._take(crew, job, found)
            if self.stopped:
                break
        results.close()  # type: ignore[attr-defined]
        return self._gathered(crew)

    def _look(self) -> bool:
        if self.progress and self.progress(self.done):
            self.stopped = True
        return self.stopped

    def _job(self, group: _Group) -> Job:
        stack = self._stack(group)
        rows, _ = stack.rows(group.given, lambda case: _label(int(group.numbers[case])))
        return Job(stack, rows, None, group)

    def _stack(self, group: _Group) -> Stack:
        """What is known of the layout of a group; its first case is bound where it is new."""
        first = group.single(0)
        key = _key(self.interface, self.deciding, first)
        stack = self.stacks.get(key)
        if stack is None:
            try:
                setup = bind(self.kernel, first)
            except InterfaceError as error:
                label = _label(int(group.numbers[0]))
                raise InterfaceError([of_case(p, label) for p in error.problems]) from None
            stack = Stack(setup, list(group.given))
            if len(self.stacks) < MOST_STACKS:
                self.stacks[key] = stack
        return stack

    # -------------------------------------------------------------------------------------------------- ways of giving

    def _stacked(self, given: Mapping[str, Any]) -> Iterator[_Group]:
        varying, count = self._varying(given)
        shared = {name: value for name, value in given.items() if name not in varying}
        size = sum(array[:1].nbytes for array in varying.values())
        step = max(1, min(CHUNK, CHUNK_BYTES // max(1, size)))
        deciding = [name for name in varying if name in self.deciding and varying[name].ndim == 1]
        for first in range(0, count, step):
            numbers = np.arange(first, min(first + step, count))
            for some in _alike([varying[name][numbers[0] : numbers[-1] + 1] for name in deciding], len(numbers)):
                own = numbers if some is None else numbers[some]
                taken = slice(own[0], own[-1] + 1) if some is None else own
                chosen = {name: array[taken] for name, array in varying.items()}
                yield _Group(own, chosen, partial(_single, shared, chosen))

    def _varying(self, given: Mapping[str, Any]) -> tuple[dict[str, np.ndarray], int]:
        """The inputs that differ by case, and the number of cases."""
        varying: dict[str, np.ndarray] = {}
        for name, value in given.items():
            item = self.interface.inputs.get(name)
            if item is not None and np.ndim(value) == (1 if item.size is None else 2):
                varying[name] = np.asarray(value)
            elif item is not None and np.ndim(value) > (0 if item.size is None else 1):
                found = f"{name} has {np.ndim(value)} dimensions"
                raise InterfaceError(problem("array-shape", found, "a vector for a scalar, a matrix for an array"))
        counts = {name: len(array) for name, array in varying.items()}
        if not counts or len(set(counts.values())) > 1 or 0 in counts.values():
            shown = ", ".join(f"{name}: {n}" for name, n in counts.items()) or "nothing that differs by case"
            allowed = "matrices of arrays and vectors of scalars, of as many rows as there are cases, at least one"
            raise InterfaceError(problem("case-count", shown, allowed))
        return varying, next(iter(counts.values()))

    def _listed(self, cases: Iterator[Mapping[str, Any]]) -> Iterator[_Group]:
        first, step = 0, 16
        while chunk := list(islice(cases, step)):
            groups: dict[object, list[int]] = {}
            for k, case in enumerate(chunk):
                if not isinstance(case, Mapping):
                    found = f"{_label(first + k)} is of type {type(case).__name__}"
                    raise InterfaceError(problem("case-type", found, "a dict of inputs by name"))
                groups.setdefault(_key(self.interface, self.deciding, case, types=True), []).append(k)
            for places in groups.values():
                some = [chunk[k] for k in places]
                names = [name for name in some[0] if name in self.interface.inputs]
                given = {name: np.array([np.asarray(case[name]) for case in some]) for name in names}
                yield _Group(np.array(places) + first, given, some.__getitem__)
            first += len(chunk)
            size = sum(np.asarray(v).nbytes for v in chunk[-1].values()) or 1
            step = max(1, min(CHUNK, CHUNK_BYTES // size))

    # --------------------------------------------------------------------------------------------------------- results

    def _take(self, crew: Crew, job: Job, found: Results) -> None:
        group: _Group = job.tag
        crew.take(found)
        outputs = job.stack.outputs(found)
        cycles, good = found.cycles, found.finished & found.defined
        for k in np.flatnonzero(~good).tolist():
            run = self._alone(int(group.numbers[k]), group.single(k))
            for name, array in outputs.items():
                array[k] = run.outputs.get(name, 0)
            cycles[k] = run.cycles
            good[k] = run.reason == "halt" and not run.problems
        self.parts.append((group.numbers, outputs))
        self.cycles.append(cycles)
        self.finished.append(good)
        self.done += len(group.numbers)
        self._look()

    def _alone(self, number: int, inputs: Mapping[str, Any]) -> KernelRun:
        """A case that compiled code does not take to its end, by the stepper."""
        setup = bind(self.kernel, inputs)
        simulation = simulate(setup, limit=self.limit, watch=lambda _: self._look(), machine=self.batch.machine)
        run = judged(setup, simulation, case=_label(number), expected=None, limit=self.limit)
        if run.reason == "halt" and not run.problems:
            self.alone.add_simulation(simulation)
        elif not self.exceptions or (len(self.exceptions) < MOST_KEPT and self.kept < MOST_KEPT_BYTES):
            self.exceptions[number] = run
            self.kept += sum(len(data) for _, data in setup.memory)
        return run

    def _gathered(self, crew: Crew) -> ManyRuns:
        numbers = np.concatenate([n for n, _ in self.parts] or [np.zeros(0, np.int64)])
        order = np.argsort(numbers, kind="stable")
        count = len(numbers) if not self.stopped else int((numbers[order] == np.arange(len(numbers))).sum())
        order = order[:count]

        def sorted_(arrays: list[np.ndarray]) -> np.ndarray:
            whole = np.concatenate(arrays) if arrays else np.zeros(0, np.int64)
            return whole[order]

        outputs: dict[str, np.ndarray | list[np.ndarray]] = {}
        for name in self.interface.outputs:
            arrays = [part[name] for _, part in self.parts]
            if len({array.shape[1:] for array in arrays}) <= 1:
                outputs[name] = sorted_(arrays)
            else:
                rows = [row for array in arrays for row in array]
                outputs[name] = [rows[k] for k in order.tolist()]
        return ManyRuns(
            self.kernel,
            outputs,
            sorted_(self.cycles),
            sorted_(self.finished).astype(bool),
            dict(sorted(self.exceptions.items())),
            self.alone.account(crew.counted()),
            self.stopped,
        )


def _behind(first: Job, rest: Iterator[Job]) -> Iterator[Job]:
    yield first
    yield from rest


def _label(number: int) -> str:
    return f"case {number}"


def _single(shared: Mapping[str, Any], chosen: Mapping[str, np.ndarray], case: int) -> Mapping[str, Any]:
    return {**shared, **{name: array[case] for name, array in chosen.items()}}


def _alike(columns: list[np.ndarray], count: int) -> Iterator[np.ndarray | None]:
    """Places of those that are equal in all columns; None for all of them."""
    if not columns:
        yield None
        return
    groups: dict[tuple[object, ...], list[int]] = {}
    for k in range(count):
        groups.setdefault(tuple(column[k].item() for column in columns), []).append(k)
    if len(groups) == 1:
        yield None
        return
    yield from (np.array(places) for places in groups.values())


def _key(interface: Interface, deciding: frozenset[str], case: Mapping[str, Any], types: bool = False) -> object:
    """What decides the layout of a case: names, lengths, sizes, and values that sizes are made of.

    ``types``: and what kind of numbers they are, so that cases of one key can be put into one array.
    """
    found: list[object] = []
    for name, value in case.items():
        array = value if isinstance(value, np.ndarray) else None
        kind: object = (array.dtype if array is not None else np.asarray(value).dtype) if types else None
        shape = array.shape if array is not None else np.shape(value)
        if name not in interface.inputs:
            found.append((name, repr(value)))
        elif name in deciding:
            found.append((name, kind, shape, np.asarray(value).tobytes()))
        else:
            found.append((name, kind, shape))
    return tuple(found)
