"""An interlocked bundle waits."""

from __future__ import annotations

from vliwsim.native.contexts import Context
from vliwsim.native.variables import Variables


class Waiting(Variables):
    """Step 2 of a beat; equals :mod:`vliwsim.machine.waiting`."""

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
