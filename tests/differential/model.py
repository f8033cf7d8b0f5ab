"""A plain model of the machine, written from the design's section 3.2 alone: a beat at a time, as literal as can be.

It imports nothing from the package and shares no table with it. Comments quote the sentence a piece of code
implements; where the text leaves a choice, the comment names the reading and ends with its number in the list of
readings (R1, R2, …) that was handed to the people who settle differences.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from typing import NamedTuple

from .meanings import MEANINGS, WORD, Meaning
from .plain import (
    CAUSES,
    UNDEFINED,
    Addr,
    Hazard,
    Imm,
    Outcome,
    Passed,
    PlainBundle,
    PlainCore,
    PlainLink,
    PlainOperation,
    PlainRegion,
    Reg,
    Value,
)


class Flight(NamedTuple):
    """A result on its way to one register; ``beat`` is that of its landing."""

    beat: int
    register: int
    value: Value
    sticky: bool


class Branch(NamedTuple):
    """A branch in flight: bundle ``due`` (an issue index) comes from ``target`` if ``taken``."""

    due: int
    taken: bool
    target: int


class Access(NamedTuple):
    operation: PlainOperation
    address: int
    bytes: int
    store: bool


class Met(Exception):
    """A hazard is met."""


def run(
    core: PlainCore,
    program: Iterable[PlainBundle],
    registers: Mapping[int, Value | int] | None = None,
    regions: Iterable[PlainRegion] = (),
    *,
    interrupt_at: int | None = None,
    limit: int = 100_000,
    log: bool = False,
) -> Outcome:
    """Run ``program`` from its first bundle until it halts, meets a hazard, or ``limit`` cycles have passed.

    ``registers``: initial values by number, others are undefined. ``interrupt_at``: the asked cycle, from 0.
    """
    return Machine(core, tuple(program), registers or {}, tuple(regions), interrupt_at, limit, log).run()


class Machine:
    def __init__(
        self,
        core: PlainCore,
        program: tuple[PlainBundle, ...],
        registers: Mapping[int, Value | int],
        regions: tuple[PlainRegion, ...],
        interrupt_at: int | None,
        limit: int,
        log: bool,
    ) -> None:
        assert program
        self.core, self.program, self.regions = core, program, regions
        self.asked, self.limit = interrupt_at, limit
        self.cluster_of = [k for k, cluster in enumerate(core.clusters) for _ in range(cluster.registers)]
        self.link_of = {(link.source, link.reader): link for link in core.links}
        self.index_at = {bundle.address: k for k, bundle in enumerate(program)}
        self.address_at = {bundle.position: bundle.address for bundle in program}
        # What an operation names is asked for again and again: kept by the operation, which the program holds.
        self.known_reads: dict[int, list[tuple[str, int]]] = {}
        self.known_writes: dict[int, list[tuple[int, bool, int]]] = {}
        # "registers and memory start with it": undefined.
        self.registers = [UNDEFINED] * len(self.cluster_of)
        for number, value in registers.items():
            self.registers[number] = value if isinstance(value, Value) else Value(value)
        for number in core.zero_registers:
            self.registers[number] = Value(0)
        for bundle in program:
            for operation in bundle.operations:
                # "An operation may not name one register twice among its results and updated base."  No hazard has
                # that name: such a program is refused before it runs (R8).
                named = [register for register, _, _ in self.written(operation)]
                if len(named) != len(set(named)):
                    raise ValueError(f"{operation.name} names one register twice among its results and updated base")
        self.memory: dict[int, int | None] = {}
        for region in regions:
            for k, byte in enumerate(region.content):
                self.memory[region.start + k] = byte
        # Three counters.
        self.cycle = self.beat = self.index = 0
        self.place = 0  # the bundle at the point of issue: an index into the program
        self.idle_done = 0  # beats of an idle word already issued
        self.flights: list[Flight] = []
        self.branches: list[Branch] = []
        self.free_from = [0] * len(core.slots)  # the first beat at which a busy unit is free
        self.landed: set[int] = set()  # in this very beat
        self.fresh_waited = False
        self.beat_cycle = 0  # the cycle at which this beat begins
        self.bundles = self.drain_cycles = 0
        self.counts = [0] * len(program)
        self.stalls = dict.fromkeys(CAUSES, 0)
        self.warnings: list[tuple[int, int, int]] = []
        self.log: list[Passed] | None = [] if log else None

    # ------------------------------------------------------------------ the run

    def run(self) -> Outcome:
        hazard, stop = None, "halt"
        try:
            while True:
                if self.cycle >= self.limit:
                    stop = "limit"
                    break
                if self.interrupted():
                    self.service()
                elif self.one_beat():
                    self.drain()
                    break
        except Met as met:
            stop, hazard = "hazard", Hazard(str(met), self.beat, self.beat_cycle, self.place)
        memory = {
            region.start + k: self.memory.get(region.start + k) for region in self.regions for k in range(region.size)
        }
        assert self.cycle == self.bundles + sum(self.stalls.values()) + self.drain_cycles
        return Outcome(
            stop, self.cycle, self.bundles, self.stalls, self.drain_cycles, tuple(self.registers), memory, hazard,
            tuple(dict.fromkeys(self.warnings)), tuple(self.log or ()), tuple(self.counts),
        )  # fmt: skip

    def pass_cycles(self, what: str, count: int = 1) -> None:
        """Cycles pass; the beat is the caller's affair."""
        for _ in range(count):
            self.cycle += 1
            if what == "bundle":
                self.bundles += 1
                self.counts[self.place] += 1
            elif what == "drain":
                self.drain_cycles += 1
            else:
                self.stalls[what] += 1
            if self.log is not None:
                self.log.append(Passed(what, self.place, tuple(self.registers)))

    def one_beat(self) -> bool:
        """One beat, in this order: land, hold?, read, execute, redirect. True when a halt has issued."""
        self.beat_cycle = self.cycle
        self.land()
        bundle = self.program[self.place]
        # "in each operation by operation in the core's slot order (those of one slot as written)"
        operations = sorted(bundle.operations, key=lambda operation: operation.slot)
        cause = self.hold(operations) if self.core.interlocked else None
        if cause:
            # "Hold: no issue, the beat advances, results land."
            self.pass_cycles(cause)
            self.beat += 1
            return False
        fresh = self.read(operations)
        issued, links, halting = self.execute(bundle, operations, fresh)
        self.redirect(bundle, operations, issued, links, halting)
        return halting

    # ------------------------------------------------------------------ step 1

    def land(self) -> None:
        """ "Results due become visible." """
        due = [flight for flight in self.flights if flight.beat == self.beat]
        # "two (guard-on) results for one register in one beat, lands-twice": sticky ones never collide.
        for times in Counter(flight.register for flight in due if not flight.sticky).values():
            if times > 1:
                raise Met("lands-twice")
        # "more results in a cluster than its write ports, write-ports; either leaves the registers as they were"
        for cluster, results in Counter(self.cluster_of[flight.register] for flight in due).items():
            if results > self.core.clusters[cluster].write_ports:
                raise Met("write-ports")
        for flight in sorted(due, key=lambda flight: flight.sticky):  # plain results first, then the ORs (R1)
            if flight.register in self.core.zero_registers:
                continue
            if not flight.sticky:
                self.registers[flight.register] = flight.value
            else:
                held = self.registers[flight.register]
                undefined = held.unknown or flight.value.unknown  # an OR is computed: undefined as a whole (R2)
                self.registers[flight.register] = UNDEFINED if undefined else Value(held.bits | flight.value.bits)
        self.flights = [flight for flight in self.flights if flight.beat != self.beat]
        self.landed = {flight.register for flight in due}

    # ------------------------------------------------------------------ what an operation names

    def meaning(self, operation: PlainOperation) -> Meaning:
        return MEANINGS[operation.name]

    def halves_of(self, operation: PlainOperation, name: str, register: int) -> list[int]:
        """ "Pairs are even:odd …, two ports and two crossings; hazards are judged by half." """
        return [register, register + 1] if name in self.meaning(operation).pairs else [register]

    def operands_read(self, operation: PlainOperation) -> list[tuple[str, int]]:
        """(operand name, register) of every register an operation reads; guards are on wires of their own."""
        if id(operation) in self.known_reads:
            return self.known_reads[id(operation)]
        read = []
        for name in self.meaning(operation).sources:
            operand = operation.operands[name]
            if isinstance(operand, Reg):
                read += [(name, register) for register in self.halves_of(operation, name, operand.number)]
        address = operation.operands.get("at")
        if isinstance(address, Addr):
            read.append(("base", address.base))
            if isinstance(address.step, Reg):
                read.append(("step", address.step.number))
        self.known_reads[id(operation)] = read
        return read

    def written(self, operation: PlainOperation) -> list[tuple[int, bool, int]]:
        """(register, is it sticky, latency) of every result, updated base and `count` register it names."""
        if id(operation) in self.known_writes:
            return self.known_writes[id(operation)]
        meaning, found = self.meaning(operation), []
        latency, update = self.latency(operation), self.update_latency()
        for name in meaning.results:
            register = operation.operands[name].number
            found += [(half, False, latency) for half in self.halves_of(operation, name, register)]
        if meaning.sticky:
            found.append((operation.operands[meaning.sticky].number, True, latency))
        address = operation.operands.get("at")
        if isinstance(address, Addr) and address.mode != "offset":
            found.append((address.base, False, update))
        if meaning.kind == "count":
            found.append((operation.operands["r"].number, False, update))
        self.known_writes[id(operation)] = found
        return found

    def latency(self, operation: PlainOperation) -> int:
        """ "per class, overridable per operation" """
        of_class = self.core.latency_classes.get(operation.cls, self.core.latency_otherwise)
        return self.core.latency_operations.get(operation.name, of_class)

    def update_latency(self) -> int:
        """ "base updates, and the register of a `count` that branches, land with class `update`" """
        return self.core.latency_classes.get("update", self.core.latency_otherwise)

    def guard_on(self, operation: PlainOperation) -> bool:
        """ "On when the 32-bit register ≠ 0 (or = 0 for `if not`)" """
        if operation.guard is None:
            return True
        return (self.registers[operation.guard.register].bits == 0) == operation.guard.negated

    def in_flight(self) -> set[int]:
        return {flight.register for flight in self.flights}

    def link_to(self, operation: PlainOperation, register: int) -> PlainLink | None:
        """The link a register crosses to reach the operation's slot; None if it need not cross (or cannot)."""
        return self.link_of.get((self.cluster_of[register], self.core.slots[operation.slot].cluster))

    def fresh(self, operation: PlainOperation, policy: str) -> bool:
        """ "Fresh: a crossing register that landed in this very beat", under this policy of its link."""
        for _, register in self.operands_read(operation):
            link = self.link_to(operation, register)
            if register in self.landed and link is not None and link.fresh == policy:
                return True
        return False

    # ------------------------------------------------------------------ step 2

    def hold(self, operations: list[PlainOperation]) -> str | None:
        """The cause for which an interlocked core waits in this beat, or None."""
        pending = self.in_flight()
        # "The bundle waits as a whole until none of its guards is pending;"
        if any(operation.guard and operation.guard.register in pending for operation in operations):
            return "hold"
        # "in that beat they are judged (`undefined-used`),"
        for operation in operations:
            if operation.guard and self.registers[operation.guard.register].unknown:
                raise Met("undefined-used")
        # "and then `written-twice`: two guard-on operations of one bundle may not name one register as result,
        # updated base or `count` register, whether the `count` branches or not."  Sticky results never count.
        on = [operation for operation in operations if self.guard_on(operation)]
        named: set[int] = set()
        for operation in on:
            names = {register for register, sticky, _ in self.written(operation) if not sticky}
            if names & named:
                raise Met("written-twice")
            named |= names
        # "It goes on waiting until no operand, base, `count` register or destination of any of its operations (guard
        # on or off) is pending,"  A sticky result's register is a destination (R3).
        for operation in operations:
            names = {register for _, register in self.operands_read(operation)}
            names |= {register for register, _, _ in self.written(operation)}
            if names & pending:
                return "hold"
        # "its units are free,"
        if any(self.beat < self.free_from[operation.slot] for operation in operations):
            return "hold"
        # "and its results fit the ports beside those in flight;"
        if not self.results_fit(on):
            return "hold"
        # "The last wait, once a bundle, is that for a fresh operand."  All of step 2 is asked again after it (R4).
        if not self.fresh_waited and any(self.fresh(operation, "stall") for operation in operations):
            self.fresh_waited = True
            return "fresh"
        return None

    def results_fit(self, on: list[PlainOperation]) -> bool:
        """Do the results of the guard-on operations fit the write ports, beside those in flight?"""
        own: Counter[tuple[int, int]] = Counter()
        for operation in on:
            # "(an undefined `count` is taken not to branch)"
            if self.meaning(operation).kind == "count":
                counted = self.registers[operation.operands["r"].number]
                if counted.unknown or counted.bits == 0:
                    continue
            for register, _, latency in self.written(operation):
                own[self.cluster_of[register], self.beat + latency] += 1
        # "a bundle whose own results exceed a cluster's write ports in one beat does not wait for ports"
        if any(results > self.core.clusters[cluster].write_ports for (cluster, _), results in own.items()):
            return True
        both = own + Counter((self.cluster_of[flight.register], flight.beat) for flight in self.flights)
        return all(both[key] <= self.core.clusters[key[0]].write_ports for key in own)

    # ------------------------------------------------------------------ step 3

    def read(self, operations: list[PlainOperation]) -> int:
        """ "Judged in two rounds"; gives the cycles of a freeze for a fresh operand."""
        self.first_round(operations)
        return self.second_round(operations)

    def first_round(self, operations: list[PlainOperation]) -> None:
        """ "First slot-taken, slot-class, guard-register, busy, read-ports, links", guards on or off."""
        taken: set[int] = set()
        read: set[int] = set()
        crossings: dict[PlainLink, list[int]] = {}
        for operation in operations:
            slot = self.core.slots[operation.slot]
            if operation.slot in taken:
                raise Met("slot-taken")
            taken.add(operation.slot)
            if operation.cls not in slot.classes:
                raise Met("slot-class")
            if operation.guard and operation.guard.register not in self.core.guards:
                raise Met("guard-register")
            # "Busy b blocks that slot for beats t … t + b − 1"
            if self.beat < self.free_from[operation.slot]:
                raise Met("busy")
            # "Distinct registers read of a cluster count against its read ports, crossing ones in the cluster they
            # live in."
            read |= {register for _, register in self.operands_read(operation)}
            for cluster, count in Counter(self.cluster_of[register] for register in read).items():
                if count > self.core.clusters[cluster].read_ports:
                    raise Met("read-ports")
            # "Crossing operands count against the link: every operand place, or with `shared` every distinct register."
            for name, register in self.operands_read(operation):
                if self.cluster_of[register] == slot.cluster:
                    continue
                link = self.link_to(operation, register)
                if link is None or name not in slot.crossing:
                    raise Met("links")
                over = crossings.setdefault(link, [])
                over.append(register)
                if len(set(over) if link.shared else over) > link.operands:
                    raise Met("links")
            # "Results, updated bases and `count` registers stay in the slot's cluster (`links`)."
            if any(self.cluster_of[register] != slot.cluster for register, _, _ in self.written(operation)):
                raise Met("links")

    def second_round(self, operations: list[PlainOperation]) -> int:
        """ "then fresh, early-read of the guard, undefined guard, early-read of an operand" """
        pending = self.in_flight()
        freeze = 0
        for operation in operations:
            if self.fresh(operation, "reject"):
                raise Met("fresh")
            # "`stall`: exposed freezes one cycle and goes on with the values read": one a bundle (R5). An
            # interlocked core has waited in step 2.
            if not self.core.interlocked and self.fresh(operation, "stall"):
                freeze = 1
            # "Early read: a guard-on operand, or any guard, whose register has a result in flight."
            if operation.guard and operation.guard.register in pending:
                self.early_read(operation.guard.register)
            if operation.guard and self.registers[operation.guard.register].unknown:
                raise Met("undefined-used")
            if self.guard_on(operation):
                for _, register in self.operands_read(operation):
                    if register in pending:
                        self.early_read(register)
        return freeze

    def early_read(self, register: int) -> None:
        assert not self.core.interlocked, "an interlocked core has waited for it"
        if self.core.early == "reject":
            raise Met("early-read")
        if self.core.early == "warn":
            self.warnings.append((self.beat, self.place, register))

    # ------------------------------------------------------------------ values

    def value(self, operation: PlainOperation, name: str) -> Value:
        """The value an operand gives: 64 bits for a pair, 16 for a half."""
        operand = operation.operands[name]
        if isinstance(operand, Imm):
            return Value(operand.bits)
        if name in self.meaning(operation).pairs:
            assert operand.number % 2 == 0
            low, high = self.registers[operand.number], self.registers[operand.number + 1]
            return Value(low.bits | high.bits << 32, low.unknown | high.unknown << 4)
        held = self.registers[operand.number]
        if operand.half is not None:
            return Value(held.bits >> 16 * operand.half & 0xFFFF, held.unknown >> 2 * operand.half & 0b11)
        return held

    def address_and_update(self, address: Addr) -> tuple[Value, Value]:
        """The address, and what an updated base becomes. "Addresses wrap at 32 bits" """
        base = self.registers[address.base]
        step = Value(address.step.bits) if isinstance(address.step, Imm) else self.registers[address.step.number]
        if base.unknown or step.unknown:
            total = UNDEFINED
        elif address.ring:
            ring = address.ring - 1
            total = Value(base.bits & ~ring | (base.bits + step.bits) & ring)
        else:
            total = Value((base.bits + step.bits) & WORD)
        # `[r then +s]` uses r alone as its address: an undefined s is then only passed on (R6).
        return (base if address.mode == "after" else total), total

    def decision(self, operation: PlainOperation) -> bool:
        """ "its taken bit is fixed at issue" """
        meaning = self.meaning(operation)
        if meaning.kind == "count":
            return self.value(operation, "r").bits != 0
        if "a" in meaning.sources:
            return meaning.taken(self.value(operation, "a").bits, self.value(operation, "b").bits)
        return True

    # ------------------------------------------------------------------ step 4

    def execute(
        self, bundle: PlainBundle, operations: list[PlainOperation], fresh: int
    ) -> tuple[list[Branch], list[int | None], bool]:
        """The branches issued, the link of every guard-on call (None: nowhere), and whether a halt is on."""
        on = [operation for operation in operations if self.guard_on(operation)]
        # "Judged in this order, each for the whole bundle before the next"
        self.judge_undefined(on)
        self.judge_targets(on)
        accesses = [
            Access(
                operation,
                self.address_and_update(operation.operands["at"])[0].bits,
                self.meaning(operation).bytes,
                self.meaning(operation).kind == "store",
            )
            for operation in on
            if "at" in operation.operands
        ]
        self.judge_memory(accesses)
        bank, wait = self.freeze_of(accesses)
        if bank and self.core.conflict == "reject":
            raise Met("bank-conflict")
        # Nothing can go wrong any more before step 5: the bundle has its effect and is counted.
        for operation in operations:  # "guard on or off"
            busy = self.core.slots[operation.slot].busy
            beats = busy.get(operation.name, busy.get(operation.cls, 1))
            self.free_from[operation.slot] = self.beat + beats
        links: list[int | None] = []
        for operation in on:
            link = self.address_at.get(bundle.position + self.core.branch_latency)
            if self.meaning(operation).kind == "call":
                links.append(link)
            self.send(operation, Value(link or 0))
        issued = [self.branch(operation) for operation in operations if "to" in self.meaning(operation).sources]
        # "Loads take memory in their issue beat; stores change it after all loads of that beat"
        for access in accesses:
            if access.store:
                self.store(access)
        self.pass_cycles("bundle")
        self.pass_cycles("fresh", fresh)
        self.pass_cycles("bank", bank)
        self.pass_cycles("wait", wait)
        return issued, links, any(self.meaning(operation).kind == "halt" for operation in on)

    def branch(self, operation: PlainOperation) -> Branch:
        """The branch in flight: one of latency B issued at index t makes bundle t + B come from its target."""
        taken = self.guard_on(operation) and self.decision(operation)
        return Branch(self.index + self.core.branch_latency, taken, self.value(operation, "to").bits)

    def judge_undefined(self, on: list[PlainOperation]) -> None:
        """ "It is an error, `undefined-used`, at a guard, a `count`, a taken indirect target and an address" """
        for operation in on:
            meaning = self.meaning(operation)
            if "at" in operation.operands and self.address_and_update(operation.operands["at"])[0].unknown:
                raise Met("undefined-used")
            if meaning.kind == "count" and self.value(operation, "r").unknown:
                raise Met("undefined-used")
            if "to" in meaning.sources:
                # Not in the list, but nothing can be fixed at issue from an undefined comparison (R7).
                if "a" in meaning.sources and (
                    self.value(operation, "a").unknown or self.value(operation, "b").unknown
                ):
                    raise Met("undefined-used")
                if self.decision(operation) and self.value(operation, "to").unknown:
                    raise Met("undefined-used")

    def judge_targets(self, on: list[PlainOperation]) -> None:
        """A taken branch to a register that names places goes to one of them, or there is `indirect-target`."""
        for operation in on:
            named = operation.targets
            if named and self.decision(operation) and self.value(operation, "to").bits not in named:
                raise Met("indirect-target")

    def judge_memory(self, accesses: list[Access]) -> None:
        """ "misaligned, out-of-array, store-twice" """
        for access in accesses:
            # "Alignment is the access size, 8 for pairs."
            if self.core.misaligned == "reject" and access.address % access.bytes:
                raise Met("misaligned")
        for access in accesses:
            for byte in range(access.address, access.address + access.bytes):  # "accesses do not" wrap
                # "Reading beyond an array and the bytes its `over` declares … is `out-of-array`, judged by byte; so
                # is writing outside arrays and scratch."
                if not any(
                    region.start <= byte < region.start + region.size + (0 if access.store else region.over)
                    for region in self.regions
                ):
                    raise Met("out-of-array")
        # "two stores to one byte in one beat are `store-twice`"
        stored: set[int] = set()
        for access in accesses:
            if access.store:
                bytes_ = set(range(access.address, access.address + access.bytes))
                if bytes_ & stored:
                    raise Met("store-twice")
                stored |= bytes_

    def freeze_of(self, accesses: list[Access]) -> tuple[int, int]:
        """Cycles of the freeze by bank conflicts, and by wait states.

        "Freeze = max(0, max over banks of Σ (1 + wait) − 1) over guard-on accesses; … The part that would be there
        with no wait states is cause `bank` …, the rest `wait`."
        """
        width, banks = self.core.bank_width, self.core.banks
        charged: dict[int, list[int]] = {}  # by bank, the waits of what is charged to it
        shared: dict[tuple[int, frozenset[int]], int] = {}  # loads of one bank and the same words: the longer wait
        for access in accesses:
            bytes_ = range(access.address, access.address + access.bytes)
            # "waits as long as its slowest byte"
            wait = max(
                [0] + [r.cycles for r in self.core.waits for byte in bytes_ if r.start <= byte < r.start + r.bytes]
            )
            words = {byte // width for byte in bytes_}
            # "an access charges each bank it touches once"
            for bank in {word % banks for word in words}:
                there = frozenset(word for word in words if word % banks == bank)
                if self.core.broadcast and not access.store:
                    # "with `broadcast`, loads of the same words of a bank count once, with the longer wait"
                    shared[bank, there] = max(wait, shared.get((bank, there), 0))
                else:
                    charged.setdefault(bank, []).append(wait)
        for (bank, _), wait in shared.items():
            charged.setdefault(bank, []).append(wait)
        whole = max([0] + [sum(1 + wait for wait in waits) - 1 for waits in charged.values()])
        without = max([0] + [len(waits) - 1 for waits in charged.values()])
        return without, whole - without

    def send(self, operation: PlainOperation, link: Value) -> None:
        """ "Latency L issued at beat t: visible to reads at t + L." """
        meaning = self.meaning(operation)
        values: list[Value] = []
        if meaning.kind == "compute":
            values = list(meaning.does(*(self.value(operation, name) for name in meaning.sources)))
        elif meaning.kind == "load":
            address = self.address_and_update(operation.operands["at"])[0].bits
            values = list(meaning.does(self.loaded(address, meaning.bytes)))
        elif meaning.kind == "call":
            values = [link]  # "that word's address is its link value"
        split: list[Value] = []
        for name, value in zip(meaning.results, values, strict=False):
            if name in meaning.pairs:
                split += [Value(value.bits & WORD, value.unknown & 15), Value(value.bits >> 32, value.unknown >> 4)]
            else:
                split.append(value)
        split += values[len(meaning.results) :]  # the sticky one
        address = operation.operands.get("at")
        if isinstance(address, Addr) and address.mode != "offset":
            split.append(self.address_and_update(address)[1])
        if meaning.kind == "count":
            counted = self.value(operation, "r").bits
            if counted == 0:
                return  # "the register of a `count` that branches"
            split.append(Value(counted - 1))  # "if r ≠ 0, take one off r and branch"
        for (register, sticky, latency), value in zip(self.written(operation), split, strict=True):
            self.flights.append(Flight(self.beat + latency, register, value, sticky))

    def byte_places(self, count: int) -> list[int]:
        """For the bytes of an access in address order, their place in the value (0: the least significant byte)."""
        return list(range(count)) if self.core.endianness == "little" else list(reversed(range(count)))

    def loaded(self, address: int, count: int) -> Value:
        bits = unknown = 0
        for k, place in enumerate(self.byte_places(count)):
            byte = self.memory.get(address + k)
            if byte is None:
                unknown |= 1 << place
            else:
                bits |= byte << 8 * place
        return Value(bits, unknown)

    def store(self, access: Access) -> None:
        value = self.value(access.operation, "a")
        for k, place in enumerate(self.byte_places(access.bytes)):
            undefined = value.unknown >> place & 1
            self.memory[access.address + k] = None if undefined else value.bits >> 8 * place & 0xFF

    # ------------------------------------------------------------------ step 5

    def redirect(
        self,
        bundle: PlainBundle,
        operations: list[PlainOperation],
        issued: list[Branch],
        links: list[int | None],
        halting: bool,
    ) -> None:
        """ "This step chooses the next bundle, unless a `halt` is on" """
        behind = bool(self.branches)
        self.branches += issued
        # "two taken branches issued in this bundle, `two-redirects`;"
        if sum(branch.taken for branch in issued) > 1:
            raise Met("two-redirects")
        # "nothing there, `ran-off-the-end`;"
        landing = [branch for branch in self.branches if branch.taken and branch.due == self.index + 1]
        place, idle_done = self.place, self.idle_done + 1
        if landing:
            # "A taken redirect cancels the rest of a multi-beat idle word"
            place, idle_done = self.index_at.get(landing[0].target, len(self.program)), 0
        elif idle_done == bundle.beats:
            place, idle_done = self.place + 1, 0
        if not halting and place >= len(self.program):
            raise Met("ran-off-the-end")
        # "where the core forbids overlap, a branch, on or off, that issues with or behind another in flight,
        # `branch-overlap`"
        if not self.core.branch_overlap and issued and (behind or len(issued) > 1):
            raise Met("branch-overlap")
        # "a guard-on `call` behind which no word begins B bundles on in program order, `link-nowhere`"
        if None in links:
            raise Met("link-nowhere")
        # "a taken branch in flight with `halt`, those issued with it included, `branch-past-halt`"
        if halting and any(branch.taken for branch in self.branches):
            raise Met("branch-past-halt")
        # From here on the beat is over.
        self.branches = [branch for branch in self.branches if branch.due != self.index + 1]
        if not halting:
            self.place, self.idle_done = place, idle_done
            if landing:
                # "and pays the taken penalty then"; "freeze for a straddling target"
                self.pass_cycles("penalty", self.core.taken_penalty)
                self.pass_cycles("straddle", self.core.straddle_freeze if self.program[place].straddles else 0)
        self.index += 1
        self.beat += 1
        self.fresh_waited = False

    # ------------------------------------------------------------------ interrupts, the end

    def interrupted(self) -> bool:
        """ "taken at the first beat, of a new or a held bundle, that would begin at or after the asked cycle (counted
        from 0) with no branch, on or off, in flight" """
        return self.asked is not None and self.cycle >= self.asked and not self.branches

    def service(self) -> None:
        """ "Service lasts the core's service beats, and at least to the end of the beat in which the last result in
        flight lands; the same bundle is fetched in the next beat." """
        self.asked = None
        last = max((flight.beat for flight in self.flights), default=self.beat - 1)
        for _ in range(max(self.core.service, last - self.beat + 1)):
            self.beat_cycle = self.cycle
            self.land()
            self.pass_cycles("interrupt")
            self.beat += 1

    def drain(self) -> None:
        """ "drain = max(0, latest landing beat − halt beat − 1) over all results in flight" """
        while self.flights:  # the beat behind the halt's
            self.beat_cycle = self.cycle
            self.land()
            if self.flights:
                self.pass_cycles("drain")
            self.beat += 1
