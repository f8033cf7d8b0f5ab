"""What one instruction reads and writes, and when: derived once from the operation, its places and the core.

Used by the machine, the checks and the bounds alike, so that none of them knows operand layouts.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind, Operation, Role
from vliwsim.program.code import Address, Instruction, Mode, Place, Register


class Read(NamedTuple):
    """One register read through a port: ``operand`` is its name in the operation (``base``, ``step`` in an address)."""

    register: int
    operand: str
    crossing: bool


class Write(NamedTuple):
    """One register written ``latency`` beats after issue. ``what``: ``result``, ``sticky``, ``update`` or ``count``.

    ``crossing``: the register is not in the slot's cluster, which no slot can do.
    """

    register: int
    operand: str
    latency: int
    what: str
    crossing: bool


class Effects(NamedTuple):
    """``reads`` by operand place, a pair as two; ``writes`` in operand order, a pair as two, then the base update.

    ``busy``: beats the slot's unit is taken.
    """

    reads: tuple[Read, ...]
    writes: tuple[Write, ...]
    busy: int


Touched = tuple[list[tuple[int, str]], list[tuple[int, str, str]]]
"""(register, operand) of every read, a pair as two; (register, operand, what) of every write, the base update last."""


def touched(operation: Operation, places: Sequence[Place]) -> Touched:
    """The registers an operation reads through ports and writes, in whatever slot it stands."""
    reads: list[tuple[int, str]] = []
    writes: list[tuple[int, str, str]] = []
    base_update: tuple[int, str, str] | None = None
    for operand, place in zip(operation.operands, places, strict=True):
        kind = type(place)
        if kind is Register:
            number, name, role = place.number, operand.name, operand.role  # type: ignore[union-attr]
            registers = (number, number + 1) if operand.pair else (number,)
            if role is not Role.RESULT and role is not Role.STICKY:
                reads += [(r, name) for r in registers]
            if role is Role.RESULT:
                writes += [(r, name, "result") for r in registers]
            elif role is Role.STICKY:
                writes += [(r, name, "sticky") for r in registers]
            elif role is Role.INOUT:
                what = "count" if operation.kind is Kind.BRANCH else "result"
                writes += [(r, name, what) for r in registers]
        elif kind is Address:
            base, step = place.base, place.step  # type: ignore[union-attr]
            reads.append((base, "base"))
            if type(step) is Register:
                reads.append((step.number, "step"))
            if place.mode is not Mode.OFFSET:  # type: ignore[union-attr]
                base_update = (base, "base", "update")
    if base_update:
        writes.append(base_update)
    return reads, writes


def effects(core: Core, instruction: Instruction) -> Effects:
    """The effects of ``instruction`` on ``core``."""
    operation = instruction.operation
    home = core.slot_clusters[instruction.slot]
    clusters = core.register_clusters
    latency = core.latency.of(operation.name, operation.operation_class)
    update = core.latency.of_class("update")
    reads, writes = touched(operation, instruction.places)
    return Effects(
        tuple([Read(register, name, clusters[register] != home) for register, name in reads]),
        tuple(
            [
                Write(r, name, update if what in ("update", "count") else latency, what, clusters[r] != home)
                for r, name, what in writes
            ]
        ),
        core.busy(instruction.slot, operation.name, operation.operation_class),
    )
