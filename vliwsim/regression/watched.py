"""A reference under watch: in time, quiet, and told of when it changes what it was given."""

from __future__ import annotations

import contextlib
import inspect
import io
import os
import signal
import threading
from collections.abc import Callable, Iterator
from types import FrameType
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.reference import Reference


class OverTime(BaseException):
    """Raised inside code that does not end; no ``except Exception`` of that code stops it."""


@contextlib.contextmanager
def time_limit(seconds: float | None) -> Iterator[None]:
    """Raise :class:`OverTime` in what runs longer. Without effect outside the main thread and without an alarm."""
    usable = seconds and hasattr(signal, "setitimer") and threading.current_thread() is threading.main_thread()
    if not usable:
        yield
        return
    assert seconds

    def ring(number: int, frame: FrameType | None) -> None:
        raise OverTime(f"no answer within {seconds:g} s")

    before = signal.signal(signal.SIGALRM, ring)
    signal.setitimer(signal.ITIMER_REAL, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0)
        signal.signal(signal.SIGALRM, before)


@contextlib.contextmanager
def same_folder() -> Iterator[None]:
    """Come back to the working folder, wherever code of others goes."""
    before = os.getcwd()
    try:
        yield
    finally:
        os.chdir(before)


class Watched:
    """Stands for a reference's function: same name, signature and place, but watched.

    ``notes``: what was seen, each thing once. ``about``: called with what is about to run, for whoever waits.
    """

    def __init__(self, function: Callable[..., Any], seconds: float | None, about: Callable[[str], None]) -> None:
        self.function, self.seconds, self.about = function, seconds, about
        self.notes: dict[str, None] = {}
        self.__name__ = getattr(function, "__name__", "reference")
        self.__signature__ = inspect.signature(function)
        self.__code__ = getattr(function, "__code__", None)
        self.__wrapped__ = function

    def __call__(self, *arguments: Any, **named: Any) -> Any:
        kept = {name: value.copy() for name, value in named.items() if isinstance(value, np.ndarray)}
        self.about(f"calling {self.__name__}")
        heard = io.StringIO()
        try:
            with (
                same_folder(),
                time_limit(self.seconds),
                contextlib.redirect_stdout(heard),
                contextlib.redirect_stderr(heard),
            ):
                result = self.function(*arguments, **named)
                if inspect.isgenerator(result):
                    result = tuple(result)
        finally:
            self.about("")
            if text := heard.getvalue().strip():
                first = text.splitlines()[0]
                self.notes[f"{self.__name__} prints: {first[:80]}"] = None
        for name, before in kept.items():
            if named[name].tobytes() != before.tobytes():
                self.notes[f"{self.__name__} changes its input {name} (a copy: nothing is harmed)"] = None
        return result


def watched(
    reference: Reference, seconds: float | None, about: Callable[[str], None] = lambda text: None
) -> tuple[Reference, Callable[[], list[str]]]:
    """The reference with its functions watched, and what gives the notes so far. ``seconds``: the limit of one call."""
    function = Watched(reference.function, seconds, about)
    cases = Watched(_listed(reference.cases), seconds, about) if reference.cases else None
    if cases:
        cases.__code__ = getattr(reference.cases, "__code__", None)

    def notes() -> list[str]:
        return [*function.notes, *(cases.notes if cases else ())]

    return attrs.evolve(reference, function=function, cases=cases), notes


def _listed(cases: Callable[..., Any]) -> Callable[..., Any]:
    """``cases``, its generator run to the end where the time is watched."""

    def listed(*arguments: Any) -> Any:
        result = cases(*arguments)
        return result if hasattr(result, "items") else list(result)

    listed.__signature__ = inspect.signature(cases)  # type: ignore[attr-defined]
    listed.__name__ = "cases"
    return listed
