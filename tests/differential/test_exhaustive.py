"""Every program of a tiny machine: two registers, latencies to 3, four bundles, the last of them a halt."""

from __future__ import annotations

from itertools import product

import pytest

from .compare import differences
from .generator import Trial
from .plain import Imm, PlainBundle, PlainCluster, PlainCore, PlainGuard, PlainOperation, PlainSlot, Reg, Value

CLASSES = ("arithmetic", "multiply", "divide", "shift", "control")
SLOTS = (PlainSlot("g.one", 0, CLASSES), PlainSlot("g.two", 0, CLASSES, busy={"divide": 2}))


def two(name: str, cls: str, d: int, guard: PlainGuard | None = None, slot: int = 0) -> PlainOperation:
    return PlainOperation(name, cls, slot, {"d": Reg(d), "a": Reg(0), "b": Reg(1)}, guard)


def to(name: str, target: int, guard: PlainGuard | None = None) -> PlainOperation:
    counted = {"r": Reg(1)} if name == "count" else {}
    return PlainOperation(name, "control", 0, {**counted, "to": Imm(8 * target)}, guard)


ON, OFF = PlainGuard(1), PlainGuard(1, True)
ALPHABET: tuple[tuple[PlainOperation, ...], ...] = (
    (),
    (two("add", "arithmetic", 0),),
    (two("add", "arithmetic", 1, OFF), two("mul", "multiply", 0, slot=1)),
    (two("mul", "multiply", 1, ON),),
    (two("mul", "multiply", 0), two("div", "divide", 1, slot=1)),
    (two("div", "divide", 0, slot=1),),
    (to("jump", 2, ON),),
    (to("count", 0), two("sub", "arithmetic", 0, ON, slot=1)),
    (to("count", 3),),
    (PlainOperation("halt", "control", 0, {}, OFF), two("add", "arithmetic", 1, slot=1)),
)
HALT = (PlainOperation("halt", "control", 0, {}),)


def cores() -> list[PlainCore]:
    return [
        PlainCore(
            (PlainCluster("g", 2, read, write),), SLOTS,
            latency_classes={"multiply": multiply, "divide": 2, "update": update},
            guards=frozenset({0, 1}), branch_latency=branch, branch_overlap=overlap, taken_penalty=branch % 2,
            interlocked=interlocked, early=early, memory_size=64,
        )
        for interlocked, early in ((True, "old"), (False, "old"), (False, "reject"))
        for branch, multiply, update, overlap, read, write in (
            (1, 3, 1, True, 2, 2), (2, 2, 2, True, 2, 1), (3, 3, 3, False, 2, 2), (2, 1, 1, True, 1, 2),
        )
    ]  # fmt: skip


@pytest.mark.parametrize(
    "core", cores(), ids=lambda c: f"{'interlocked' if c.interlocked else c.early}-{c.branch_latency}"
)
def test_every_program(core: PlainCore) -> None:
    wrong = []
    for bundles in product(ALPHABET, repeat=3):
        program = tuple(PlainBundle(8 * k, k, written) for k, written in enumerate((*bundles, HALT)))
        for start in (0, 2):
            made = Trial(core, program, {0: Value(3), 1: Value(start)}, (), None, 40)
            wrong += differences(made, "hot loop")
    assert wrong == []
