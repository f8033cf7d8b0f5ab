"""The compiled loop over many cases. It knows no program: all it needs stands in a plan, a row of numbers.

For every case it makes registers and memory from what the plan says, runs plain code, goes on in code that follows
undefined bytes where the plain gives back, and writes a row of results. Counters are added to totals only where a case
has run through, so that the account of what it counted is whole.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from vliwsim.native import exchange
from vliwsim.native.text import Text

SIDE = ("function", "block", "counts", "counters", "weights", "totals", "stalls", "stalled", "left", "fuelled", "backs",
        "halts", "drains")  # fmt: skip
"""What the plan has of a translation: its function, block and counters; for each counter the beats it stands for and
its total; stall cycles of this case and of all; for each context the beats its chain counts too much when it is given
back, the counter that a head counts too much when fuel runs out (-1: it cannot be entered again), and how often it was
given back, halted in, and the drain there."""

PLAN = (*(f"plain.{name}" for name in SIDE), *(f"following.{name}" for name in SIDE),
        "memory", "status", "template", "spans", "spans.number", "rows", "row", "results", "result", "shared", "before",
        "image", "image.bytes", "masks", "masks.bytes", "registers.place", "masks.place", "handed", "origin",
        "registers", "registers.number", "pieces", "pieces.number", "values", "values.number",
        "arrays", "arrays.number", "ones", "chained", "stop", "slice", "fuel", "rest", "limit", "wanted")  # fmt: skip
"""The plan's 64-bit numbers, in order. Addresses of tables: ``spans`` of memory whose status is that of ``template``
(address, bytes, offset there), ``registers`` (number, offset, source), ``pieces`` (address, bytes, offset, source),
``values`` (register, mask of the bytes that matter, offset in the result), ``arrays`` (address, bytes, offset in the
result). A source is 0 for the case's row, 1 for what all share, 2 for the result before. ``origin``: for each of the
plain code's contexts the one that the following code has for it."""

INDEX = {name: k for k, name in enumerate(PLAN)}

REASON, CYCLES, DEFINED, DATA = 0, 8, 16, 24
"""Byte offsets in a row of results."""

STOPPED = 5
"""The reason of a case that was stopped from outside."""

CAUSES = range(exchange.BANK, exchange.FRESH + 1)


class Driver(Text):
    """Writes the loop."""

    def __init__(self) -> None:
        super().__init__()
        self.variables: list[str] = []

    # ------------------------------------------------------------------------------------------------ ways of writing

    def at(self, base: str, offset: int | str) -> str:
        return self.let(f"getelementptr i8, ptr {base}, i64 {offset}")

    def get(self, base: str, index: int | str, kind: str = "i64") -> str:
        """Number ``index`` behind ``base``."""
        return self.let(f"load {kind}, ptr {self.let(f'getelementptr {kind}, ptr {base}, i64 {index}')}, align 1")

    def set(self, base: str, index: int | str, value: str, kind: str = "i64") -> None:
        self.put(f"store {kind} {value}, ptr {self.let(f'getelementptr {kind}, ptr {base}, i64 {index}')}, align 1")

    def plan(self, name: str, kind: str = "i64") -> str:
        return self.get("%plan", INDEX[name], kind)

    def copy(self, to: str, source: str, size: str) -> None:
        self.put(f"call void @llvm.memcpy.p0.p0.i64(ptr {to}, ptr {source}, i64 {size}, i1 false)")

    def variable(self, name: str, first: str, kind: str = "i64") -> str:
        self.variables.append(f"  %{name} = alloca {kind}")
        self.put(f"store {kind} {first}, ptr %{name}")
        return f"%{name}"

    def join_to(self, variable: str, how: str, value: str, kind: str = "i64") -> None:
        before = self.let(f"load {kind}, ptr {variable}")
        self.put(f"store {kind} {self.let(f'{how} {kind} {before}, {value}')}, ptr {variable}")

    def go_if(self, test: str, yes: str, no: str) -> None:
        self.put(f"br i1 {test}, label %{yes}, label %{no}")

    @contextmanager
    def each(self, count: str) -> Iterator[str]:
        """A loop with the number of the round, from 0."""
        test, body, over = self.label("test"), self.label("body"), self.label("over")
        number = self.variable(test.replace("test.", "n"), "0")
        self.put(f"br label %{test}")
        self.block(test)
        here = self.let(f"load i64, ptr {number}")
        self.go_if(self.compare("slt", "i64", here, count), body, over)
        self.block(body)
        yield here
        self.put(f"store i64 {self.let(f'add i64 {here}, 1')}, ptr {number}")
        self.put(f"br label %{test}")
        self.block(over)

    def function(self, head: str) -> str:
        text = f"define {head} nounwind {{\nstart:\n" + "\n".join([*self.variables, *self.lines]) + "\n}\n"
        self.lines, self.variables = [], []
        return text

    # ------------------------------------------------------------------------------------------------------- the parts

    def text(self) -> str:
        sides = [self.sliced(name) + self.weighed(name) + self.closed(name) for name in ("plain", "following")]
        return "declare i32 @memcmp(ptr, ptr, i64)\n" + "".join(sides) + self.many()

    def sliced(self, side: str) -> str:
        """Run a translation until it ends, in slices between which a stop is noticed; its last reason."""
        own = {name: f"{side}.{name}" for name in SIDE}
        block, counts, stalls = (self.plan(own[name], "ptr") for name in ("block", "counts", "stalls"))
        self.put("br label %again")
        self.block("again")
        rest, slice_ = self.plan("rest"), self.plan("slice")
        fuel = self.let(f"call i64 @llvm.smin.i64(i64 {rest}, i64 {slice_})")
        self.set(block, exchange.FUEL, fuel)
        memory, status = self.plan("memory", "ptr"), self.plan("status", "ptr")
        self.put(f"call void {self.plan(own['function'], 'ptr')}(ptr {block}, ptr {memory}, ptr {status})")
        for k, cause in enumerate(CAUSES):
            self.set(stalls, k, self.let(f"add i64 {self.get(stalls, k)}, {self.get(block, cause)}"))
        used = self.let(f"sub i64 {fuel}, {self.get(block, exchange.FUEL)}")
        rest = self.let(f"sub i64 {rest}, {used}")
        self.set("%plan", INDEX["rest"], rest)
        reason = self.get(block, exchange.REASON)
        self.go_if(self.compare("eq", "i64", reason, str(exchange.OUT_OF_FUEL)), "dry", "ended")
        self.block("ended")
        self.put(f"ret i64 {reason}")
        self.block("dry")
        counter = self.get(self.plan(own["fuelled"], "ptr"), self.get(block, exchange.CONTEXT))
        over = self.let(f"or i1 {self.compare('slt', 'i64', counter, '0')}, {self.compare('sle', 'i64', rest, '0')}")
        self.go_if(over, "ended", "enterable")
        self.block("enterable")
        self.set(counts, counter, self.let(f"sub i64 {self.get(counts, counter)}, 1"))
        self.go_if(self.stopped(), "stopped", "again")
        self.block("stopped")
        self.put(f"ret i64 {STOPPED}")
        return self.function(f"internal i64 @sliced.{side}(ptr %plan)")

    def stopped(self) -> str:
        flag = self.let(f"load volatile i64, ptr {self.plan('stop', 'ptr')}")
        return self.compare("ne", "i64", flag, "0")

    def weighed(self, side: str) -> str:
        """The cycles that this case's counters and stalls stand for."""
        counts, weights, stalls = (self.plan(f"{side}.{name}", "ptr") for name in ("counts", "weights", "stalls"))
        total = self.variable("total", "0")
        with self.each(self.plan(f"{side}.counters")) as j:
            self.join_to(total, "add", self.let(f"mul i64 {self.get(counts, j)}, {self.get(weights, j)}"))
        found = self.let(f"load i64, ptr {total}")
        for k in range(len(CAUSES)):
            found = self.let(f"add i64 {found}, {self.get(stalls, k)}")
        self.put(f"ret i64 {found}")
        return self.function(f"internal i64 @weighed.{side}(ptr %plan)")

    def closed(self, side: str) -> str:
        """Add this case's counters and stalls to the totals, times ``factor``, and begin new ones."""
        pairs = (("counts", "totals", self.plan(f"{side}.counters")), ("stalls", "stalled", str(len(CAUSES))))
        for own, totals, count in pairs:
            here, there = self.plan(f"{side}.{own}", "ptr"), self.plan(f"{side}.{totals}", "ptr")
            with self.each(count) as j:
                more = self.let(f"mul i64 {self.get(here, j)}, %factor")
                self.set(there, j, self.let(f"add i64 {self.get(there, j)}, {more}"))
                self.set(here, j, "0")
        self.put("ret void")
        return self.function(f"internal void @closed.{side}(ptr %plan, i64 %factor)")

    def many(self) -> str:
        case, back = self.variable("case", "0"), self.variable("back", "-1")
        first = self.plan("before", "ptr")
        before = self.variable("before", first, "ptr")
        self.variables.append("  %bases = alloca [3 x ptr]")
        self.put("br label %test")
        self.block("test")
        number = self.let(f"load i64, ptr {case}")
        over = self.compare("sge", "i64", number, "%count")
        self.go_if(self.let(f"or i1 {over}, {self.stopped()}"), "over", "begin")
        self.block("over")
        self.put(f"ret i64 {number}")
        self.block("begin")
        row = self.at(self.plan("rows", "ptr"), self.let(f"mul i64 {number}, {self.plan('row')}"))
        result = self.at(self.plan("results", "ptr"), self.let(f"mul i64 {number}, {self.plan('result')}"))
        for k, base in enumerate((row, self.plan("shared", "ptr"), self.let(f"load ptr, ptr {before}"))):
            self.set("%bases", k, base, "ptr")
        self.fill()
        block = self.plan("plain.block", "ptr")
        self.set(block, exchange.CONTEXT, "0")
        self.set("%plan", INDEX["rest"], self.plan("fuel"))
        self.put(f"store i64 -1, ptr {back}")
        first_reason = self.let("call i64 @sliced.plain(ptr %plan)")
        self.go_if(self.compare("eq", "i64", first_reason, str(exchange.GIVEN_BACK)), "given", "join")
        self.block("given")
        there = self.compare("ne", "i64", self.plan("following.function"), "0")
        self.go_if(there, "follow", "want")
        self.block("want")
        self.set("%plan", INDEX["wanted"], "1")
        self.put("call void @closed.plain(ptr %plan, i64 0)")
        self.put(f"ret i64 {number}")
        self.block("follow")
        self.put(f"store i64 {self.get(block, exchange.CONTEXT)}, ptr {back}")
        other = self.plan("following.block", "ptr")
        self.copy(other, block, self.plan("handed"))
        own = self.get(self.plan("origin", "ptr"), self.let(f"load i64, ptr {back}"))
        self.set(other, exchange.CONTEXT, own)
        second_reason = self.let("call i64 @sliced.following(ptr %plan)")
        self.put("br label %join")
        self.block("join")
        reason = self.let(f"phi i64 [{first_reason}, %begin.over], [{second_reason}, %follow]")
        last = self.let(f"phi ptr [{block}, %begin.over], [{other}, %follow]")
        self.finish(reason, last, result, number)
        return self.function("i64 @many(ptr %plan, i64 %count)").replace("%begin.over", f"%{self.filled}")

    def fill(self) -> None:
        """Registers and memory of a case."""
        block = self.plan("plain.block", "ptr")
        registers = self.at(block, self.plan("registers.place"))
        self.copy(registers, self.plan("image", "ptr"), self.plan("image.bytes"))
        self.copy(self.at(block, self.plan("masks.place")), self.plan("masks", "ptr"), self.plan("masks.bytes"))
        table = self.plan("registers", "ptr")
        with self.each(self.plan("registers.number")) as j:
            register, offset, source = self.columns(table, j, 3)
            value = self.get(self.at(self.get("%bases", source, "ptr"), offset), 0, "i32")
            self.set(registers, register, value, "i32")
        status, memory = self.plan("status", "ptr"), self.plan("memory", "ptr")
        template, table = self.plan("template", "ptr"), self.plan("spans", "ptr")
        with self.each(self.plan("spans.number")) as j:
            address, size, offset = self.columns(table, j, 3)
            self.copy(self.at(status, address), self.at(template, offset), size)
        table = self.plan("pieces", "ptr")
        with self.each(self.plan("pieces.number")) as j:
            address, size, offset, source = self.columns(table, j, 4)
            self.copy(self.at(memory, address), self.at(self.get("%bases", source, "ptr"), offset), size)
        self.filled = self.lines[-1].rstrip(":")

    def columns(self, table: str, row: str, width: int) -> list[str]:
        first = self.let(f"mul i64 {row}, {width}")
        return [self.get(table, self.let(f"add i64 {first}, {k}")) for k in range(width)]

    def finish(self, reason: str, block: str, result: str, number: str) -> None:
        """Judge a case that ended, and write its result."""
        back = self.let("load i64, ptr %back")
        followed = self.compare("sge", "i64", back, "0")
        where = self.select(followed, "i64", back, "0")
        plain = self.let("call i64 @weighed.plain(ptr %plan)")
        less = self.select(followed, "i64", self.get(self.plan("plain.left", "ptr"), where), "0")
        self.put(f"br i1 {followed}, label %weigh, label %weighed")
        here = "join"
        self.block("weigh")
        more = self.let("call i64 @weighed.following(ptr %plan)")
        self.put("br label %weighed")
        self.block("weighed")
        more = self.let(f"phi i64 [0, %{here}], [{more}, %weigh]")
        drain = self.let(f"sub i64 {self.get(block, exchange.LAST)}, 1")
        drain = self.let(f"call i64 @llvm.smax.i64(i64 {drain}, i64 0)")
        cycles = self.let(f"add i64 {self.let(f'sub i64 {plain}, {less}')}, {self.let(f'add i64 {more}, {drain}')}")
        halted = self.compare("eq", "i64", reason, str(exchange.HALTED))
        within = self.compare("sle", "i64", cycles, self.plan("limit"))
        good = self.let(f"and i1 {halted}, {within}")
        told = self.select(good, "i64", reason, self.select(halted, "i64", str(exchange.OUT_OF_FUEL), reason))
        self.put(f"store i64 {told}, ptr {result}, align 1")
        self.put(f"store i64 {cycles}, ptr {self.at(result, CYCLES)}, align 1")
        self.put(f"store i64 0, ptr {self.at(result, DEFINED)}, align 1")
        self.put(f"br i1 {good}, label %good, label %bad")
        self.block("bad")
        self.close(followed, where, "0", drain, block)
        stop = self.compare("eq", "i64", reason, str(STOPPED))
        chained = self.compare("ne", "i64", self.plan("chained"), "0")
        self.go_if(self.let(f"or i1 {stop}, {chained}"), "give", "next")
        self.block("give")
        self.put(f"ret i64 {number}")
        self.block("good")
        defined = self.let(f"zext i1 {self.results(block, result)} to i64")
        self.put(f"store i64 {defined}, ptr {self.at(result, DEFINED)}, align 1")
        self.close(followed, where, defined, drain, block)
        self.put(f"store ptr {result}, ptr %before")
        unfit = self.compare("eq", "i64", defined, "0")
        chained = self.compare("ne", "i64", self.plan("chained"), "0")
        self.go_if(self.let(f"and i1 {unfit}, {chained}"), "give", "next")
        self.block("next")
        self.put(f"store i64 {self.let(f'add i64 {number}, 1')}, ptr %case")
        self.put("br label %test")

    def close(self, followed: str, where: str, factor: str, drain: str, block: str) -> None:
        """Add this case to the totals so many times: once or not at all."""
        close, closed = self.label("close"), self.label("closed")
        self.put(f"call void @closed.plain(ptr %plan, i64 {factor})")
        self.go_if(followed, close, closed)
        self.block(close)
        self.put(f"call void @closed.following(ptr %plan, i64 {factor})")
        backs = self.plan("plain.backs", "ptr")
        self.set(backs, where, self.let(f"add i64 {self.get(backs, where)}, {factor}"))
        self.put(f"br label %{closed}")
        self.block(closed)
        if factor != "0":
            self.halted(block, followed, factor, self.let(f"mul i64 {drain}, {factor}"))

    def halted(self, block: str, followed: str, times: str, drain: str) -> None:
        """Where it halted, and the drain there."""
        context = self.get(block, exchange.CONTEXT)
        for name, more in (("halts", times), ("drains", drain)):
            both = [self.plan(f"{side}.{name}", "ptr") for side in ("following", "plain")]
            table = self.select(followed, "ptr", *both)
            self.set(table, context, self.let(f"add i64 {self.get(table, context)}, {more}"))

    def results(self, block: str, result: str) -> str:
        """Write the outputs; whether all of them are defined."""
        registers = self.at(block, self.plan("registers.place"))
        masks = self.at(block, self.plan("masks.place"))
        missing = self.variable("missing", "0", "i32")
        table = self.plan("values", "ptr")
        with self.each(self.plan("values.number")) as j:
            register, wanted, offset = self.columns(table, j, 3)
            self.put(f"store i32 {self.get(registers, register, 'i32')}, ptr {self.at(result, offset)}, align 1")
            mask = self.let(f"zext i8 {self.get(masks, register, 'i8')} to i32")
            mask = self.let(f"and i32 {mask}, {self.let(f'trunc i64 {wanted} to i32')}")
            self.join_to(missing, "or", mask, "i32")
        memory, status, ones = (self.plan(name, "ptr") for name in ("memory", "status", "ones"))
        table = self.plan("arrays", "ptr")
        with self.each(self.plan("arrays.number")) as j:
            address, size, offset = self.columns(table, j, 3)
            self.copy(self.at(result, offset), self.at(memory, address), size)
            other = self.let(f"call i32 @memcmp(ptr {self.at(status, address)}, ptr {ones}, i64 {size})")
            self.join_to(missing, "or", other, "i32")
        return self.compare("eq", "i32", self.let(f"load i32, ptr {missing}"), "0")
