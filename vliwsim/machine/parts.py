"""Instructions made ready for the machine: effects, operand-file indices and write numbers, known before any run.

A write number stands for one register written by one instruction of the program, so that whatever is in flight knows
where it came from. The operand file is the registers, then the program's constants, then one place for results that go
nowhere.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import attrs

from vliwsim.description.operations import Kind, Operation
from vliwsim.description.values import NOTHING, Undefined, Value
from vliwsim.program.code import Instruction, Mode
from vliwsim.program.effects import Effects, Write

WORD = 0xFFFFFFFF


class WriteSite(NamedTuple):
    """A write number's meaning: ``write`` of instruction ``instruction`` in bundle ``bundle``."""

    bundle: int
    instruction: int
    write: Write


@attrs.frozen
class Input:
    """Where one input of an operation comes from: operand-file index (two for a pair), and the half it reads.

    ``index`` is -1 for what the machine makes itself (a loaded value, a link).
    """

    name: str
    index: int
    pair: bool
    half: int | None


class Reach(NamedTuple):
    """An address operand: operand-file indices of base and step, and how they combine."""

    base: int
    step: int
    mode: Mode
    ring: int
    update: int | None
    """Write number of the updated base."""

    def address(self, base: Value, step: Value) -> Value:
        """The address; undefined where anything it is made of is. ``[base then +step]`` is made of the base alone."""
        return base if self.mode is Mode.AFTER else self._sum(base, step)

    def updated(self, base: Value, step: Value) -> Value:
        """What the base becomes."""
        moved = self._sum(base, step)
        if self.ring and isinstance(moved, int):
            assert isinstance(base, int)
            return base & ~(self.ring - 1) & WORD | moved & (self.ring - 1)
        return moved

    @staticmethod
    def _sum(base: Value, step: Value) -> Value:
        if isinstance(base, Undefined) or isinstance(step, Undefined):
            return NOTHING
        return (base + step) & WORD


class Part(NamedTuple):
    """One instruction, prepared.

    ``numbers``: the write number of each of the effects' writes. ``results``: for every output that is a register, its
    write numbers (two for a pair).

    ``target``: bundle index a direct branch goes to (None: nowhere), or for an indirect one the operand-file index in
    ``target_register``, and in ``targets`` the only byte addresses it may go to, None where the source names none.
    ``link``: the link value of a call, None where no word begins there.
    """

    instruction: Instruction
    effects: Effects
    inputs: tuple[Input, ...]
    numbers: range
    results: tuple[tuple[int, ...], ...]
    reach: Reach | None
    target: int | None
    target_register: int | None
    targets: frozenset[int] | None
    link: int | None

    @property
    def function(self) -> Callable[..., object]:
        """The operation's fast function for these operands, compiled when first asked for."""
        return self.operation.compiled(self.halves)

    @property
    def operation(self) -> Operation:
        return self.instruction.operation

    @property
    def halves(self) -> tuple[int | None, ...]:
        return tuple(i.half for i in self.inputs)

    @property
    def uses_link(self) -> bool:
        return "link" in self.operation.inputs

    @property
    def branches(self) -> bool:
        return self.operation.kind is Kind.BRANCH
