"""The complete state of a machine between two cycles, and its snapshots."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

from vliwsim.description.core import Core
from vliwsim.description.values import NOTHING, Value
from vliwsim.machine.memory import Memory

CAUSES = ("bank", "wait", "straddle", "penalty", "hold", "fresh", "interrupt")
"""Why cycles pass without a bundle, in the order of the account."""

NEVER = -(1 << 62)

Batch = tuple[tuple[int, ...], Sequence[Value]]
"""Results of one bundle that land together: write numbers (see :mod:`vliwsim.machine.prepared`) and their values."""


class NoteSite(NamedTuple):
    """Where a note belongs: its name, the instruction of the program it speaks of, and the register if it names one."""

    name: str
    bundle: int
    instruction: int
    register: int | None = None


class State:
    """Everything a run can change.

    Counters: ``cycle`` always advances, ``beat`` except in a freeze, ``issue`` with every bundle.

    ``at`` is the index of the next bundle and ``within`` the beats already spent in it if it is an idle word.
    ``operands`` are the registers, then the program's constants, then one place for results that go nowhere.
    ``flight`` maps a landing beat to its batches; ``redirects`` the issue index a taken branch lands at to the bundle
    index it goes to (None where nothing is). ``counts``: of every bundle, the beats it issued in; ``begun``: how often
    its first beat did, since a branch may cut an idle word short. ``ready`` is each register's latest landing beat,
    kept only for cores that ask. ``frozen`` are freeze cycles not yet passed, as [cause, cycles] in order.
    """

    def __init__(self, core: Core, bundles: int, operands: list[Value], memory: Memory) -> None:
        self.cycle = self.beat = self.issue = 0
        self.at = self.within = 0
        self.operands = operands
        self.memory = memory
        self.flight: dict[int, list[Batch]] = {}
        self.landed: frozenset[int] = frozenset()
        self.redirects: dict[int, int | None] = {}
        self.last_branch = NEVER
        self.busy_until = [0] * len(core.slots)
        self.ready = [NEVER] * len(core.register_names)
        self.waited_fresh = False
        self.service = 0
        self.interrupt_at: int | None = None
        self.frozen: list[list[str | int]] = []
        self.stalls = dict.fromkeys(CAUSES, 0)
        self.counts = [0] * bundles
        self.begun = [0] * bundles
        self.notes: dict[NoteSite, int] = {}
        self.halt_beat: int | None = None
        self.drain = 0

    def registers(self, core: Core) -> list[Value]:
        """The registers' values, by number."""
        return self.operands[: len(core.register_names)]

    @property
    def in_flight(self) -> int | None:
        """The beat of the latest landing still to come, None if nothing is in flight."""
        return max(self.flight, default=None)

    @property
    def finished(self) -> bool:
        """Whether ``halt`` has issued and nothing is to come: no freeze cycle, no landing."""
        return self.halt_beat is not None and not self.frozen and not self.flight

    def save(self) -> dict[str, object]:
        """A complete snapshot; it shares nothing that a run changes and can be restored any number of times."""
        kept = {name: _copied(value) for name, value in vars(self).items() if name != "memory"}
        return kept | {"memory": self.memory.save()}

    def restore(self, saved: dict[str, object]) -> None:
        """Become the state that :meth:`save` took, of the same machine."""
        for name, value in saved.items():
            if name == "memory":
                self.memory.restore(value)  # type: ignore[arg-type]
            else:
                setattr(self, name, _copied(value))


def _copied(value: object) -> object:
    """A copy as deep as a run changes things: batches and values are never changed once made."""
    if isinstance(value, list):
        return [list(v) if isinstance(v, list) else v for v in value]
    if isinstance(value, dict):
        return {k: list(v) if isinstance(v, list) else v for k, v in value.items()}
    return value


def fresh_operands(core: Core, registers: dict[int, Value], constants: Sequence[int]) -> list[Value]:
    """The operand file at the start: undefined registers but those given, zero registers 0, then the constants."""
    operands: list[Value] = [NOTHING] * len(core.register_names)
    for number, value in registers.items():
        operands[number] = value
    for name in core.zero_registers:
        operands[core.register_numbers[name]] = 0
    return [*operands, *constants, NOTHING]
