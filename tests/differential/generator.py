"""Random cores and programs for the differential tests: mostly legal, on purpose not always.

Everything is drawn from one ``random.Random``, so that Hypothesis can steer it and a seed can repeat it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from random import Random

from vliwsim.description.operations import Operand, Role

from .meanings import MEANINGS
from .plain import (
    UNDEFINED,
    Addr,
    Imm,
    PlainBundle,
    PlainCluster,
    PlainCore,
    PlainGuard,
    PlainLink,
    PlainOperation,
    PlainRegion,
    PlainSlot,
    PlainWait,
    Reg,
    Value,
)
from .real import operations

NAMES = tuple(name for name in MEANINGS if name in operations().by_name)
BY_CLASS: dict[str, list[str]] = {}
for _name in NAMES:
    BY_CLASS.setdefault(operations().by_name[_name].operation_class, []).append(_name)
CLASSES = tuple(sorted(BY_CLASS))
CORNERS = (0, 1, 2, 4, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 0x8000, 0x7FFF7FFF, 0x80008000)
WORD_BYTES = 8


@dataclass(frozen=True)
class Trial:
    """One machine and program to run, with everything a run takes."""

    core: PlainCore
    program: tuple[PlainBundle, ...]
    registers: dict[int, Value]
    regions: tuple[PlainRegion, ...]
    interrupt_at: int | None
    limit: int


def trial(r: Random) -> Trial:
    """A core, a program for it, and its data."""
    core = a_core(r)
    regions = some_regions(r, core)
    return Writer(r, core, regions).trial()


def a_core(r: Random) -> PlainCore:
    clusters = tuple(
        PlainCluster("ghi"[k], r.choice((4, 6, 8)), r.choice((4, 6, 8, 12, 16)), r.choice((1, 2, 3, 4, 6, 8)))
        for k in range(r.choice((1, 1, 2, 2, 3)))
    )
    slots = []
    for k in range(len(clusters)):
        slots += [a_slot(r, k) for _ in range(r.choice((1, 2, 3, 4)))]
    control = r.randrange(len(slots))
    slots[control] = PlainSlot(
        slots[control].name, slots[control].cluster, tuple(sorted({*slots[control].classes, "control"})),
        slots[control].crossing, slots[control].busy,
    )  # fmt: skip
    total = sum(c.registers for c in clusters)
    links = tuple(
        PlainLink(a, b, r.choice((1, 2, 3)), r.random() < 0.5, r.choice(("ok", "stall", "stall", "reject")))
        for a in range(len(clusters))
        for b in range(len(clusters))
        if a != b and r.random() < 0.7
    )
    interlocked = r.random() < 0.45
    return PlainCore(
        clusters, tuple(slots), links,
        latency_classes={c: r.choice((1, 1, 2, 3, 5)) for c in (*CLASSES, "update") if r.random() < 0.6},
        latency_operations={n: r.choice((1, 2, 4)) for n in r.sample(NAMES, 2)},
        guards=frozenset(k for k in range(total) if r.random() < 0.5),
        zero_registers=frozenset([r.randrange(total)] if r.random() < 0.1 else []),
        branch_latency=r.choice((1, 2, 3, 4, 5)),
        branch_overlap=r.random() < 0.8,
        taken_penalty=r.choice((0, 0, 1, 3)),
        interlocked=interlocked,
        early=r.choice(("old", "old", "old", "warn", "reject")),
        memory_size=256,
        endianness=r.choice(("little", "big")),
        banks=r.choice((1, 2, 3, 4)),
        bank_width=r.choice((1, 2, 4, 8)),
        broadcast=r.random() < 0.4,
        conflict="stall" if r.random() < 0.85 else "reject",
        misaligned="reject" if r.random() < 0.6 else "split",
        waits=(PlainWait(r.choice((0, 66, 100)), r.choice((2, 40)), r.choice((1, 2))),) if r.random() < 0.4 else (),
        straddle_freeze=r.choice((0, 1, 2)),
        service=r.choice((0, 1, 5)),
    )  # fmt: skip


def a_slot(r: Random, cluster: int) -> PlainSlot:
    classes = tuple(c for c in CLASSES if r.random() < 0.55) or ("arithmetic",)
    crossing = tuple(name for name in ("a", "b", "c", "base", "step", "to") if r.random() < 0.6)
    busy = {c: r.choice((2, 3, 6)) for c in classes if r.random() < 0.06}
    return PlainSlot(f"s{cluster}", cluster, classes, crossing, busy)


def some_regions(r: Random, core: PlainCore) -> tuple[PlainRegion, ...]:
    regions, start = [], 8 * r.randrange(3)
    while start < core.memory_size - 40 and len(regions) < 3:
        size, over = r.choice((16, 30, 64, 128)), r.choice((0, 4, 16, 9))
        size = min(size, core.memory_size - start)
        over = min(over, core.memory_size - start - size)  # nothing lies beyond memory
        content = tuple(None if r.random() < 0.05 else r.randrange(256) for _ in range(size))
        regions.append(PlainRegion(start, size, over, content))
        start += size + over + r.choice((0, 3, 16))
        start += -start % 8 if r.random() < 0.7 else 0
    return tuple(regions)


class Writer:
    """Writes one program for a core and its regions."""

    def __init__(self, r: Random, core: PlainCore, regions: tuple[PlainRegion, ...]) -> None:
        self.r, self.core, self.regions = r, core, regions
        self.first = [sum(c.registers for c in core.clusters[:k]) for k in range(len(core.clusters) + 1)]
        self.wild = r.random() < 0.15
        """Whether to break static rules now and then."""
        self.size = r.choice((3, 5, 8, 12))
        self.pointers = [self.register(k) for k in range(len(core.clusters)) for _ in range(2)]
        self.hot = r.random() < 0.5
        """Whether guards and branches are rare."""
        self.shape = [1 if r.random() < 0.8 else r.choice((2, 3, 7)) for _ in range(self.size)]
        self.addresses = [WORD_BYTES * (k * 3 + 1) for k in range(self.size)]

    def trial(self) -> Trial:
        r, bundles, position = self.r, [], 0
        for k in range(self.size):
            written = self.bundle(last=k == self.size - 1)
            beats = self.shape[k] if not written else 1
            bundles.append(PlainBundle(self.addresses[k], position, written, beats, r.random() < 0.2))
            position += beats
        interrupt = r.randrange(30) if r.random() < 0.3 else None
        registers, limit = self.registers(), r.choice((60, 200))
        if any(indirect(o) is not None for bundle in bundles for o in bundle.operations):
            bundles = self.with_targets(bundles, registers)
        return Trial(self.core, tuple(bundles), registers, self.regions, interrupt, limit)

    def with_targets(self, bundles: list[PlainBundle], registers: dict[int, Value]) -> list[PlainBundle]:
        """Some of the branches to registers name places; some of the registers, and constants, are places."""
        r = self.r
        named: list[PlainBundle] = []
        used: set[int] = set()
        for bundle in bundles:
            operations = list(bundle.operations)
            for k, operation in enumerate(operations):
                register = indirect(operation)
                if register is not None and r.random() < 0.6:
                    places = tuple(sorted(r.sample(self.addresses, r.choice((1, 2, min(3, self.size))))))
                    operations[k] = replace(operation, targets=places)
                    used.add(register)
            named.append(replace(bundle, operations=tuple(operations)))
        for register in sorted(used):
            if r.random() < 0.7:
                registers[register] = Value(r.choice(self.addresses))
        return [replace(b, operations=tuple(self.with_address(o, used) for o in b.operations)) for b in named]

    def with_address(self, operation: PlainOperation, used: set[int]) -> PlainOperation:
        """A constant for a register that branches go by becomes a place."""
        place = operation.operands.get("d")
        if operation.name != "li" or not isinstance(place, Reg) or place.number not in used:
            return operation
        return replace(operation, operands={**operation.operands, "n": Imm(self.r.choice(self.addresses))})

    def registers(self) -> dict[int, Value]:
        r, given = self.r, {}
        for number in range(self.first[-1]):
            if r.random() < 0.97:
                given[number] = Value(r.choice((r.randrange(6), r.choice(CORNERS), r.getrandbits(32))))
            elif r.random() < 0.5:
                given[number] = UNDEFINED
            else:
                given[number] = Value(0x1200, 0b1101)
        for number in self.pointers:
            region = r.choice(self.regions)
            given[number] = Value((region.start + 7 & ~7) + 8 * r.randrange(max(1, region.size // 8 - 1)))
        return given

    def register(self, cluster: int) -> int:
        return self.first[cluster] + self.r.randrange(self.core.clusters[cluster].registers)

    def bundle(self, last: bool) -> tuple[PlainOperation, ...]:
        r, written = self.r, []
        if not last and r.random() < 0.15:
            return ()
        named: set[int] = set()
        slots = [k for k in range(len(self.core.slots)) if r.random() < 0.6]
        if last:
            control = [k for k, s in enumerate(self.core.slots) if "control" in s.classes]
            slots = sorted({*slots, control[0]})
        for slot in slots:
            names = BY_CLASS.get(r.choice(self.core.slots[slot].classes), [])
            if self.wild and r.random() < 0.1:
                names = list(NAMES)
            name = r.choice(names) if names else "add"
            if last and slot == slots[0] and "control" in self.core.slots[slot].classes and r.random() < 0.9:
                name = "halt"
            if name == "halt" and not last and r.random() < 0.8:
                name = "count"
            if not self.wild and operations().by_name[name].operation_class not in self.core.slots[slot].classes:
                continue
            operation = self.operation(name, slot, named)
            if operation:
                written.append(operation)
        if self.wild and written and r.random() < 0.05:
            written.append(written[0])
        if self.wild:
            r.shuffle(written)
        return tuple(written)

    def operation(self, name: str, slot: int, named: set[int]) -> PlainOperation | None:
        r, row = self.r, operations().by_name[name]
        home = self.core.slots[slot].cluster
        operands: dict[str, Reg | Imm | Addr] = {}
        immediate_free = True
        own: set[int] = set()
        for operand in row.operands:
            if operand.role is Role.ADDRESS:
                address = self.address(slot, home, not immediate_free)
                operands["at"] = address
                immediate_free &= isinstance(address.step, Reg)
                if address.mode != "offset":
                    own.add(address.base)
            elif operand.role is Role.TARGET:
                direct = name in ("count",) or r.random() < 0.9
                operands["to"] = Imm(r.choice([*self.addresses, 5 if r.random() < 0.1 else self.addresses[0]]))
                if not direct and immediate_free:
                    operands["to"] = Reg(self.source(slot, home, "to"))
                immediate_free = False
            elif operand.role is Role.CONSTANT:
                operands[operand.name] = Imm(r.choice((*CORNERS[:4], r.getrandbits(32))) & const_mask(operand))
                immediate_free = False
            elif operand.role is Role.SOURCE and immediate_free and not operand.pair and r.random() < 0.15:
                operands[operand.name] = Imm(r.getrandbits(16 if operand.half else 32))
                immediate_free = False
            elif operand.role is Role.SOURCE:
                operands[operand.name] = self.place(operand, self.source(slot, home, operand.name))
            else:
                number = self.register(home if not self.wild or r.random() < 0.9 else 0)
                if number in self.pointers and r.random() < 0.9:
                    return None
                place = self.place(operand, number)
                operands[operand.name] = place
                own |= {place.number, place.number + 1} if operand.pair else {place.number}
        results = [o for o in row.operands if o.role in (Role.RESULT, Role.INOUT, Role.STICKY)]
        expected = sum(2 if o.pair else 1 for o in results) + (
            isinstance(operands.get("at"), Addr) and operands["at"].mode != "offset"  # type: ignore[union-attr]
        )
        if len(own) != expected or (own & named and r.random() < 0.8):
            return None
        named |= own
        return PlainOperation(name, row.operation_class, slot, operands, self.guard())

    def guard(self) -> PlainGuard | None:
        if self.r.random() < (0.9 if self.hot else 0.6):
            return None
        register = self.r.randrange(self.first[-1])
        if register not in self.core.guards and not self.wild:
            return None
        return PlainGuard(register, self.r.random() < 0.3)

    def source(self, slot: int, home: int, name: str) -> int:
        if self.r.random() < 0.85 and not self.wild:
            return self.register(home)
        cluster = self.r.randrange(len(self.core.clusters))
        linked = any((k.source, k.reader) == (cluster, home) for k in self.core.links)
        if not self.wild and not (linked and name in self.core.slots[slot].crossing):
            cluster = home
        return self.register(cluster)

    def place(self, operand: Operand, number: int) -> Reg:
        if operand.pair:
            cluster = max(k for k in range(len(self.first) - 1) if self.first[k] <= number)
            number = self.first[cluster] + (number - self.first[cluster]) // 2 * 2
        return Reg(number, self.r.randrange(2) if operand.half else None)

    def address(self, slot: int, home: int, no_immediate: bool) -> Addr:
        r = self.r
        base = r.choice(
            [p for p in self.pointers if self.first[home] <= p < self.first[home + 1]] or [self.register(home)]
        )
        if r.random() < 0.1:
            base = self.source(slot, home, "base")
        mode = r.choice(("offset", "offset", "after", "before"))
        step: Reg | Imm = Imm(r.choice((0, 8, 8, 0xFFFFFFF8, 0, r.choice((1, 2, 4, 4, 0xFFFFFFFC)))))
        if no_immediate or r.random() < 0.05:
            step = Reg(self.source(slot, home, "step"))
        if mode != "offset" and not self.wild and not self.first[home] <= base < self.first[home + 1]:
            mode = "offset"
        return Addr(base, mode, step, r.choice((0, 0, 16, 32)) if mode == "after" else 0)


def indirect(operation: PlainOperation) -> int | None:
    """The register that a branch goes by; None for all else."""
    place = operation.operands.get("to")
    return place.number if isinstance(place, Reg) else None


def const_mask(operand: Operand) -> int:
    width = int(operand.type[1:])
    return (1 << width) - 1
