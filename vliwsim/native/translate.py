"""A region of contexts as one LLVM function.

Registers, results in flight and the bits of branches in flight are local variables that LLVM turns into values; a
result in flight has a variable for each beat it may still have to go, and ageing is a move that LLVM removes. A beat
is written in two halves: first everything is judged and computed, and whatever is out of the ordinary leads back to
the stepper with the state as it was at the start of the beat; then all of it is done.
"""

from __future__ import annotations

from vliwsim.native.ahead import FIRST, Ahead
from vliwsim.native.beats import Beats
from vliwsim.native.charges import charge_function
from vliwsim.native.contexts import Context
from vliwsim.native.exchange import (
    BANK,
    CONTEXT,
    FRESH,
    FUEL,
    GIVEN_BACK,
    HALTED,
    LAST,
    OUT_OF_FUEL,
    PENALTY,
    REASON,
    STRADDLE,
    UNMAPPED,
    WAIT,
    Layout,
    layout,
)
from vliwsim.native.meanings import function
from vliwsim.native.region import Region

STALLS = {"bank": BANK, "wait": WAIT, "penalty": PENALTY, "straddle": STRADDLE, "fresh": FRESH}


class Translation(Ahead, Beats):
    """The text of one region's code. ``following``: undefined bytes are carried along instead of given back."""

    def __init__(self, region: Region, following: bool = False) -> None:
        super().__init__(region, following)
        self.entries = list(range(region.own)) if following else region.entries
        self.chain = list(range(len(region))) if following else region.chain
        self.heads = {copy: head for head, copy in region.copy.items()}
        flights = max(len(c.flights) for c in [*region.index, *self._edge()])
        turns = max(len(c.turns) for c in [*region.index, *self._edge()])
        firsts = sorted(set(self.chain))
        self.chain_counter = {first: k for k, first in enumerate(firsts)}
        self.edge_counter: dict[tuple[int, str], int] = {}
        for k, step in enumerate(region.steps):
            for kind, there in (("hold", step.waiting), ("fresh", step.refreshed)):
                if there is not None and not step.held:
                    self.edge_counter[k, kind] = len(firsts) + len(self.edge_counter)
            if k >= region.own and not following:
                for kind in ("out", "back") if step.ways > 1 else ("back",):
                    self.edge_counter[k, kind] = len(firsts) + len(self.edge_counter)
        self.note_index: dict[tuple[str, int, int, int | None], int] = {}
        for bundle in sorted({step.context.at for step in region.steps}):
            self._number_notes(bundle)
        counters = len(firsts) + len(self.edge_counter)
        self.layout: Layout = layout(len(self.core.register_names), flights, turns, counters, len(self.note_index))
        self.outside: dict[Context, int] = {}

    def _edge(self) -> list[Context]:
        """Contexts just outside the region."""
        return [c for step in self.region.steps for c in step.successors if c not in self.region.index]

    def _number_notes(self, bundle: int) -> None:
        for k, part in enumerate(self.ready[bundle].parts):
            if self.following:
                self.note_index["undefined-read", bundle, k, None] = len(self.note_index)
            if not self.core.interlocked and self.core.issue.early == "warn":
                registers = [r.register for r in part.effects.reads]
                if part.instruction.guard:
                    registers.append(part.instruction.guard.register)
                for register in dict.fromkeys(registers):
                    self.note_index["early-read", bundle, k, register] = len(self.note_index)

    # ---------------------------------------------------------------------------------------------------- the function

    def text(self, name: str) -> str:
        for k in range(self.region.own if self.following else len(self.region)):
            self.context(k)
        for k, context in enumerate(self.outside):
            self.block(f"outside{k}")
            self.put(f"store i64 {UNMAPPED}, ptr {self.header(REASON)}")
            self.put(f"br label %give{len(self.region) + k}")
            self.give_back(len(self.region) + k, context)
        self.leave()
        body = self.lines
        self.lines = []
        self.enter()
        made = [f"  {variable} = alloca {kind}" for variable, kind in sorted(self.variables.items())]
        lines = [*made, *self.lines, *body]
        calls = "\n".join(
            function(operation, halves, own, self.following, bare=bare)
            for (operation, halves, bare), own in self.functions.items()
        )
        charges = "\n".join(charge_function(self.core.memory, accesses, own) for accesses, own in self.charges.items())
        # the block of hand-over is always there, so that LLVM may keep counters out of loops
        block = f"ptr noalias writable dereferenceable({self.layout.bytes}) %io"
        head = f"define void @{name}({block}, ptr noalias %mem, ptr noalias %status) nounwind {{\nstart:\n"
        return f"{calls}\n{charges}\n{head}" + "\n".join(lines) + "\n}\n"

    def enter(self) -> None:
        """Variables filled, and the way to the context entered at."""
        at = self.layout
        self.put(f"%fuel0 = load i64, ptr {self.header(FUEL)}")
        self.put("store i64 %fuel0, ptr %fuel")
        for variable, kind in sorted(self.variables.items()):
            if variable.startswith(("%rest", "%reach", "%left", "%allotted")):
                self.put(f"store {kind} {FIRST if variable.startswith('%reach') else 0}, ptr {variable}")
        for cause in STALLS:
            self.put(f"store i64 0, ptr %stall.{cause}")
        for register in range(len(self.core.register_names)):
            value, mask = at.registers + 4 * register, at.masks + register
            if register in self.landing_registers:
                self.put(f"%r{register} = getelementptr inbounds i8, ptr %io, i64 {value}")
                self.put(f"%u{register} = getelementptr inbounds i8, ptr %io, i64 {mask}")
            elif register in self.read:
                self.put(f"%k{register} = load i32, ptr {self.place(value)}")
                missing = self.let(f"load i8, ptr {self.place(mask)}")
                same = f"or i8 {missing}, {missing}" if self.following else f"icmp ne i8 {missing}, 0"
                self.put(f"%q{register} = {same}")
        self.put(f"%at = load i64, ptr {self.header(CONTEXT)}")
        ways = " ".join(f"i64 {k}, label %enter{k}" for k in self.entries)
        self.put(f"switch i64 %at, label %nowhere [{ways}]")
        self.block("nowhere")
        self.put("unreachable")
        for k in self.entries:
            self.block(f"enter{k}")
            context = self.region.steps[k].context
            for j, flight in enumerate(context.flights):
                bits = self.let(f"load i32, ptr {self.place(at.values + 4 * j)}")
                self.put(f"store i32 {bits}, ptr {self.value_slot(flight.number, flight.beats)}")
                if self.following:
                    missing = self.let(f"load i8, ptr {self.place(at.value_masks + j)}")
                    self.put(f"store i8 {missing}, ptr {self.mask_slot(flight.number, flight.beats)}")
                if not flight.sure:
                    on = self.let(f"load i8, ptr {self.place(at.value_on + j)}")
                    on = self.compare("ne", "i8", on, "0")
                    self.put(f"store i1 {on}, ptr {self.on_slot(flight.number, flight.beats)}")
            for j, turn in enumerate(context.turns):
                if not turn.sure:
                    on = self.let(f"load i8, ptr {self.place(at.turn_on + j)}")
                    self.put(f"store i1 {self.compare('ne', 'i8', on, '0')}, ptr {self.turn_slot(turn)}")
            self.put(f"br label %c{k}")

    def context(self, k: int) -> None:
        """The blocks of context ``k``."""
        self.begin(k)
        self.probe(k)
        if self.strip is None and self.chain[k] == k:
            self.tally(self.chain_counter[k])
        elif self.chain[k] == k:
            self.begin_pass()
        self.beat()
        for label, way in self.ways_out.items():
            self.block(label)
            self.leave_strip(k)
            self.count_edge("out")
            self.put(f"br label %{way}")
        if f"leave{k}" in self.used:
            self.block(f"leave{k}")
            if self.strip is not None:
                self.back_to_judged(k)
                return
            self.put(f"store i64 {GIVEN_BACK}, ptr {self.header(REASON)}")
            self.put(f"br label %give{k}")
            self.give_back(k, self.step.context)
        elif k in self.region.heads and not self.step.leave:
            self.give_back(k, self.step.context)

    def refuel(self) -> None:
        """The head of a loop costs fuel; without any it gives back."""
        k = self.k
        if k not in self.region.heads:
            return
        fuel = self.let("load i64, ptr %fuel")
        self.put(f"br i1 {self.compare('eq', 'i64', fuel, '0')}, label %dry{k}, label %fed{k}{self.unlikely}")
        self.block(f"dry{k}")
        self.put(f"store i64 {OUT_OF_FUEL}, ptr {self.header(REASON)}")
        self.put(f"br label %give{k}")
        self.block(f"fed{k}")
        self.put(f"store i64 {self.let(f'sub i64 {fuel}, 1')}, ptr %fuel")

    def give_back(self, k: int, context: Context) -> None:
        """The block that hands a context's flights and turns over; of those that are sure only the values."""
        at = self.layout
        self.block(f"give{k}")
        self.put(f"store i64 {k}, ptr {self.header(CONTEXT)}")
        for j, flight in enumerate(context.flights):
            value = self.let(f"load i32, ptr {self.value_slot(flight.number, flight.beats)}")
            self.put(f"store i32 {value}, ptr {self.place(at.values + 4 * j)}")
            if self.following:
                missing = self.let(f"load i8, ptr {self.mask_slot(flight.number, flight.beats)}")
                self.put(f"store i8 {missing}, ptr {self.place(at.value_masks + j)}")
            if not flight.sure:
                on = self.let(f"load i1, ptr {self.on_slot(flight.number, flight.beats)}")
                on = self.let(f"zext i1 {on} to i8")
                self.put(f"store i8 {on}, ptr {self.place(at.value_on + j)}")
        for j, turn in enumerate(context.turns):
            if not turn.sure:
                on = self.let(f"load i1, ptr {self.turn_slot(turn)}")
                on = self.let(f"zext i1 {on} to i8")
                self.put(f"store i8 {on}, ptr {self.place(at.turn_on + j)}")
        self.put("br label %out")

    def leave(self) -> None:
        """The end of the function: fuel and stalls are handed over."""
        self.block("out")
        self.put(f"store i64 {self.let('load i64, ptr %fuel')}, ptr {self.header(FUEL)}")
        for cause, number in STALLS.items():
            value = self.let(f"load i64, ptr %stall.{cause}")
            self.put(f"store i64 {value}, ptr {self.header(number)}")
        self.put("ret void")

    # -------------------------------------------------------------------------------------------- what beats ask for

    def header(self, number: int) -> str:
        return self.place(8 * number)

    def place(self, offset: int) -> str:
        """The address of a part of the block that state is handed over in."""
        return self.let(f"getelementptr inbounds i8, ptr %io, i64 {offset}")

    def tally(self, counter: int) -> None:
        place = self.place(self.layout.counts + 8 * counter)
        more = self.let(f"add i64 {self.let(f'load i64, ptr {place}')}, 1")
        self.put(f"store i64 {more}, ptr {place}")

    def add_to_chain(self, k: int, passes: str) -> None:
        place = self.place(self.layout.counts + 8 * self.chain_counter[self.chain[k]])
        more = self.let(f"add i64 {self.let(f'load i64, ptr {place}')}, {passes}")
        self.put(f"store i64 {more}, ptr {place}")

    def count_edge(self, kind: str) -> None:
        counter = self.edge_counter.get((self.k, kind))
        if counter is not None:
            self.tally(counter)

    def noted(self, name: str, part: int, register: int | None) -> str:
        """Whether a note has been made."""
        index = self.note_index[name, self.step.context.at, part, register]
        return self.compare("ne", "i8", self.let(f"load i8, ptr {self.place(self.layout.noted + index)}"), "0")

    def way_to(self, context: Context) -> str:
        """The label of the block that begins ``context``, or leads there from a trusted copy."""
        index = self.region.index.get(context)
        if index is None:
            outside = self.outside.setdefault(context, len(self.outside))
        label = f"outside{outside}" if index is None else f"c{index}"
        if self.strip is None or (index is not None and self.region.chain[index] == self.strip):
            return label
        out = self.label("out")
        self.ways_out[out] = label
        return out

    def halted(self, last: str) -> None:
        if self.strip is not None:
            self.leave_strip(self.k)
            self.count_edge("out")
        self.put(f"store i64 {last}, ptr {self.header(LAST)}")
        self.put(f"store i64 {self.k}, ptr {self.header(CONTEXT)}")
        self.put(f"store i64 {HALTED}, ptr {self.header(REASON)}")
        self.put("br label %out")
