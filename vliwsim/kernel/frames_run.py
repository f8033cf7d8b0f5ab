"""What a recording that was run frame by frame showed."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property

import attrs
import numpy as np

from vliwsim.kernel.account import Account
from vliwsim.kernel.binding import Setup
from vliwsim.kernel.compare import Difference
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.recording import Signal
from vliwsim.kernel.tallies import Tally
from vliwsim.problems import Problem
from vliwsim.program.kernel import Kernel


@attrs.frozen(eq=False)
class FramesRun:
    """A kernel run on ``wanted`` frames of a recording, of which ``frames`` were carried out whole.

    ``reason``: how it ended (``halt``: all of them; ``hazard``, ``limit``, ``undefined``: in frame number ``frames``;
    ``stopped``). ``account``: of all whole frames together, its budget the sum of theirs. ``passed`` and ``allowed``:
    cycles of each frame, and its budget (None where there is none); ``over``: frames that took more, ``first_over`` the
    first of them. ``outputs`` by name: arrays that the kernel returns one behind the
    other, values an entry a frame, ``changes`` what each frame left, a row each; empty where they were given away.
    ``wrong``: frames that differ from the reference, None where nothing was compared. ``differences``: for each output
    that ever does, the first frame that does and its first difference. ``signals``: how the arrays were cut.
    ``diagnostics``: what ended it, then notes.
    """

    kernel: Kernel
    setup: Setup
    wanted: int
    reason: str
    account: Account
    passed: Tally
    allowed: Tally | None
    over: int
    first_over: int | None
    outputs: Mapping[str, np.ndarray]
    wrong: int | None
    differences: Mapping[str, tuple[int, Difference]]
    signals: tuple[Signal, ...]
    diagnostics: tuple[Problem, ...]

    @property
    def frames(self) -> int:
        return self.passed.count

    @cached_property
    def cycles(self) -> np.ndarray:
        """Of each frame."""
        return self.passed.array()

    @cached_property
    def budgets(self) -> np.ndarray | None:
        """Of each frame; None where there is no budget."""
        return None if self.allowed is None else self.allowed.array()

    @property
    def first_wrong(self) -> int | None:
        """Number of the first frame that is wrong."""
        return min((frame for frame, _ in self.differences.values()), default=None)

    @property
    def legal(self) -> bool:
        return not any(p.kind == "illegal" for p in self.diagnostics)

    @property
    def matches(self) -> bool | None:
        """Do all outputs of all frames match the reference; None where nothing was compared or it was stopped."""
        if self.wrong:
            return False
        return None if self.wrong is None or self.reason == "stopped" else self.reason == "halt"

    @property
    def ok(self) -> bool:
        """All frames finished, legal, not wrong, not over budget."""
        return self.reason == "halt" and self.legal and self.matches is not False and not self.over

    @property
    def notes(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.diagnostics if p.kind == "note")

    @property
    def problems(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.diagnostics if p.kind != "note")

    @property
    def sizes(self) -> Mapping[str, int]:
        return self.setup.sizes

    @property
    def title(self) -> str:
        sizes = (f"{name} = {value}" for name, value in self.sizes.items())
        return ", ".join([f"{self.kernel.name} on {self.kernel.core.name}", *sizes, many(self.wanted, "frame")])

    @property
    def verdict(self) -> str:
        """One sentence: which frames, and whether they are right, legal and on budget."""
        return f"{self.title}: {self._judgement()}."

    def _judgement(self) -> str:
        said = []
        if self.reason == "stopped":
            said.append(f"stopped after {many(self.frames, 'frame')}")
        elif self.reason == "limit":
            said.append(f"frame {self.frames} not finished")
        elif self.reason != "halt":
            what = "illegal" if self.reason == "hazard" else "undefined output"
            said.append(f"{what} in frame {self.frames}")
        if self.wrong:
            said.append(f"{self.wrong} wrong")
        elif self.wrong is None:
            said.append("not compared")
        elif self.frames:
            said.append("right" if self.reason == "halt" else "right until then")
        if self.reason == "halt":
            said.append("legal")
        return ", ".join([*said, *self._budget_words()])

    def _budget_words(self) -> list[str]:
        if self.allowed is None or not self.frames:
            return []
        if self.over:
            return [f"{self.over} over budget"]
        spare = int(self.allowed.spread[0] - self.passed.spread[2])  # at least
        return [f"at least {many(spare, 'cycle')} under budget" if spare > 0 else "on budget"]

    @property
    def spread(self) -> dict[str, float]:
        """Least, median and greatest number of cycles a frame took; empty where none ran."""
        if not self.frames:
            return {}
        low, median, high = self.passed.spread
        return {"minimum": low, "median": int(median) if float(median).is_integer() else median, "maximum": high}

    def as_json(self) -> dict[str, object]:
        """Plain JSON data, in the shape of ``run --json`` and with ``frames`` beside it."""
        account, halted = self.account, self.reason == "halt"
        return {
            "kernel": self.kernel.name,
            "core": self.kernel.core.name,
            "sizes": dict(self.sizes),
            "case": None,
            "cycles": account.cycles,
            "bundles": account.bundles,
            "stalls": dict(account.stalls),
            "drain": account.drain,
            "budget": account.budget,
            "within_budget": not self.over if halted and self.allowed is not None else None,
            "code_bytes": account.code_bytes,
            "matches": self.matches,
            "outputs": {name: self._output_json(name) for name in interface_of(self.kernel).outputs},
            "diagnostics": [p.as_json() for p in self.diagnostics],
            "frames": {
                "wanted": self.wanted,
                "done": self.frames,
                "reason": self.reason,
                "cycles": self.spread or None,
                "wrong": self.wrong,
                "first_wrong": self.first_wrong,
                "over_budget": self.over,
                "first_over_budget": self.first_over,
                "signals": {s.name: self._signal_json(s) for s in self.signals},
            },
        }

    def _signal_json(self, signal: Signal) -> dict[str, int]:
        rest = signal.rest(self.wanted)
        cut = {"samples": len(signal.samples), "length": signal.length, "hop": signal.hop, "lead": signal.lead}
        return cut | {"left_out": max(0, rest), "zeros_behind": max(0, -rest)}

    def _output_json(self, name: str) -> dict[str, object]:
        if name in self.differences:
            frame, difference = self.differences[name]
            return {"matches": False, "first_difference": {"frame": frame, **difference.as_json()}}
        compared = self.wrong is not None and self.reason == "halt"
        return {"matches": True if compared else None, "first_difference": None}

    def __repr__(self) -> str:
        return f"<{self.verdict[:-1]}; {self.account.cycles} cycles>"


def many(count: int, what: str) -> str:
    return f"{count:,} {what}{'' if count == 1 else 's'}"
