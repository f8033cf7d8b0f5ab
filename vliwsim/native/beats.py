"""One beat of a context as LLVM text: land, wait, read, execute, redirect, in the order of design section 3.2.

Nothing is done before everything is judged. What could break a rule, whatever rule, leaves for the stepper, which takes
the beat by definition and says what is wrong; so the order of judgement does not matter here.
"""

from __future__ import annotations

from vliwsim.native.reading import Reading
from vliwsim.native.redirecting import Redirecting
from vliwsim.native.variables import Held
from vliwsim.native.waiting import Waiting


class Beats(Waiting, Reading, Redirecting):
    """Writes the beats of a region's contexts."""

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

    def issue(self, guards: list[str | None]) -> None:
        """Execute, judge the redirects, and do it all."""
        self.guard_bits = guards
        self.accesses = []
        self.loaded = {}
        self.bases = {}
        for k, part in enumerate(self.parts):
            self.judge_operands(k, part)
            if part.reach:
                self.reach(k, part)
        results: dict[int, Held] = {}
        bits: dict[int, str | None] = {}
        self.stored = {}
        self.taken = {}
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

    def freeze(self, bank: tuple[str, str] | None) -> None:
        """Count the cycles that the beat's accesses and a fresh operand freeze."""
        costs = dict(zip(("bank", "wait"), bank, strict=True)) if bank else {}
        if self.fresh_stall is not None:
            costs["fresh"] = self.let(f"zext i1 {self.fresh_stall} to i64")
        for cause, cycles in costs.items():
            if cycles != "0":
                self.stall(cause, cycles)
