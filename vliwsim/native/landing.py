"""Results that are due reach their registers."""

from __future__ import annotations

from vliwsim.native.contexts import Flight
from vliwsim.native.variables import Held, Variables


class Landing(Variables):
    """Step 1 of a beat; equals :mod:`vliwsim.machine.landing`."""

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
            self.put_register(register, value)
            self.put(f"store i32 {value.bits}, ptr {self.value_slot(flight.number, 0)}")
            if self.following:
                self.put(f"store i8 {value.mask or '0'}, ptr {self.mask_slot(flight.number, 0)}")

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
