"""The next bundle is chosen, or the run ends."""

from __future__ import annotations

from vliwsim.machine.redirecting import redirect_freezes
from vliwsim.native.contexts import Flight, Turn
from vliwsim.native.executing import Executing
from vliwsim.native.landing import Landing
from vliwsim.native.variables import Held


class Redirecting(Landing, Executing):
    """Step 5 of a beat, and the drain; equals :mod:`vliwsim.machine.redirecting`."""

    turn_bits: dict[Turn, str]

    @property
    def certain_halt(self) -> bool:
        return any(self.guard_bits[k] is None for k in self.step.halts)

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
            there = self.region.index.get(target)
            within = self.strip is not None and there is not None and self.region.chain[there] == self.strip
            if not (within and self.turning_costs(self.k)):  # what a pass costs is counted where the strip ends
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
            self.put_register(register, self.now[register])
        self.halted(last)
        self.now, self.slots = kept
