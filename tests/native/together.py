"""Many programs' translations compiled as one LLVM module, so that what a module costs is paid once for all of them.

Each program runs in a thread of its own, one at a time: it runs until the fast engine asks for machine code, and
waits. When all have run or wait, what they want becomes one module, with other function names, and they go on. The
text of each is the engine's own, and so is LLVM's pipeline (:func:`vliwsim.native.compiler.compile_text`).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from threading import Semaphore, Thread
from typing import Any, Generic, TypeVar

from vliwsim.machine.stepper import Machine
from vliwsim.native.compiler import Code, binding, compile_text
from vliwsim.native.engine import Native

T = TypeVar("T")

KEPT: dict[tuple[str, int], Share] | None = None
"""Code by text and effort, where it is to be kept for programs that are run again and again."""


class Share:
    """One text's part of a module's code."""

    def __init__(self, code: Code, prefix: str) -> None:
        self.code, self.prefix = code, prefix

    def address(self, name: str) -> int:
        return self.code.address(self.prefix + name)


class Job(Thread, Generic[T]):
    """One piece of work; ``want`` is called by it and comes back when the code is there."""

    def __init__(self, work: Callable[[Job[T]], T], paused: Semaphore) -> None:
        super().__init__(daemon=True)
        self.work, self.paused, self.go = work, paused, Semaphore(0)
        self.result: T | None = None
        self.error: BaseException | None = None
        self.wanted: tuple[str, int] | None = None
        self.made: Share | Exception | None = None
        self.done = False

    def run(self) -> None:
        self.go.acquire()
        try:
            self.result = self.work(self)
        except BaseException as error:
            self.error = error
        self.done = True
        self.paused.release()

    def want(self, text: str, effort: int) -> Share:
        self.wanted = text, effort
        self.paused.release()
        self.go.acquire()
        self.wanted = None
        if isinstance(self.made, Exception):
            raise self.made
        assert self.made is not None
        return self.made


class Shared(Native):
    """The fast engine, its code compiled together with others'."""

    def __init__(self, job: Job[Any], machine: Machine, **how: Any) -> None:
        super().__init__(machine, **how)
        self.job = job

    def code(self, text: str) -> Any:
        return self.job.want(text, self.effort)


def together(works: Sequence[Callable[[Job[T]], T]]) -> list[T | BaseException]:
    """What each of the works gave, or raised."""
    paused = Semaphore(0)
    jobs = [Job(work, paused) for work in works]
    for job in jobs:
        job.start()
    ahead = jobs
    while ahead:
        for job in ahead:
            job.go.release()
            paused.acquire()
        ahead = [job for job in ahead if not job.done]
        provide(ahead)
    return [job.error if job.error is not None else job.result for job in jobs]  # type: ignore[misc]


def provide(jobs: Sequence[Job[Any]]) -> None:
    """Compile what the jobs want, an effort a module."""
    by_effort: dict[int, list[Job[Any]]] = {}
    for job in jobs:
        assert job.wanted is not None
        by_effort.setdefault(job.wanted[1], []).append(job)
    for effort, some in sorted(by_effort.items()):
        try:
            compile_jobs(some, effort)
        except RuntimeError:  # one of them is no good: which?
            for job in some:
                try:
                    compile_jobs([job], effort)
                except RuntimeError as error:
                    job.made = error


def compile_jobs(jobs: Sequence[Job[Any]], effort: int) -> None:
    """Give every job its part of one module's code; what is kept is not made again."""
    new = []
    for job in jobs:
        assert job.wanted is not None
        job.made = None if KEPT is None else KEPT.get(job.wanted)
        if job.made is None:
            new.append((job, job.wanted))
    texts = [renamed(text, f"p{k}.") for k, (_, (text, _)) in enumerate(new)]
    if not texts:
        return
    with verifying():
        code = Code(compile_text("\n".join(texts), effort))
    for k, (job, wanted) in enumerate(new):
        job.made = Share(code, f"p{k}.")
        if KEPT is not None:
            KEPT[wanted] = job.made


@contextmanager
def verifying() -> Iterator[None]:
    """LLVM believes any text that parses: here what it parses is verified too."""
    llvm = binding()
    parse = llvm.parse_assembly

    def verified(text: str) -> Any:
        module = parse(text)
        module.verify()
        return module

    llvm.parse_assembly = verified
    try:
        yield
    finally:
        llvm.parse_assembly = parse


def renamed(text: str, prefix: str) -> str:
    """A module's text with ``prefix`` before the names of the functions it defines."""
    own = set(_DEFINED.findall(text))
    return _NAME.sub(lambda found: f"@{prefix}{found[1]}" if found[1] in own else found[0], text)


_NAME = re.compile(r"@([\w.]+)")
_DEFINED = re.compile(r"^define [^@]*@([\w.]+)", re.MULTILINE)
