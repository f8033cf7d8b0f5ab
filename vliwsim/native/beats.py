"""One beat of a context as LLVM text: land, wait, read, execute, redirect, in the order of design section 3.2.

Nothing is done before everything is judged. What could break a rule, whatever rule, leaves for the stepper, which takes
the beat by definition and says what is wrong; so the order of judgement does not matter here.
"""

from __future__ import annotations

from typing import NamedTuple

from vliwsim.description.operations import Operation
from vliwsim.machine.memory import ALL_DEFINED, ALL_OWNED
from vliwsim.machine.parts import Input, Part
from vliwsim.machine.redirecting import redirect_freezes
from vliwsim.native.contexts import Context, Flight, Step, Turn, always_taken
from vliwsim.native.meanings import Halves, result_type, widths
from vliwsim.native.region import Region
from vliwsim.native.text import UNLIKELY, Text, number
from vliwsim.program.code import Mode


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


class Beats(Text):
    """Writes the beats of a region's contexts. ``following``: undefined bytes are carried along."""

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
        self.variables: dict[str, str] = {"%fuel": "i64", **{f"%stall.{c}": "i64" for c in _STALLS}}
        for register in sorted(self.landing_registers):
            self.variables[f"%r{register}"] = "i32"
            if self.masked(register):
                self.variables[f"%u{register}"] = "i8" if following else "i1"
        self.read: set[int] = set()
        self.used: set[str] = set()
        self.functions: dict[tuple[Operation, Halves], str] = {}
        self.charges: dict[tuple[tuple[int, bool], ...], str] = {}
        self.here = "start"

    # ------------------------------------------------------------------------------------------------------ variables

    def masked(self, register: int) -> bool:
        """Whether a register has undefined bytes to look after."""
        return self.following or bool(self.ever_undefined >> register & 1)

    def value_slot(self, n: int, beats: int) -> str:
        self.variables[f"%f{n}.{beats}"] = "i32"
        return f"%f{n}.{beats}"

    def mask_slot(self, n: int, beats: int) -> str:
        self.variables[f"%w{n}.{beats}"] = "i8"
        return f"%w{n}.{beats}"

    def on_slot(self, n: int, beats: int) -> str:
        self.variables[f"%o{n}.{beats}"] = "i1"
        return f"%o{n}.{beats}"

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
        self.read.add(register)
        undefined = self.following or self.region.may[self.k] >> register & 1
        kind = "i8" if self.following else "i1"
        if register not in self.landing_registers:
            return Held(f"%k{register}", f"%q{register}" if undefined else None)
        value = self.let(f"load i32, ptr %r{register}")
        return Held(value, self.let(f"load {kind}, ptr %u{register}") if undefined else None)

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

    # ---------------------------------------------------------------------------------------------------------- leave

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

    # ----------------------------------------------------------------------------------------------------------- beat

    def beat(self) -> None:
        step = self.step
        if step.leave:
            self.used.add(f"leave{self.k}")
            self.put(f"br label %leave{self.k}")
            return
        self.land()
        self.refuel()
        if self.core.interlocked and self.wait():
            return
        guards = self.guards()
        self.judge_fresh()
        self.judge_early(guards)
        self.issue(guards)

    def land(self) -> None:
        due = self.step.due
        for k, one in enumerate(due):
            for other in due[:k]:
                plain = not (self.walker.sticky[one.number] or self.walker.sticky[other.number])
                if plain and self.walker.register(one) == self.walker.register(other):
                    self.doubt(self.on(one), self.on(other))
        for cluster, parameters in enumerate(self.core.clusters):
            here = [f for f in due if self.walker.cluster(f.number) == cluster]
            if len(here) > parameters.write_ports:
                total = self.total([self.on(f) for f in here])
                self.doubt(self.compare("ugt", "i32", total, str(parameters.write_ports)))
        for flight in sorted(due, key=lambda f: self.walker.sticky[f.number]):
            self.bring(flight)
        self.settle()
        self.keep_landed()

    def keep_landed(self) -> None:
        """What has landed becomes the registers' values; from here on the beat, given back, lands it again.

        So that the old values need not be kept, what lands again is what the register holds now.
        """
        for flight in self.step.due:
            register = self.walker.register(flight)
            if register in self.zero:
                continue
            value = self.now[register]
            kind, none = ("i8", "0") if self.following else ("i1", "false")
            self.put(f"store i32 {value.bits}, ptr %r{register}")
            self.put(f"store i32 {value.bits}, ptr {self.value_slot(flight.number, 0)}")
            if self.masked(register):
                self.put(f"store {kind} {value.mask or none}, ptr %u{register}")
            if self.following:
                self.put(f"store i8 {value.mask or '0'}, ptr {self.mask_slot(flight.number, 0)}")

    def total(self, tests: list[str]) -> str:
        """How many of the truths hold."""
        found = "0"
        for test in tests:
            found = self.let(f"add i32 {found}, {self.let(f'zext i1 {test} to i32')}")
        return found

    def bring(self, flight: Flight) -> None:
        """A due result reaches its register."""
        register = self.walker.register(flight)
        if register in self.zero:
            return
        value, on = self.flown(flight)
        if self.walker.sticky[flight.number]:
            value = self.joined(self.held(register), value, on)
        if on is not None:
            old = self.held(register)
            bits = self.select(on, "i32", value.bits, old.bits)
            kind = "i8" if self.following else "i1"
            none = "0" if self.following else "false"
            mask = None
            if value.mask is not None or old.mask is not None:
                mask = self.select(on, kind, value.mask or none, old.mask or none)
            value = Held(bits, mask)
        self.now[register] = value

    def joined(self, old: Held, new: Held, on: str | None) -> Held:
        """A sticky result's register: the or of both, undefined where either is."""
        bits = self.let(f"or i32 {old.bits}, {new.bits}")
        if not self.following:
            if old.mask is not None:
                self.doubt(old.mask, on)
            return Held(bits)
        lost = self.either([t for t in (self.undefined(old), self.undefined(new)) if t is not None])
        if lost is None:
            return Held(bits)
        return Held(self.select(lost, "i32", "0", bits), self.select(lost, "i8", "15", "0"))

    # ----------------------------------------------------------------------------------------------------------- wait

    def wait(self) -> bool:
        """Whether the bundle waits whatever the data; where that depends, the waiting goes its way here."""
        step = self.step
        if any(f.sure for f in step.guard_holds):
            self.hold()
            return True
        if step.guard_holds:
            self.hold_if([self.on(f) for f in step.guard_holds])
        for part in self.parts:
            guard = part.instruction.guard
            unknown = self.undefined(self.held(guard.register)) if guard else None
            if unknown is not None:
                self.doubt(unknown)
        for j, k in step.twice:
            self.doubt(self.guard(self.parts[j]), self.guard(self.parts[k]))
        if step.held:
            self.hold()
            return True
        tests = [self.on(f) for f in step.holds]
        crowded = self.crowded()
        if crowded is not None:
            tests.append(crowded)
        if tests:
            self.hold_if(tests)
        if step.refreshed is not None:
            registers = {r for _, r, link in step.prepared.fresh if link.fresh == "stall"}
            test = self.either([self.on(f) for f in step.due if self.walker.register(f) in registers])
            assert test is not None
            self.wait_if(test, "fresh", step.refreshed)
        return False

    def crowded(self) -> str | None:
        """Whether the results do not fit the ports beside those in flight, though alone they would."""
        if not self.step.crowds:
            return None
        alone: list[str] = []
        beside: list[str] = []
        for ports, own, flights in self.step.crowds:
            mine = self.total([self.writes(k, n) for k, n in own])
            alone.append(self.compare("ugt", "i32", mine, str(ports)))
            some = self.compare("ne", "i32", mine, "0")
            all_ = self.let(f"add i32 {mine}, {self.total([self.on(f) for f in flights])}")
            test = self.both(some, self.compare("ugt", "i32", all_, str(ports)))
            assert test is not None
            beside.append(test)
        never, often = self.either(alone), self.either(beside)
        assert never is not None
        return self.both(often, self.invert(never))

    def writes(self, k: int, n: int) -> str:
        """Whether part ``k`` has the result of write number ``n``."""
        part = self.parts[k]
        on = self.guard(part)
        if self.ready.sites[n].write.what == "count":
            counted = self.held(part.inputs[0].index)
            going = self.compare("ne", "i32", counted.bits, "0")
            unknown = self.undefined(counted)
            if unknown is not None:
                self.doubt(unknown)
            return self.both(on, going) or "true"
        return on or "true"

    def hold_if(self, tests: list[str]) -> None:
        assert self.step.waiting is not None
        test = self.either(tests)
        assert test is not None
        self.wait_if(test, "hold", self.step.waiting)

    def wait_if(self, test: str, kind: str, following: Context) -> None:
        """Go and wait where the test holds, with what has landed."""
        self.settle()
        aside, on = self.label("aside"), self.label("on")
        self.put(f"br i1 {test}, label %{aside}, label %{on}")
        self.block(aside)
        self.pass_beat(kind, following)
        self.block(on)

    def hold(self) -> None:
        assert self.step.waiting is not None
        self.settle()
        self.pass_beat("hold", self.step.waiting)

    def pass_beat(self, kind: str, following: Context) -> None:
        """A beat passes without a bundle."""
        kept = dict(self.now), dict(self.slots)
        self.count_edge(kind)
        self.age([])
        for turn in self.step.context.turns:
            if not turn.sure:
                self.turn_slot(turn)
        self.put(f"br label %{self.way_to(following)}")
        self.now, self.slots = kept

    # ----------------------------------------------------------------------------------------------------------- read

    def guard(self, part: Part) -> str | None:
        """The truth that a part's guard is on; None where it has none."""
        guard = part.instruction.guard
        if guard is None:
            return None
        return self.compare("eq" if guard.negated else "ne", "i32", self.held(guard.register).bits, "0")

    def guards(self) -> list[str | None]:
        for part in self.parts:
            guard = part.instruction.guard
            if guard and not self.core.interlocked:
                unknown = self.undefined(self.held(guard.register))
                if unknown is not None:
                    self.doubt(unknown)
        return [self.guard(part) for part in self.parts]

    def judge_fresh(self) -> None:
        stalls: list[str] = []
        for _, register, link in self.step.prepared.fresh:
            for flight in self.step.due:
                if self.walker.register(flight) != register:
                    continue
                if link.fresh == "reject":
                    self.doubt(self.on(flight))
                else:
                    stalls.append(self.on(flight))
        self.fresh_stall = None if self.core.interlocked else self.either(stalls)

    def judge_early(self, guards: list[str | None]) -> None:
        early = self.core.issue.early
        if self.core.interlocked or early == "old":
            return
        out: dict[int, list[Flight]] = {}
        for flight in self.step.staying:
            out.setdefault(self.walker.register(flight), []).append(flight)
        for k, part in enumerate(self.parts):
            named: dict[int, str | None] = {}
            for access in part.effects.reads:
                named[access.register] = guards[k]
            if part.instruction.guard:
                named[part.instruction.guard.register] = None
            for register, on in named.items():
                if register in out:
                    test = self.either([self.on(f) for f in out[register]])
                    unmade = self.invert(self.noted("early-read", k, register)) if early == "warn" else None
                    self.doubt(on, test, unmade)

    def operand(self, index: int) -> Held:
        """What an operand-file place holds: a register or a constant."""
        if index >= self.ready.first_constant:
            return Held(number(self.ready.constants[index - self.ready.first_constant], 32))
        return self.held(index)

    # -------------------------------------------------------------------------------------------------------- execute

    def issue(self, guards: list[str | None]) -> None:
        """Execute, judge the redirects, and do it all."""
        self.guard_bits = guards
        self.accesses: list[Access] = []
        self.loaded: dict[int, tuple[str, str | None, str | None]] = {}
        self.bases: dict[int, Held] = {}
        for k, part in enumerate(self.parts):
            self.judge_operands(k, part)
            if part.reach:
                self.reach(k, part)
        results: dict[int, Held] = {}
        bits: dict[int, str | None] = {}
        self.stored: dict[int, Held] = {}
        self.taken: dict[int, str] = {}
        for k, part in enumerate(self.parts):
            self.execute(k, part, results, bits)
        self.judge_stores()
        bank = self.charge()
        halting = self.either([guards[k] or "true" for k in self.step.halts])
        ways = self.judge_redirects(halting)
        if halting is not None:
            self.judge_drain(halting, bits)
        self.settle()
        # from here on it is done
        self.store_all()
        self.freeze(bank)
        if halting is not None:
            go, stop = self.label("go"), self.label("stop")
            self.put(f"br i1 {halting}, label %{stop}, label %{go}")
            self.block(stop)
            self.halt(results, bits)
            self.block(go)
            if self.certain_halt:
                self.put("unreachable")
                return
        self.age([(flight, results[flight.number], bits[flight.number]) for _, flight in self.step.new])
        self.move_turns()
        self.redirect(ways)

    @property
    def certain_halt(self) -> bool:
        return any(self.guard_bits[k] is None for k in self.step.halts)

    def judge_operands(self, k: int, part: Part) -> None:
        """In plain code a part that is on has no undefined operand."""
        if self.following:
            return
        indices = [i for wanted in part.inputs for i in _places(wanted)]
        if part.reach:
            indices += [part.reach.base, part.reach.step]
        if part.target_register is not None:
            indices.append(part.target_register)
        for index in dict.fromkeys(indices):
            unknown = self.undefined(self.operand(index))
            if unknown is not None:
                self.doubt(self.guard_bits[k], unknown)

    def reach(self, k: int, part: Part) -> None:
        """An address operand: its access, and what its base becomes."""
        reach, on = part.reach, self.guard_bits[k]
        assert reach is not None
        base, step = self.operand(reach.base), self.operand(reach.step)
        moved = base.bits if step.bits == "0" else self.let(f"add i32 {base.bits}, {step.bits}")
        unknown = self.either([t for t in (self.undefined(base), self.undefined(step)) if self.following and t])
        address, address_unknown = moved, unknown
        if reach.mode is Mode.AFTER:
            address, address_unknown = base.bits, self.undefined(base) if self.following else None
        if address_unknown is not None:
            self.doubt(on, address_unknown)
        if reach.update is not None:
            if reach.ring:
                inside = self.let(f"and i32 {moved}, {number(reach.ring - 1, 32)}")
                outside = self.let(f"and i32 {base.bits}, {number(~(reach.ring - 1), 32)}")
                moved = self.let(f"or i32 {outside}, {inside}")
            mask = None
            if unknown is not None:
                moved, mask = self.select(unknown, "i32", "0", moved), self.select(unknown, "i8", "15", "0")
            self.bases[reach.update] = Held(moved, mask)
        access = part.operation.access
        if access:
            self.access(k, access.bytes, access.store, address, on)

    def access(self, k: int, size: int, store: bool, address: str, on: str | None) -> None:
        """Judge an access, and load."""
        done, before = "", ""
        if on is not None:
            self.settle()
            inside, done = self.label("inside"), self.label("done")
            before = self.here
            self.put(f"br i1 {on}, label %{inside}, label %{done}")
            self.block(inside)
        status = self.judge_access(size, store, address)
        found: tuple[str, str | None, str | None] = ("0", None, None)
        kinds = (f"i{8 * size}", "i8", "i1")
        if not store:
            found = self.load(size, address, status)
        if on is not None:
            last = self.here
            self.put(f"br label %{done}")
            self.block(done)
            status = self.let(f"phi i{8 * size} [{status}, %{last}], [0, %{before}]")
            merged = [
                None if code is None else self.let(f"phi {kind} [{code}, %{last}], [0, %{before}]")
                for kind, code in zip(kinds, found, strict=True)
            ]
            found = merged[0] or "0", merged[1], merged[2]
        if not store:
            self.loaded[k] = found
        self.accesses.append(Access(k, size, store, address, on, status))

    def judge_access(self, size: int, store: bool, address: str) -> str:
        """Alignment, bounds and ownership; the status bytes."""
        memory = self.core.memory
        if memory.misaligned == "reject":  # turned right, an odd address is a great number
            shift = size.bit_length() - 1
            place = address
            if shift:
                place = self.let(f"call i32 @llvm.fshr.i32(i32 {address}, i32 {address}, i32 {shift})")
            wide = self.let(f"zext i32 {place} to i64")
            self.leave_if(self.compare("uge", "i64", wide, str(memory.size // size)))
        else:
            wide = self.let(f"zext i32 {address} to i64")
            self.leave_if(self.compare("ugt", "i64", self.let(f"add i64 {wide}, {size}"), str(memory.size)))
        kind = f"i{8 * size}"
        status = self.let(f"load {kind}, ptr {self.byte_of('%status', address)}, align 1")
        if store:
            owned = number(ALL_OWNED[size], 8 * size)
            self.leave_if(self.compare("ne", kind, self.let(f"and {kind} {status}, {owned}"), owned))
        elif self.following:
            some = self.let(f"or {kind} {status}, {self.let(f'lshr {kind} {status}, 1')}")
            ones = number(ALL_DEFINED[size] // 3, 8 * size)
            self.leave_if(self.compare("ne", kind, self.let(f"and {kind} {some}, {ones}"), ones))
        else:
            self.leave_if(self.compare("ne", kind, status, number(ALL_DEFINED[size], 8 * size)))
        return status

    def byte_of(self, array: str, address: str) -> str:
        wide = self.let(f"zext i32 {address} to i64")
        return self.let(f"getelementptr inbounds i8, ptr {array}, i64 {wide}")

    def swapped(self, size: int, code: str) -> str:
        """Bytes in the core's order from the host's, and back. The host is little-endian."""
        if self.core.memory.endianness == "little" or size == 1:
            return code
        return self.let(f"call i{8 * size} @llvm.bswap.i{8 * size}(i{8 * size} {code})")

    def load(self, size: int, address: str, status: str) -> tuple[str, str | None, str | None]:
        """(loaded bits, undefined bytes, whether a byte is undefined that no ``over`` declares)."""
        kind = f"i{8 * size}"
        value = self.swapped(size, self.let(f"load {kind}, ptr {self.byte_of('%mem', address)}, align 1"))
        if not self.following:
            return value, None, None
        status = self.swapped(size, status)
        mask, owned = "0", "false"
        for byte in range(size):
            one = self.let(f"and {kind} {self.let(f'lshr {kind} {status}, {8 * byte}')}, 3")
            missing = self.compare("ne", kind, one, "3")
            bit = self.select(missing, "i8", number(1 << byte, 8), "0")
            mask = self.let(f"or i8 {mask}, {bit}")
            owned = self.let(f"or i1 {owned}, {self.compare('eq', kind, one, '2')}")
            kept = self.let(f"and {kind} {value}, {number(~(255 << 8 * byte), 8 * size)}")
            value = self.select(missing, kind, kept, value)
        return value, mask, owned

    def execute(self, k: int, part: Part, results: dict[int, Held], bits: dict[int, str | None]) -> None:
        """Compute what a part does; ``bits``: whether each result lands (None: for sure)."""
        on = self.guard_bits[k]
        outputs = self.computed(k, part)
        taken = None
        if part.branches:
            taken = "true" if always_taken(part) else outputs[-1].bits
            if outputs and not always_taken(part) and outputs[-1].mask is not None:
                self.doubt(on, self.undefined(outputs[-1]))
            self.taken[k] = self.both(on, taken if taken != "true" else None) or "true"
            if part.target_register is not None:
                self.doubt(self.taken[k])
            if part.uses_link and part.link is None:
                self.doubt(on)
        if part.operation.access and part.operation.access.store:
            self.stored[k] = outputs[-1]
        for numbers, made in zip(part.results, outputs, strict=False):
            halves = self.halved(made) if len(numbers) == 2 else (made,)
            for n, value in zip(numbers, halves, strict=True):
                results[n] = value
                bits[n] = self.taken[k] if part.operation.count else on
        if part.reach and part.reach.update is not None:
            results[part.reach.update] = self.bases[part.reach.update]
            bits[part.reach.update] = on

    def halved(self, made: Held) -> tuple[Held, Held]:
        """The even and odd register of 64 bits."""
        low = self.let(f"trunc i64 {made.bits} to i32")
        high = self.let(f"trunc i64 {self.let(f'lshr i64 {made.bits}, 32')} to i32")
        if made.mask is None:
            return Held(low), Held(high)
        return (
            Held(low, self.let(f"and i8 {made.mask}, 15")),
            Held(high, self.let(f"lshr i8 {made.mask}, 4")),
        )

    def computed(self, k: int, part: Part) -> list[Held]:
        """The outputs of a part's operation."""
        operation = part.operation
        if not operation.outputs:
            return []
        key = operation, part.halves
        name = self.functions.setdefault(key, f"{self.prefix}op{len(self.functions)}")
        given, made = widths(operation)
        values = [self.input(k, wanted, part, width) for wanted, width in zip(part.inputs, given, strict=True)]
        arguments = [f"i{width} {value.bits}" for value, width in zip(values, given, strict=True)]
        if self.following:
            arguments += [f"i8 {value.mask or '0'}" for value in values]
        kind = result_type(operation, self.following)
        result = self.let(f"call {kind} @{name}({', '.join(arguments)})")
        outputs = []
        for j in range(len(made)):
            bits = self.let(f"extractvalue {kind} {result}, {j}")
            mask = self.let(f"extractvalue {kind} {result}, {j + len(made)}") if self.following else None
            outputs.append(Held(bits, mask))
        if self.following:
            self.judge_note(k, part, values, outputs)
        return outputs

    def judge_note(self, k: int, part: Part, values: list[Held], outputs: list[Held]) -> None:
        """The note that something was computed with undefined bytes, where it has not been made."""
        inside = self.either([t for v in values if (t := self.undefined(v)) is not None])
        outside = self.either([t for v in outputs if (t := self.undefined(v)) is not None])
        if inside is None or outside is None:
            return
        owned = self.loaded[k][2] if k in self.loaded else None
        self.doubt(self.guard_bits[k], inside, outside, owned, self.invert(self.noted("undefined-read", k, None)))

    def input(self, k: int, wanted: Input, part: Part, width: int) -> Held:
        if wanted.index < 0:
            if wanted.name == "loaded":
                return Held(*self.loaded[k][:2])
            return Held(number(part.link or 0, 32))
        if not wanted.pair:
            return self.operand(wanted.index)
        low, high = self.operand(wanted.index), self.operand(wanted.index + 1)
        wide = self.let(f"zext i32 {high.bits} to i64")
        bits = self.let(f"or i64 {self.let(f'zext i32 {low.bits} to i64')}, {self.let(f'shl i64 {wide}, 32')}")
        if not self.following:
            return Held(bits)
        upper = self.let(f"shl i8 {high.mask or '0'}, 4")
        return Held(bits, self.let(f"or i8 {low.mask or '0'}, {upper}"))

    def judge_stores(self) -> None:
        """``store-twice``: two stores to one byte."""
        stores = [a for a in self.accesses if a.store]
        for k, one in enumerate(stores):
            for other in stores[:k]:
                a = self.let(f"zext i32 {one.address} to i64")
                b = self.let(f"zext i32 {other.address} to i64")
                first = self.compare("ult", "i64", a, self.let(f"add i64 {b}, {other.size}"))
                second = self.compare("ult", "i64", b, self.let(f"add i64 {a}, {one.size}"))
                self.doubt(one.on, other.on, first, second)

    def charge(self) -> tuple[str, str] | None:
        """Bank and wait cycles (i64) of the accesses; None where there are none for sure."""
        memory, accesses = self.core.memory, self.accesses
        if not accesses or (len(accesses) == 1 and not memory.waits):
            return None
        within = all(memory.bank_width % a.size == 0 for a in accesses)
        if len(accesses) != 2 or not within or memory.waits:
            bank, wait = self.charge_by_call()
        elif memory.misaligned == "reject":
            bank, wait = self.let(f"zext i1 {self.meet()} to i64"), "0"
        else:
            bank, wait = self.charge_unless_aligned(), "0"
        if memory.conflict == "reject":
            self.doubt(self.compare("ne", "i64", bank, "0"))
            return None if wait == "0" else ("0", wait)
        return bank, wait

    def meet(self) -> str:
        """Whether two accesses, each within a word, make a bank serve one after the other."""
        memory, (one, other) = self.core.memory, self.accesses
        a, b = (self.let(f"udiv i32 {x.address}, {memory.bank_width}") for x in self.accesses)
        if memory.banks & memory.banks - 1 == 0:
            apart = self.let(f"and i32 {self.let(f'xor i32 {a}, {b}')}, {memory.banks - 1}")
            same = self.compare("eq", "i32", apart, "0")
        else:
            same = self.compare(
                "eq", "i32", self.let(f"urem i32 {a}, {memory.banks}"), self.let(f"urem i32 {b}, {memory.banks}")
            )
        loads = not one.store and not other.store
        differ = self.compare("ne", "i32", a, b) if memory.broadcast and loads else None
        return self.both(same, differ, one.on, other.on) or "true"

    def charge_unless_aligned(self) -> str:
        """Bank cycles of two accesses that are hardly ever misaligned."""
        odd = self.either(
            [
                self.compare("ne", "i32", self.let(f"and i32 {a.address}, {a.size - 1}"), "0")
                for a in self.accesses
                if a.size > 1
            ]
        )
        plain = self.let(f"zext i1 {self.meet()} to i64")
        if odd is None:
            return plain
        before, apart, done = self.here, self.label("odd"), self.label("charged")
        self.put(f"br i1 {odd}, label %{apart}, label %{done}{UNLIKELY}")
        self.block(apart)
        bank, _ = self.charge_by_call()
        self.put(f"br label %{done}")
        self.block(done)
        return self.let(f"phi i64 [{plain}, %{before}], [{bank}, %{apart}]")

    def charge_by_call(self) -> tuple[str, str]:
        key = tuple((a.size, a.store) for a in self.accesses)
        name = self.charges.setdefault(key, f"{self.prefix}charge{len(self.charges)}")
        arguments = ", ".join(f"i32 {a.address}, i1 {a.on or 'true'}" for a in self.accesses)
        made = self.let(f"call {{i64, i64}} @{name}({arguments})")
        bank = self.let(f"extractvalue {{i64, i64}} {made}, 0")
        return bank, self.let(f"extractvalue {{i64, i64}} {made}, 1")

    # ------------------------------------------------------------------------------------------------------- redirect

    def judge_redirects(self, halting: str | None) -> list[str]:
        """The bits of the branches that may land now; leaves where there is a hazard in it."""
        step = self.step
        issued = [self.taken[turn.part] for turn in step.issued]
        for k, one in enumerate(issued):
            for other in issued[:k]:
                self.doubt(one, other)
        bits = {turn: self.turn_bit(turn) for turn in step.context.turns}
        bits.update(zip(step.issued, issued, strict=True))
        self.turn_bits = bits
        if halting is not None:
            for bit in bits.values():
                self.doubt(halting, bit)
        if self.certain_halt:
            return []
        going = self.invert(halting) if halting is not None else None
        ways = [bits[turn] for turn in step.landing]
        for bit, target in zip(ways, step.turned, strict=True):
            if target is None:
                self.doubt(bit, going)
        if step.fallen is None and not any(t.sure for t in step.landing):
            taken = self.either(ways)
            self.doubt(self.invert(taken) if taken is not None else None, going)
        return ways

    def judge_drain(self, halting: str, bits: dict[int, str | None]) -> None:
        """Leave where results that land behind the halt might meet."""
        together: dict[int, list[tuple[int, str]]] = {}
        for flight in self.step.staying:
            together.setdefault(flight.beats, []).append((flight.number, self.on(flight)))
        for _, flight in self.step.new:
            together.setdefault(flight.beats, []).append((flight.number, bits[flight.number] or "true"))
        for landing in together.values():
            for k, (n, on) in enumerate(landing):
                for m, other in landing[:k]:
                    plain = not self.walker.sticky[n] and not self.walker.sticky[m]
                    if plain and self.walker.registers[n] == self.walker.registers[m]:
                        self.doubt(halting, on, other)
            for cluster, parameters in enumerate(self.core.clusters):
                here = [on for n, on in landing if self.walker.cluster(n) == cluster]
                if len(here) > parameters.write_ports:
                    self.doubt(halting, self.compare("ugt", "i32", self.total(here), str(parameters.write_ports)))
        if not self.following:
            for flight in (*self.step.staying, *(f for _, f in self.step.new)):
                register = self.walker.register(flight)
                if self.walker.sticky[flight.number] and register not in self.zero:
                    unknown = self.undefined(self.held(register))
                    if unknown is not None:
                        self.doubt(halting, unknown)

    # --------------------------------------------------------------------------------------------------------- commit

    def store_all(self) -> None:
        for access in self.accesses:
            if not access.store:
                continue
            done = ""
            if access.on is not None:
                inside, done = self.label("store"), self.label("stored")
                self.put(f"br i1 {access.on}, label %{inside}, label %{done}")
                self.block(inside)
            size, kind = access.size, f"i{8 * access.size}"
            made = self.stored[access.part]
            value = self.swapped(size, made.bits)
            self.put(f"store {kind} {value}, ptr {self.byte_of('%mem', access.address)}, align 1")
            status = number(ALL_DEFINED[size], 8 * size)
            if self.following and made.mask is not None:
                for byte in range(size):
                    missing = self.compare("ne", "i8", self.let(f"and i8 {made.mask}, {number(1 << byte, 8)}"), "0")
                    one = self.let(f"sub {kind} {status}, {number(1 << 8 * byte, 8 * size)}")
                    status = self.select(missing, kind, one, status)
                status = self.swapped(size, status)
            self.put(f"store {kind} {status}, ptr {self.byte_of('%status', access.address)}, align 1")
            if access.on is not None:
                self.put(f"br label %{done}")
                self.block(done)

    def freeze(self, bank: tuple[str, str] | None) -> None:
        """Count the cycles that the beat's accesses and a fresh operand freeze."""
        costs = dict(zip(("bank", "wait"), bank, strict=True)) if bank else {}
        if self.fresh_stall is not None:
            costs["fresh"] = self.let(f"zext i1 {self.fresh_stall} to i64")
        for cause, cycles in costs.items():
            if cycles != "0":
                self.stall(cause, cycles)

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

    def move_turns(self) -> None:
        for turn, bit in self.turn_bits.items():
            if turn.bundles > 1 and not turn.sure:
                moved = Turn(turn.bundles - 1, turn.bundle, turn.part, turn.sure)
                self.put(f"store i1 {bit}, ptr {self.turn_slot(moved)}")

    def redirect(self, ways: list[str]) -> None:
        """Go to the next context."""
        for turn, bit, target in zip(self.step.landing, ways, self.step.turned, strict=True):
            if target is None:
                continue
            other = ""
            if not turn.sure:
                taken, other = self.label("taken"), self.label("on")
                self.put(f"br i1 {bit}, label %{taken}, label %{other}")
                self.block(taken)
            for cause, cycles in redirect_freezes(self.ready, target.at):
                self.stall(cause, str(cycles))
            self.put(f"br label %{self.way_to(target)}")
            if turn.sure:
                return
            self.block(other)
        self.put(f"br label %{self.way_to(self.step.fallen)}" if self.step.fallen else "unreachable")

    def halt(self, results: dict[int, Held], bits: dict[int, str | None]) -> None:
        """Everything still out lands, and the run is over."""
        kept = dict(self.now), dict(self.slots)
        out = [(f.beats, self.walker.sticky[f.number], f, *self.flown(f)) for f in self.step.staying]
        out += [(f.beats, self.walker.sticky[f.number], f, results[f.number], bits[f.number]) for _, f in self.step.new]
        last = "0"
        touched = [self.walker.register(f) for f in self.step.due]
        for beats, _, flight, value, on in sorted(out, key=lambda item: item[:2]):
            self.slots[flight.number, 0] = value, on
            self.bring(Flight(0, flight.number, on is None))
            touched.append(self.walker.register(flight))
            last = str(beats) if on is None else self.select(on, "i64", str(beats), last)
        for register in dict.fromkeys(touched):
            if register in self.zero:
                continue
            value = self.now[register]
            self.put(f"store i32 {value.bits}, ptr %r{register}")
            if self.masked(register):
                kind, none = ("i8", "0") if self.following else ("i1", "false")
                self.put(f"store {kind} {value.mask or none}, ptr %u{register}")
        self.halted(last)
        self.now, self.slots = kept

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


_STALLS = ("bank", "wait", "penalty", "straddle", "fresh")


def _places(wanted: Input) -> tuple[int, ...]:
    """Operand-file places of an input."""
    if wanted.index < 0:
        return ()
    return (wanted.index, wanted.index + 1) if wanted.pair else (wanted.index,)


__all__ = ["Beats", "Step"]
