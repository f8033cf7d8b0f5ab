"""Judging many targets at once, each in a process of its own: what one does, no other feels.

A process says what it is about to do; if what it calls outlives its limit, it is ended from outside, and the verdict
names where it was. Its file descriptors lead nowhere, so that a chatty reference disturbs no output.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from multiprocessing.connection import Connection, wait
from multiprocessing.process import BaseProcess
from typing import Any

import attrs

from vliwsim.regression.claims import Claim, Options, Verdict, verdict_from_json
from vliwsim.regression.keep import cache_folder
from vliwsim.regression.sources import Target

GRACE = 3.0
"""Seconds beyond the limit of a call before its process is ended."""
ABANDONED = 600.0
"""Seconds beyond it after which a process that nobody waits for any more ends itself."""

Told = Callable[[Target, str], None]


@attrs.define
class _Worker:
    """One process at work. ``since``: when it began ``doing`` what is limited in time, None where nothing is."""

    target: Target
    process: BaseProcess
    connection: Connection
    doing: str = "starting"
    since: float | None = None


Judged = tuple[Target, Verdict, list[str]]
"""A target, its verdict, and the files that were read for it."""


def judge_all(targets: Sequence[Target], jobs: int, options: Options, told: Told) -> Iterator[Judged]:
    """Every target's verdict, as they come. ``told`` hears what is going on.

    Ends all processes when the caller stops asking.
    """
    how = "fork" if "fork" in multiprocessing.get_all_start_methods() and sys.platform != "darwin" else "spawn"
    context = multiprocessing.get_context(how)
    if how == "fork":
        _preload()
    waiting = list(reversed(targets))
    at_work: dict[Connection, _Worker] = {}
    try:
        while waiting or at_work:
            while waiting and len(at_work) < jobs:
                worker = _start(context, waiting.pop(), options)
                at_work[worker.connection] = worker
            for connection in wait(list(at_work), timeout=0.5):
                worker = at_work[connection]  # type: ignore[index]
                done = _listen(worker, told)
                if done:
                    del at_work[worker.connection]
                    worker.connection.close()
                    worker.process.join()
                    yield done
            for worker in [w for w in at_work.values() if _late(w, options)]:
                del at_work[worker.connection]
                _end(worker)
                found = f"no answer within {options.seconds:g} s while {worker.doing}"
                yield worker.target, _no_verdict(worker.target, "reference", found), []
    finally:
        for worker in at_work.values():
            _end(worker)


def _preload() -> None:
    """What every process needs, loaded once for all."""
    import vliwsim.program.assembler
    import vliwsim.program.encoding.decode
    import vliwsim.program.encoding.encode
    import vliwsim.regression.judge  # noqa: F401


def _start(context: Any, target: Target, options: Options) -> _Worker:
    here, there = context.Pipe(duplex=False)
    process = context.Process(target=_work, args=(there, target, options), daemon=True)
    process.start()
    there.close()
    return _Worker(target, process, here)


def _listen(worker: _Worker, told: Told) -> Judged | None:
    """Take one message; the verdict if that was it, or if the process is gone."""
    try:
        kind, content = worker.connection.recv()
    except (EOFError, OSError):
        worker.process.join()
        found = f"its process ended ({_ending(worker.process.exitcode)}) while {worker.doing}"
        return worker.target, _no_verdict(worker.target, "reference", found), []
    if kind == "doing":
        worker.doing = content or "judging"
        worker.since = time.monotonic() if "calling" in content or "loading" in content else None
        told(worker.target, content)
        return None
    verdict, files = content
    return worker.target, verdict_from_json(verdict), files


def _ending(code: int | None) -> str:
    return f"signal {-code}" if code is not None and code < 0 else f"status {code}"


def _late(worker: _Worker, options: Options) -> bool:
    return worker.since is not None and time.monotonic() - worker.since > options.seconds + GRACE


def _end(worker: _Worker) -> None:
    worker.process.kill()
    worker.process.join()
    worker.connection.close()


def _no_verdict(target: Target, kind: str, found: str) -> Verdict:
    claim = Claim(kind, kind, False, found, f"{found}\ntry      --time-limit SECONDS, if it only is slow")
    return Verdict(target.source, "", target.core or "", (claim,), kept=False)


# --------------------------------------------------------------------------------------------- in the other process


def _work(connection: Connection, target: Target, options: Options) -> None:
    import signal

    with contextlib.suppress(ValueError):
        signal.signal(signal.SIGINT, signal.SIG_IGN)  # Ctrl-C is for the one who asked; it ends this process
    nowhere = os.open(os.devnull, os.O_RDWR)
    for descriptor in (0, 1, 2):
        os.dup2(nowhere, descriptor)
    opened = _opened_files(os.path.dirname(os.path.abspath(target.source)) + os.sep)
    with contextlib.suppress(BrokenPipeError, ConnectionError):
        verdict = _judged(target, options, lambda text: _tell(connection, options, text))
        if not verdict.kept:
            opened.clear()
        connection.send(("verdict", (verdict.as_json(), sorted(opened))))
    os._exit(0)  # no clean-up code of a reference, nor threads it left, can hold the process


def _tell(connection: Connection, options: Options, text: str) -> None:
    """Say what is about to happen, and see to it that this process does not outlive whoever asked."""
    import faulthandler

    connection.send(("doing", text))
    faulthandler.dump_traceback_later(options.seconds + ABANDONED, exit=True, file=2)


def _judged(target: Target, options: Options, about: Callable[[str], None]) -> Verdict:
    from vliwsim.regression.judge import Judge

    try:
        return Judge(target.source, target.core, options, about).verdict()
    except MemoryError:
        return _no_verdict(target, "reference", "not enough memory on this machine")


def _opened_files(folder: str) -> set[str]:
    """The files that this process opens from now on, but for Python's and the program's own; a growing set.

    Folders below ``folder`` that it lists stand in it with a separator at their end.
    """
    start, beside = os.path.join(os.getcwd(), ""), folder
    kept = [os.path.join(path, "") for path in (str(cache_folder()), os.path.expanduser("~/.cache/vliwsim"))]
    here = os.path.dirname(os.path.dirname(os.path.abspath(__file__))) + os.sep
    data = os.path.join(here, "_data") + os.sep
    own = tuple({os.path.realpath(p) + os.sep for p in (sys.prefix, sys.base_prefix)} | {"/proc/", "/dev/", "/sys/"})
    opened: set[str] = set()

    def hook(event: str, arguments: tuple[Any, ...]) -> None:
        if event in ("os.listdir", "os.scandir") and isinstance(arguments[0], str):
            listed = os.path.join(os.path.abspath(arguments[0]), "")
            if listed.startswith(beside) and listed != beside:
                opened.add(listed.removeprefix(start))
            return
        if event != "open" or not isinstance(arguments[0], (str, bytes)):
            return
        flags = arguments[2] if isinstance(arguments[2], int) else 0
        if flags & (os.O_WRONLY | os.O_RDWR):
            return
        path = os.path.abspath(os.fsdecode(arguments[0]))
        shipped = path.startswith(data)
        if (path.startswith((*own, *kept, here)) and not shipped) or len(opened) > 10_000:
            return
        folder, name = os.path.split(path)
        if os.path.basename(folder) == "__pycache__":  # a compiled module: its source is what counts
            path = os.path.join(os.path.dirname(folder), f"{name.split('.')[0]}.py")
        opened.add(path.removeprefix(start))  # from the working folder where it is below, so that a checkout may move

    sys.addaudithook(hook)
    return opened
