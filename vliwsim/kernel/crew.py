"""Rows of cases, run on all processors in the order they come, while somebody may look on and stop them."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor, wait
from typing import TYPE_CHECKING, Any

import attrs
import numpy as np

from vliwsim.kernel.account import Account, account_of
from vliwsim.kernel.engine import Simulation
from vliwsim.kernel.stacked import Stack
from vliwsim.machine.stepper import Machine
from vliwsim.program.kernel import Kernel

if TYPE_CHECKING:
    from vliwsim.native.batch import Batch, Counted, Results, Worker

LOOK = 0.05
"""Seconds between two looks at whether to go on."""

MOST_PLANS = 16
"""Layouts whose buffers are kept."""


def batch_of(kernel: Kernel) -> Batch:
    """The program of ``kernel``, made ready for many cases; worth keeping."""
    from vliwsim.native.batch import Batch

    given = [item for item in kernel.items if item.size is not None or item.kind != "returns"]
    return Batch(Machine(kernel.program), {item.register for item in given if item.register is not None})


class Total:
    """The account of many runs together."""

    def __init__(self, kernel: Kernel) -> None:
        from vliwsim.native.batch import Counted

        self.kernel = kernel
        self.counted = Counted(len(kernel.program.bundles))

    def add_simulation(self, one: Simulation) -> None:
        """A run by itself."""
        self.counted.add_run(one.counts, one.begun, one.stalls, one.halted_in, one.drain)

    def account(self, more: Counted | None = None, budget: float | None = None) -> Account:
        """The account of all that was added, and of ``more``. Drain belongs to a section where all halted in one."""
        from vliwsim.native.batch import Counted

        total = Counted(len(self.counted.counts))
        total.add(self.counted)
        if more is not None:
            total.add(more)
        where = next(iter(total.halts)) if len(total.halts) == 1 else None
        return account_of(self.kernel, total.counts, total.begun, total.stalls, total.drain, budget, where)


@attrs.frozen(eq=False)
class Job:
    """Cases to run: their ``rows``, what the first takes for the result ``before``, and anything of the caller's."""

    stack: Stack
    rows: np.ndarray
    before: np.ndarray | None = None
    tag: Any = None


class Crew:
    """Threads that run the cases of one program; the interpreter is free while they do.

    ``limit``: cycles a case. ``look`` is called every now and then, and stops everything by giving true. ``chained``:
    jobs run one behind the other, and so do the cases of one (see :class:`vliwsim.native.batch.Worker`). ``eager``:
    ask for jobs ahead; without it a job is asked for when the one before has been given away.
    """

    def __init__(
        self,
        batch: Batch,
        limit: int,
        look: Callable[[], bool] | None = None,
        *,
        chained: bool = False,
        eager: bool = True,
    ) -> None:
        self.batch, self.limit, self.look, self.chained = batch, limit, look, chained
        self.stop = np.zeros(1, np.int64)
        self.threads = 1 if chained or not eager else os.cpu_count() or 1
        self.ahead = self.threads if eager else 0
        self._workers: dict[int, tuple[Stack, list[Worker]]] = {}
        self._raw: dict[str, Mapping[str, np.ndarray]] = {}

    def run(self, jobs: Iterator[Job]) -> Iterator[tuple[Job, Results]]:
        """Each job with the results of its cases, in order; fewer than it has where it was stopped or a chain ended.

        Jobs are asked for while earlier ones run, so that few of them are held at a time. When this iterator is
        closed, or an exception such as Ctrl-C's passes through, what runs is stopped.
        """
        self.stop[0] = 0
        pool = ThreadPoolExecutor(self.threads)
        ahead: deque[tuple[Job, Worker, Future[Results]]] = deque()
        try:
            for job in jobs:
                worker = self._worker(job.stack)
                ahead.append((job, worker, pool.submit(self._done, worker, job)))
                while len(ahead) > self.ahead:
                    yield self._finished(*ahead.popleft())
            while ahead:
                yield self._finished(*ahead.popleft())
        finally:
            self.stop[0] = 1
            pool.shutdown(wait=True, cancel_futures=True)

    def _done(self, worker: Worker, job: Job) -> Results:
        from vliwsim.native.batch import Results

        results = np.zeros((len(job.rows), job.stack.plan.result), np.uint8)
        count = worker.run(job.rows, results, self.limit, job.before)
        return Results(job.stack.plan, results[:count], worker.totals())

    def _finished(self, job: Job, worker: Worker, future: Future[Results]) -> tuple[Job, Results]:
        while not future.done():
            wait([future], timeout=LOOK)
            if self.look and self.look():
                self.stop[0] = 1
        if not self.chained:
            self._workers[id(job.stack)][1].append(worker)
        return job, future.result()

    def _worker(self, stack: Stack) -> Worker:
        """Buffers that nobody uses now."""
        from vliwsim.native.batch import Worker

        _, free = self._workers.setdefault(id(stack), (stack, []))
        if free:
            return free[0] if self.chained else free.pop()
        if len(self._workers) > MOST_PLANS:
            self._forget(stack)
        worker = Worker(self.batch, stack.plan, self.stop, chained=self.chained)
        if self.chained:  # which runs one job behind the other
            free.append(worker)
        return worker

    def _forget(self, but: Stack) -> None:
        """Drop the buffers that are free."""
        for stack, free in self._workers.values():
            if stack is not but:
                free.clear()

    def again(self, job: Job, count: int, before: np.ndarray) -> Results:
        """The first ``count`` cases of a job by themselves, for the account of no more than those."""
        from vliwsim.native.batch import Results, Worker

        worker = Worker(self.batch, job.stack.plan, np.zeros(1, np.int64), chained=self.chained)
        results = np.zeros((count, job.stack.plan.result), np.uint8)
        done = worker.run(np.ascontiguousarray(job.rows[:count]), results, self.limit, before)
        assert done == count
        return Results(job.stack.plan, results, worker.totals())

    def take(self, results: Results) -> None:
        """Count what has run through in these for the account."""
        for name, made in results.totals.items():
            before = self._raw.get(name)
            self._raw[name] = {key: array + before[key] if before else array for key, array in made.items()}

    def counted(self) -> Counted:
        """The account of all that has been taken."""
        return self.batch.counted(self._raw)
