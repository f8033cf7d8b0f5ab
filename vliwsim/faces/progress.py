"""What a person at a terminal sees of a long run, and how they stop it."""

from __future__ import annotations

import signal
import sys
import time
from types import FrameType, TracebackType
from typing import Any

PATIENCE = 1.0
"""Seconds before a run counts as long."""
EVERY = 0.1
"""Seconds between two things that are shown."""


class Watcher:
    """Shows how far a run is on a terminal's standard error once it takes longer than a second; nothing in a pipe.

    ``unit``: what is counted, ``of`` how many there are. While it is entered the first Ctrl-C asks the run to stop at
    the next look, so that its account so far is whole; the second one stops the program. Call it with how far the run
    is: true means stop.
    """

    def __init__(self, title: str, unit: str = "cycle", of: int | None = None) -> None:
        self.title, self.unit = title, unit
        self.of = "" if of is None else f" of {of:,}"
        self.stopped = False
        self._began = time.monotonic()
        self._shown = 0.0
        self._terminal = sys.stderr.isatty()
        self._status: Any = None
        self._before: Any = None

    def __enter__(self) -> Watcher:
        try:
            self._before = signal.signal(signal.SIGINT, self._stop)
        except ValueError:  # not in the main thread: Ctrl-C does what it did
            self._before = None
        return self

    def _stop(self, number: int, frame: FrameType | None) -> None:
        if self.stopped:
            raise KeyboardInterrupt
        self.stopped = True

    def __call__(self, cycle: int) -> bool:
        if self._terminal:
            now = time.monotonic()
            if now - self._began > PATIENCE and now - self._shown > EVERY:
                self._shown = now
                self._show(cycle)
        return self.stopped

    def _show(self, cycle: int) -> None:
        if self._status is None:
            from rich.console import Console

            self._status = Console(stderr=True).status("")
            self._status.start()
        rate = cycle / (time.monotonic() - self._began)
        self._status.update(
            f"{self.title}: {self.unit} {cycle:,}{self.of}, {rate:,.0f} a second (Ctrl-C for the account so far)"
        )

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._status is not None:
            self._status.stop()
        if self._before is not None:
            signal.signal(signal.SIGINT, self._before)
