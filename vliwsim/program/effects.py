"""What one instruction reads and writes, and when: derived once from the operation, its places and the core.

Used by the machine, the checks and the bounds alike, so that none of them knows operand layouts.
"""

from __future__ import annotations

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind, Role
from vliwsim.program.code import Address, Instruction, Mode, Register


@attrs.frozen
class Read:
    """One register read through a port: ``operand`` is its name in the operation (``base``, ``step`` in an address)."""

    register: int
    operand: str
    crossing: bool


@attrs.frozen
class Write:
    """One register written ``latency`` beats after issue. ``what``: ``result``, ``sticky``, ``update`` or ``count``.

    ``crossing``: the register is not in the slot's cluster, which no slot can do.
    """

    register: int
    operand: str
    latency: int
    what: str
    crossing: bool


@attrs.frozen
class Effects:
    """``reads`` by operand place, a pair as two; ``writes`` in operand order, a pair as two, then the base update.

    ``busy``: beats the slot's unit is taken.
    """

    reads: tuple[Read, ...]
    writes: tuple[Write, ...]
    busy: int


def effects(core: Core, instruction: Instruction) -> Effects:
    """The effects of ``instruction`` on ``core``."""
    operation = instruction.operation
    home = core.slot_clusters[instruction.slot]
    clusters = core.register_clusters
    latency = core.latency.of(operation.name, operation.operation_class)
    update = core.latency.of_class("update")
    reads: list[Read] = []
    writes: list[Write] = []
    base_update: Write | None = None

    def read(register: int, name: str, width: int = 1) -> None:
        reads.extend(Read(r, name, clusters[r] != home) for r in range(register, register + width))

    for operand, place in zip(operation.operands, instruction.places, strict=True):
        width = 2 if operand.pair else 1
        if isinstance(place, Address):
            read(place.base, "base")
            if isinstance(place.step, Register):
                read(place.step.number, "step")
            if place.mode is not Mode.OFFSET:
                base_update = Write(place.base, "base", update, "update", clusters[place.base] != home)
        elif isinstance(place, Register):
            if operand.role not in (Role.RESULT, Role.STICKY):
                read(place.number, operand.name, width)
            if operand.role in (Role.RESULT, Role.INOUT, Role.STICKY):
                counts = operand.role is Role.INOUT and operation.kind is Kind.BRANCH
                what = "count" if counts else "sticky" if operand.role is Role.STICKY else "result"
                writes.extend(
                    Write(r, operand.name, update if counts else latency, what, clusters[r] != home)
                    for r in range(place.number, place.number + width)
                )
    if base_update:
        writes.append(base_update)
    return Effects(tuple(reads), tuple(writes), core.busy(instruction.slot, operation.name, operation.operation_class))
