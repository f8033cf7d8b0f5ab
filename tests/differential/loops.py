"""Programs shaped like kernels: a prologue, a loop of some passes, an epilogue; legal for long, and then perhaps not.

:func:`tests.differential.generator.trial` draws bundles freely, and most of its programs end within ten cycles. Here
the loop closes by construction, whatever its length and the branch's latency; what the bundles do is drawn by the same
writer, and what the model finds illegal in the first passes is taken out again. Armed operations, off until a counter
has run down or a given number is reached, bring hazards late.
"""

from __future__ import annotations

from dataclasses import replace
from random import Random

from . import model
from .generator import Trial, Writer, a_core, a_slot
from .plain import (
    Imm,
    PlainBundle,
    PlainCore,
    PlainGuard,
    PlainOperation,
    PlainRegion,
    Reg,
    Value,
)

SPACE = 64
"""Bytes from one bundle to the next."""
ROUNDS = 10
"""Times at most that something illegal is taken out."""


def loop_trials(r: Random, inputs: int = 2) -> list[Trial]:
    """One program, and some data for it."""
    core = a_roomy_core(r)
    return Kernel(r, core, some_regions(r, core)).trials(inputs)


def a_roomy_core(r: Random) -> PlainCore:
    """A core on which most of what is drawn is legal."""
    core = a_core(r)
    clusters = tuple(
        replace(
            c,
            registers=r.choice((8, 12)),
            read_ports=r.choice((8, 12, 16)),
            write_ports=r.choice((3, 4, 8)),
        )
        for c in core.clusters[: r.choice((1, 2, 3))]
    )
    slots = [slot for slot in core.slots if slot.cluster < len(clusters)][:6]
    slots += [a_slot(r, r.randrange(len(clusters))) for _ in range(r.choice((3, 4, 5)) - len(slots))]
    slots.sort(key=lambda slot: slot.cluster)
    if r.random() < 0.7:
        slots = [replace(slot, busy={}) for slot in slots]
    if not any("control" in slot.classes for slot in slots):
        slots[0] = replace(slots[0], classes=(*slots[0].classes, "control"))
    links = tuple(link for link in core.links if max(link.source, link.reader) < len(clusters))
    total = sum(c.registers for c in clusters)
    return replace(
        core, clusters=clusters, slots=tuple(slots), links=links, memory_size=1024,
        guards=frozenset(k for k in range(total) if r.random() < 0.8),
        zero_registers=frozenset(k for k in core.zero_registers if k < total),
        branch_latency=r.choice((1, 1, 2, 3, 4)),
        early="old" if r.random() < 0.7 else core.early,
        conflict="stall" if r.random() < 0.9 else "reject",
        misaligned=r.choice(("reject", "split")),
    )  # fmt: skip


def some_regions(r: Random, core: PlainCore) -> tuple[PlainRegion, ...]:
    """Arrays big enough for some passes; mostly defined."""
    regions, start = [], 8 * r.randrange(3)
    rare = r.choice((0, 0, 0, 0.01, 0.1))
    while start < core.memory_size - 100 and len(regions) < 3:
        size = min(r.choice((64, 128, 250, 320)), core.memory_size - start)
        over = min(r.choice((0, 0, 4, 16, 9)), core.memory_size - start - size)
        content = tuple(None if rare and r.random() < rare else r.randrange(256) for _ in range(size))
        regions.append(PlainRegion(start, size, over, content))
        start += size + over + r.choice((0, 0, 3, 16))
        start += -start % 8
    return tuple(regions)


class Kernel(Writer):
    """Writes one such program."""

    def __init__(self, r: Random, core: PlainCore, regions: tuple[PlainRegion, ...]) -> None:
        super().__init__(r, core, regions)
        self.wild = False
        self.hot = r.random() < 0.7
        self.body = r.choice((1, 1, 2, 2, 3, 4, 6))
        overlap = core.branch_overlap or self.body >= core.branch_latency
        if not overlap:
            self.body = core.branch_latency
        self.before = max(0, core.branch_latency - self.body) + r.choice((0, 1, 2))
        self.size = self.before + self.body + r.choice((1, 2, 3))
        self.shape = [1] * self.size
        self.addresses = [SPACE * (k + 1) for k in range(self.size)]
        self.control = r.choice([k for k, slot in enumerate(core.slots) if "control" in slot.classes])
        home = core.slots[self.control].cluster
        first, registers = self.first[home], self.core.clusters[home].registers
        free = [k for k in range(first, first + registers) if k not in core.zero_registers]
        self.counter, self.watch = r.sample(free, 2)
        """The loop's counter, and another register that is counted down in the loop."""
        self.kept = {self.counter, self.watch}
        self.pointers = [p for p in self.pointers if p not in self.kept] or [free[0]]

    # ------------------------------------------------------------------------------------------------------ the shape

    def trials(self, inputs: int) -> list[Trial]:
        bundles: list[list[PlainOperation]] = [self.filling(k) for k in range(self.size)]
        for k in self.closing():
            bundles[k] = self.with_operation(bundles[k], self.branch())
        self.count_down(bundles)
        if self.r.random() < 0.8:
            self.arm(bundles)
        bundles[-1] = self.with_operation(bundles[-1], PlainOperation("halt", "control", self.control))
        data = [self.data(k) for k in range(inputs)]
        made = self.repaired([tuple(bundle) for bundle in bundles], data[0])
        return [replace(one, program=made) for one in data]

    def closing(self) -> list[int]:
        """The bundles whose branch leads back to the body's first: in the body, and before it for the first passes."""
        latency, body = self.core.branch_latency, self.body
        inside = self.before + -latency % body
        ahead = [self.before + body * k - latency for k in range(1, latency // body + 2)]
        return [inside, *(k for k in ahead if 0 <= k < self.before)]

    def branch(self) -> PlainOperation:
        """Back to the body while the counter is not 0."""
        target = Imm(self.addresses[self.before])
        return PlainOperation("count", "control", self.control, {"r": Reg(self.counter), "to": target})

    def with_operation(self, bundle: list[PlainOperation], operation: PlainOperation) -> list[PlainOperation]:
        return sorted([o for o in bundle if o.slot != operation.slot] + [operation], key=lambda o: o.slot)

    def filling(self, k: int) -> list[PlainOperation]:
        inside = self.before <= k < self.before + self.body
        if self.r.random() < (0.05 if inside else 0.4):
            return []
        drawn: list[PlainOperation] = []
        for _ in range(2 if inside else 1):
            taken = {o.slot for o in drawn}
            drawn += [
                o for o in self.bundle(last=False) if o.name != "halt" and o.slot not in taken and self.harmless(o)
            ]
        return sorted(drawn[: self.r.choice((2, 3, 4))], key=lambda o: o.slot)

    def harmless(self, operation: PlainOperation) -> bool:
        """Whether it leaves the loop's course alone; one in some that does not is kept."""
        if operation.cls == "control":
            return self.r.random() < 0.06
        written = {p.number for n, p in operation.operands.items() if isinstance(p, Reg) and n in ("d", "acc", "f")}
        return not written & (self.kept)

    def count_down(self, bundles: list[list[PlainOperation]]) -> None:
        """The watched register goes down by one a pass, where a slot can do that."""
        able = [
            k for k, slot in enumerate(self.core.slots)
            if slot.cluster == self.core.slots[self.control].cluster and "arithmetic" in slot.classes
        ]  # fmt: skip
        if able:
            operands = {"d": Reg(self.watch), "a": Reg(self.watch), "b": Imm(0xFFFFFFFF)}
            slot, k = self.r.choice(able), self.before + self.r.randrange(self.body)
            if all(o.slot != slot or o.cls != "control" for o in bundles[k]):
                bundles[k] = self.with_operation(bundles[k], PlainOperation("add", "arithmetic", slot, operands))

    def arm(self, bundles: list[list[PlainOperation]]) -> None:
        """Operations that are off until the watched register is 0."""
        if self.watch not in self.core.guards:
            return
        for _ in range(self.r.choice((2, 3, 5))):
            k = self.before + self.r.randrange(self.body)
            slot = self.r.randrange(len(self.core.slots))
            if any(o.slot == slot and o.operands.get("r") == Reg(self.counter) for o in bundles[k]):
                continue
            for operation in self.bundle(last=False):
                if operation.slot == slot:
                    armed = replace(operation, guard=PlainGuard(self.watch, True))
                    bundles[k] = self.with_operation(bundles[k], armed)

    # ------------------------------------------------------------------------------------------------------- the data

    def data(self, k: int) -> Trial:
        r = self.r
        registers = self.registers()
        if r.random() < 0.7:
            registers = {n: v if not v.unknown else Value(r.getrandbits(32)) for n, v in registers.items()}
        passes, limit = r.choice((3, 6, 20, 25, 40)), 400
        if r.random() < 0.02:
            passes, limit = r.choice((300, 5_000)), 20_000
        registers[self.counter] = Value(passes)
        registers[self.watch] = Value(r.choice((2, 5, 9, 19, 30, 1000)))
        regions = self.regions
        if k:
            regions = tuple(replace(g, content=tuple(reversed(g.content))) for g in regions)
        interrupt = r.randrange(60) if r.random() < 0.15 else None
        return Trial(self.core, (), registers, regions, interrupt, limit)

    def repaired(self, bundles: list[tuple[PlainOperation, ...]], data: Trial) -> tuple[PlainBundle, ...]:
        """The program, without what the model finds illegal in the first passes."""
        r = self.r
        straddles = [r.random() < 0.2 for _ in bundles]
        enough = self.before + 4 * self.body + 4
        quiet = dict(data.registers)
        quiet[self.counter] = Value(3)
        quiet[self.watch] = Value(1000)

        def program() -> tuple[PlainBundle, ...]:
            return tuple(
                PlainBundle(self.addresses[k], k, operations, 1, straddles[k]) for k, operations in enumerate(bundles)
            )

        for _ in range(ROUNDS):
            end = model.run(self.core, program(), quiet, data.regions, limit=3 * enough)
            if end.hazard is None:
                break
            at = end.hazard.bundle
            own = [o for o in bundles[at] if o.name not in ("count", "halt")]
            if not own:
                at = r.randrange(len(bundles))
                own = [o for o in bundles[at] if o.name not in ("count", "halt")]
            if own:
                gone = r.choice(own)
                bundles[at] = tuple(o for o in bundles[at] if o is not gone)
        return program()
