"""Strips of passes are judged ahead: how a loop comes into its trusted copy, and out of it."""

from __future__ import annotations

from collections import Counter

from vliwsim.machine.memory import DEFINED, UNDEFINED
from vliwsim.native.strips import Walk
from vliwsim.native.text import number
from vliwsim.native.variables import Variables

FEWEST = 4
"""Passes that are worth a strip."""
FIRST = 16
"""Passes tried at first; each strip that runs to its end makes the next four times as long."""
MOST = 1 << 16
PAUSE = 16
"""Passes that are judged one by one where no strip was possible."""


class Ahead(Variables):
    """What a loop that runs in strips needs around it. Passes not run are given back to %fuel at the way out."""

    heads: dict[int, int]
    """The head, outside, of every trusted copy by its first context."""

    def head_of(self, k: int) -> int:
        """The head, outside, of the trusted copy that context ``k`` is of."""
        return self.heads[self.region.chain[k]]

    def variable(self, name: str, kind: str = "i64") -> str:
        self.variables[f"%{name}"] = kind
        return f"%{name}"

    def count_of(self, name: str) -> str:
        """What a variable of passes holds."""
        return self.let(f"load i64, ptr {self.variable(name)}")

    def probe(self, k: int) -> None:
        """At the head of a loop, before anything else of it: into the trusted copy if a strip is possible."""
        strip = self.region.strips.get(k)
        if strip is None or self.following:
            return
        rest, reach = self.variable(f"rest{k}"), self.variable(f"reach{k}")
        pause = self.let(f"load i64, ptr {rest}")
        self.put(f"br i1 {self.compare('eq', 'i64', pause, '0')}, label %look{k}, label %wait{k}")
        self.block(f"wait{k}")
        self.put(f"store i64 {self.let(f'sub i64 {pause}, 1')}, ptr {rest}")
        self.put(f"br label %judged{k}")
        self.block(f"look{k}")
        fuel = self.let("load i64, ptr %fuel")
        most = self.let(f"call i64 @llvm.umin.i64(i64 {fuel}, i64 {self.let(f'load i64, ptr {reach}')})")
        bounds = [self.bounds(walk) for walk in strip.walks]
        self.put(f"br label %try{k}")
        self.block(f"try{k}")
        passes, fewer = self.name(), self.name()
        self.put(f"{passes} = phi i64 [{most}, %look{k}], [{fewer}, %less{k}]")
        self.put(f"br i1 {self.compare('ult', 'i64', passes, str(FEWEST))}, label %short{k}, label %hope{k}")
        self.block(f"hope{k}")
        good = self.both(*[self.known(w, *b, passes) for w, b in zip(strip.walks, bounds, strict=True)])
        self.put(f"br i1 {good}, label %strip{k}, label %less{k}")
        self.block(f"less{k}")
        self.put(f"{fewer} = lshr i64 {passes}, 2")
        self.put(f"br label %try{k}")
        self.block(f"short{k}")
        self.put(f"store i64 {PAUSE}, ptr {rest}")
        self.put(f"store i64 {FIRST}, ptr {reach}")
        self.put(f"br label %judged{k}")
        self.block(f"strip{k}")
        self.put(f"store i64 {self.let(f'sub i64 {fuel}, {passes}')}, ptr %fuel")
        for name in ("left", "allotted"):
            self.put(f"store i64 {passes}, ptr {self.variable(name)}")
        for register in sorted(self.strip_registers[self.region.copy[k]]):
            bits, mask = self.held_before(register)
            self.put(f"store i32 {bits}, ptr {self.variable(f's{register}', 'i32')}")
            if self.masked(register):
                self.put(f"store i1 {mask or 'false'}, ptr {self.variable(f'm{register}', 'i1')}")
        self.put(f"br label %c{self.region.copy[k]}")
        self.block(f"judged{k}")
        self.slots = {}  # what was loaded on one way here is not known on the other

    def bounds(self, walk: Walk) -> tuple[str, str, str]:
        """(lowest, highest value on the way to the walk's register, or now in it: i64; whether it can be trusted)."""
        base = self.held_before(walk.register).bits
        values = [base]
        for flight in self.step.context.flights:
            if self.walker.register(flight) == walk.register and walk.register not in self.zero:
                held, on = self.flown(flight)
                values.append(held.bits if on is None else self.select(on, "i32", held.bits, base))
        if walk.added is not None:
            values = [self.let(f"add i32 {base}, {self.held_before(walk.added).bits}")]
        low = high = odd = values[0]
        for value in values[1:]:
            low = self.let(f"call i32 @llvm.umin.i32(i32 {low}, i32 {value})")
            high = self.let(f"call i32 @llvm.umax.i32(i32 {high}, i32 {value})")
            odd = self.let(f"or i32 {odd}, {value}")
        aligned = self.compare("eq", "i32", self.let(f"and i32 {odd}, {walk.align - 1}"), "0")
        if walk.ring:
            beyond = self.let(f"and i32 {self.let(f'xor i32 {low}, {high}')}, {number(-walk.ring, 32)}")
            one = self.compare("eq", "i32", beyond, "0")
            aligned = self.both(aligned, one) or aligned
            low = high = self.let(f"and i32 {low}, {number(-walk.ring, 32)}")
        return self.let(f"zext i32 {low} to i64"), self.let(f"zext i32 {high} to i64"), aligned

    def known(self, walk: Walk, low: str, high: str, trusted: str, passes: str) -> str:
        """Whether all that a walk reaches in so many passes may be accessed."""
        size = self.core.memory.size
        if walk.ring:
            first, last = low, self.let(f"add i64 {high}, {walk.ring}")
        else:
            first = self.let(f"add i64 {low}, {walk.low}")
            last = self.let(f"add i64 {high}, {walk.high}")
            if walk.down:
                first = self.let(f"add i64 {first}, {self.let(f'mul i64 {passes}, {walk.down}')}")
            if walk.up:
                last = self.let(f"add i64 {last}, {self.let(f'mul i64 {passes}, {walk.up}')}")
        inside = self.both(trusted, self.compare("sge", "i64", first, "0"), self.compare("sle", "i64", last, str(size)))
        assert inside is not None
        first, last = self.select(inside, "i64", first, "0"), self.select(inside, "i64", last, "0")
        want = UNDEFINED & DEFINED if walk.store else DEFINED
        held = self.let(f"call i1 @held(ptr %status, i64 {first}, i64 {last}, i8 {want})")
        return self.both(inside, held) or held

    def begin_pass(self) -> None:
        """At the head of a trusted copy: the strip may be at its end."""
        k = self.k
        head = self.head_of(k)
        left = self.count_of("left")
        self.put(f"br i1 {self.compare('eq', 'i64', left, '0')}, label %end{k}, label %more{k}{self.unlikely}")
        self.block(f"end{k}")
        self.count_strip(k, whole=True)
        more = self.let(f"shl i64 {self.count_of('allotted')}, 2")
        more = self.let(f"call i64 @llvm.umin.i64(i64 {more}, i64 {MOST})")
        self.put(f"store i64 {more}, ptr {self.variable(f'reach{head}')}")
        self.put(f"br label %c{head}")
        self.block(f"more{k}")
        self.put(f"store i64 {self.let(f'sub i64 {left}, 1')}, ptr {self.variable('left')}")

    def count_strip(self, k: int, whole: bool) -> None:
        """Count the passes of the strip that ends, give back those that were not run, and write the registers."""
        for register in sorted(self.copied):
            held = self.held_before(register)
            self.put(f"store i32 {held.bits}, ptr %r{register}")
            if self.masked(register):
                missing = self.select(held.mask, "i8", "15", "0") if held.mask else "0"
                self.put(f"store i8 {missing}, ptr %u{register}")
        left, allotted = self.count_of("left"), self.count_of("allotted")
        passes = self.let(f"sub i64 {allotted}, {left}")
        self.add_to_chain(k, passes)
        self.count_turning(k, passes, whole)
        fuel = self.let("load i64, ptr %fuel")
        self.put(f"store i64 {self.let(f'add i64 {fuel}, {left}')}, ptr %fuel")

    def count_turning(self, k: int, passes: str, whole: bool) -> None:
        """Count what taken branches cost in so many passes, the last of them run up to context ``k`` or whole."""
        first = self.region.chain[k]
        cycle = range(first, first + len(self.region.strips[self.head_of(k)].cycle))
        a_pass, last = Counter[str](), Counter[str]()
        for one in cycle:
            for cause, cycles in self.turning_costs(one):
                a_pass[cause] += cycles
                last[cause] += cycles * (whole or one < k)
        for cause, cycles in sorted(a_pass.items()):
            before = self.let(f"mul i64 {self.let(f'sub i64 {passes}, 1')}, {cycles}")
            self.stall(cause, self.let(f"add i64 {before}, {last[cause]}"))

    def leave_strip(self, k: int) -> None:
        """Out of a trusted copy in mid pass, from its context ``k``: behind it the pass is not run."""
        self.count_strip(k, whole=False)
        head = self.head_of(k)
        left = self.count_of("left")
        run = self.let(f"sub i64 {self.count_of('allotted')}, {left}")
        run = self.let(f"call i64 @llvm.umax.i64(i64 {run}, i64 {FIRST})")
        self.put(f"store i64 {run}, ptr {self.variable(f'reach{head}')}")

    def back_to_judged(self, k: int) -> None:
        """From a beat of a trusted copy that may break a rule to the same beat of the loop outside."""
        head, first = self.head_of(k), self.region.chain[k]
        self.leave_strip(k)
        self.count_edge("back")
        self.put(f"store i64 {PAUSE}, ptr {self.variable(f'rest{head}')}")
        self.put(f"br label %c{self.region.strips[head].cycle[k - first]}")

    def add_to_chain(self, k: int, passes: str) -> None:
        raise NotImplementedError
