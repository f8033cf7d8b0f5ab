"""The variables of a region's code, and what the beats written in it have in common.

Registers, results in flight and the bits of branches in flight are local variables that LLVM turns into values; a
result in flight has a variable for each beat it may still have to go.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple

from vliwsim.description.operations import Operation
from vliwsim.machine.parts import Part
from vliwsim.machine.redirecting import redirect_freezes
from vliwsim.native.contexts import Context, Flight, Turn
from vliwsim.native.region import Region
from vliwsim.native.text import UNLIKELY, Text, number
from vliwsim.native.values import Halves

STALLS = ("bank", "wait", "penalty", "straddle", "fresh")
"""Causes of cycles that the code itself counts."""


class Held(NamedTuple):
    """32 bits, and their undefined bytes (i8; in plain code a truth: it is undefined); None: surely defined."""

    bits: str
    mask: str | None = None


class Access(NamedTuple):
    """A memory access of the beat that is under way. ``on`` None: for certain. ``status``: of its bytes, as loaded."""

    part: int
    size: int
    store: bool
    address: str
    on: str | None
    status: str


class Variables(Text):
    """What all phases of a beat need. ``following``: undefined bytes are carried along."""

    unlikely = UNLIKELY

    def __init__(self, region: Region, following: bool) -> None:
        super().__init__()
        self.region, self.following = region, following
        self.prefix = "following." if following else ""
        self.walker = region.walker
        self.ready, self.core = self.walker.ready, self.walker.core
        self.zero = {self.core.register_numbers[name] for name in self.core.zero_registers}
        self.landing_registers = {
            self.walker.register(f) for step in region.steps for f in (*step.context.flights, *(n for _, n in step.new))
        } - self.zero
        undefined = 0
        for may in region.may:
            undefined |= may
        self.ever_undefined = undefined
        self.variables: dict[str, str] = {"%fuel": "i64", **{f"%stall.{c}": "i64" for c in STALLS}}
        self.copied: frozenset[int] = frozenset()
        self.strip_registers = {region.copy[head]: self.written(strip.cycle) for head, strip in region.strips.items()}
        self.read: set[int] = set()
        self.used: set[str] = set()
        self.functions: dict[tuple[Operation, Halves, bool], str] = {}
        self.charges: dict[tuple[tuple[int, bool], ...], str] = {}
        self.here = "start"

    def masked(self, register: int) -> bool:
        """Whether a register has undefined bytes to look after."""
        return self.following or bool(self.ever_undefined >> register & 1)

    def turning_costs(self, k: int) -> list[tuple[str, int]]:
        """(cause, cycles) of the taken branch that alone leads from context ``k`` on within its strip, if one does."""
        if k < self.region.own:
            return []
        step, chain = self.region.steps[k], self.region.chain

        def inside(context: Context | None) -> bool:
            index = self.region.index.get(context) if context else None
            return index is not None and chain[index] == chain[k]

        turned = [target for target in step.turned if inside(target)]
        if len(turned) != 1 or turned[0] is None or any(map(inside, (step.waiting, step.refreshed, step.fallen))):
            return []
        return redirect_freezes(self.ready, turned[0].at)

    def written(self, contexts: Iterable[int]) -> frozenset[int]:
        """Registers in which something lands in these contexts."""
        due = (flight for k in contexts for flight in self.region.steps[k].due)
        return frozenset(self.walker.register(flight) for flight in due) - self.zero

    def value_slot(self, n: int, beats: int) -> str:
        name = f"%f{n}.{beats}"
        self.variables[name] = "i32"
        return name

    def mask_slot(self, n: int, beats: int) -> str:
        name = f"%w{n}.{beats}"
        self.variables[name] = "i8"
        return name

    def on_slot(self, n: int, beats: int) -> str:
        name = f"%o{n}.{beats}"
        self.variables[name] = "i1"
        return name

    def turn_slot(self, turn: Turn) -> str:
        name = f"%t{turn.bundle}.{turn.part}.{turn.bundles}"
        self.variables[name] = "i1"
        return name

    def block(self, name: str) -> None:
        super().block(name)
        self.here = name

    def begin(self, k: int) -> None:
        self.k, self.step = k, self.region.steps[k]
        self.parts = self.step.prepared.parts
        self.now: dict[int, Held] = {}
        self.slots: dict[tuple[int, int], tuple[Held, str | None]] = {}
        self.doubts: list[str] = []
        self.strip = self.region.chain[k] if k >= self.region.own else None
        self.copied = self.strip_registers[self.strip] if self.strip is not None else frozenset()
        self.ways_out: dict[str, str] = {}
        self.block(f"c{k}")

    def held(self, register: int) -> Held:
        """What a register holds now."""
        found = self.now.get(register)
        if found is None:
            found = self.now[register] = self.held_before(register)
        return found

    def held_before(self, register: int) -> Held:
        """What a register holds at the start of the beat."""
        if register in self.zero:
            return Held("0")
        undefined = self.following or bool(self.region.may[self.k] >> register & 1)
        if register not in self.landing_registers:
            self.read.add(register)
            return Held(f"%k{register}", f"%q{register}" if undefined else None)
        value, mask = self.register_places(register)
        bits = self.let(f"load i32, ptr {value}")
        if not undefined or mask is None:
            return Held(bits)
        if register in self.copied:
            return Held(bits, self.let(f"load i1, ptr {mask}"))
        bytes_ = self.let(f"load i8, ptr {mask}")
        return Held(bits, bytes_ if self.following else self.compare("ne", "i8", bytes_, "0"))

    def register_places(self, register: int) -> tuple[str, str | None]:
        """Where a register's value and its undefined bytes (None: it has none) are kept.

        In a strip, those that the loop writes are variables; all others stand in the block of hand-over all the time,
        so that nothing need be done with them at the many ways out.
        """
        value, mask = ("%s", "%m") if register in self.copied else ("%r", "%u")
        return f"{value}{register}", f"{mask}{register}" if self.masked(register) else None

    def put_register(self, register: int, held: Held) -> None:
        """Let a register hold a value."""
        value, mask = self.register_places(register)
        self.put(f"store i32 {held.bits}, ptr {value}")
        if mask is None:
            return
        if register in self.copied:
            self.put(f"store i1 {held.mask or 'false'}, ptr {mask}")
        else:
            missing = held.mask or "0"
            if held.mask is not None and not self.following:
                missing = self.select(held.mask, "i8", "15", "0")
            self.put(f"store i8 {missing}, ptr {mask}")

    def flown(self, flight: Flight) -> tuple[Held, str | None]:
        """The value of a flight of the context, and its bit (None: it is sure)."""
        key = flight.number, flight.beats
        if key not in self.slots:
            value = self.let(f"load i32, ptr {self.value_slot(*key)}")
            mask = self.let(f"load i8, ptr {self.mask_slot(*key)}") if self.following else None
            on = None if flight.sure else self.let(f"load i1, ptr {self.on_slot(*key)}")
            self.slots[key] = Held(value, mask), on
        return self.slots[key]

    def on(self, flight: Flight) -> str:
        return self.flown(flight)[1] or "true"

    def turn_bit(self, turn: Turn) -> str:
        return "true" if turn.sure else self.let(f"load i1, ptr {self.turn_slot(turn)}")

    def doubt(self, *tests: str | None) -> None:
        """Leave for the stepper, before anything is done, where all the tests hold."""
        self.doubts.append(self.both(*tests) or "true")

    def settle(self) -> None:
        """Leave now if there is a doubt."""
        found = self.either(self.doubts)
        self.doubts = []
        if found is not None:
            self.leave_if(found)

    def leave_if(self, test: str) -> None:
        on = self.label("on")
        self.used.add(f"leave{self.k}")
        self.put(f"br i1 {test}, label %leave{self.k}, label %{on}{UNLIKELY}")
        self.block(on)

    def undefined(self, held: Held) -> str | None:
        """Whether a value has undefined bytes."""
        if held.mask is None:
            return None
        return self.compare("ne", "i8", held.mask, "0") if self.following else held.mask

    def guard(self, part: Part) -> str | None:
        """The truth that a part's guard is on; None where it has none."""
        guard = part.instruction.guard
        if guard is None:
            return None
        return self.compare("eq" if guard.negated else "ne", "i32", self.held(guard.register).bits, "0")

    def operand(self, index: int) -> Held:
        """What an operand-file place holds: a register or a constant."""
        if index >= self.ready.first_constant:
            return Held(number(self.ready.constants[index - self.ready.first_constant], 32))
        return self.held(index)

    def total(self, tests: list[str]) -> str:
        """How many of the truths hold."""
        found = "0"
        for test in tests:
            found = self.let(f"add i32 {found}, {self.let(f'zext i1 {test} to i32')}")
        return found

    def stall(self, cause: str, cycles: str) -> None:
        total = self.let(f"load i64, ptr %stall.{cause}")
        self.put(f"store i64 {self.let(f'add i64 {total}, {cycles}')}, ptr %stall.{cause}")

    def age(self, new: list[tuple[Flight, Held, str | None]]) -> None:
        """Results in flight come a beat nearer, and new ones take off."""
        flying = [(f, *self.flown(f)) for f in self.step.staying] + new
        for flight, value, on in flying:
            key = flight.number, flight.beats - 1
            self.put(f"store i32 {value.bits}, ptr {self.value_slot(*key)}")
            if self.following:
                self.put(f"store i8 {value.mask or '0'}, ptr {self.mask_slot(*key)}")
            if not flight.sure:
                self.put(f"store i1 {on or 'true'}, ptr {self.on_slot(*key)}")

    # ------------------------------------------------------------------------------------- given by the whole function

    def refuel(self) -> None:
        raise NotImplementedError

    def count_edge(self, kind: str) -> None:
        raise NotImplementedError

    def noted(self, name: str, part: int, register: int | None) -> str:
        raise NotImplementedError

    def way_to(self, context: Context) -> str:
        raise NotImplementedError

    def halted(self, last: str) -> None:
        raise NotImplementedError
