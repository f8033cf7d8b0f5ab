"""What the core forbids and a bundle alone shows: slots, classes, guards, read ports, links.

The machine judges the same rules when it runs (design, section 3.2, step 3); here they become diagnostics.
"""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.description.core import Core
from vliwsim.program.assembly.operands import Ready
from vliwsim.program.assembly.slots import Crowd, SlotChooser, link_load
from vliwsim.program.source.complaints import Complaints

Placed = Sequence[tuple[Ready, int]]
"""A bundle's operations with their slots, in slot order, those of one slot as written."""


class Judge:
    """Judges the bundles of one source on one core."""

    def __init__(self, core: Core, chooser: SlotChooser, complaints: Complaints) -> None:
        self.core = core
        self.chooser = chooser
        self.complaints = complaints
        self._guards = frozenset(core.guard_numbers)
        self._ports = tuple(cluster.read_ports for cluster in core.clusters)
        self._fewest_ports = min(self._ports)

    def illegal(self, name: str, ready: Ready, found: str, allowed: str, remedy: str = "") -> None:
        self.complaints.add(name, ready.call.mnemonic.where, found, allowed, remedy, kind="illegal")

    def judge(self, placed: Placed) -> None:
        """Tell everything that is illegal about one bundle."""
        taken: set[int] = set()
        pinned = False
        for ready, slot in placed:
            if slot in taken:
                self._slot_taken(ready, slot, placed)
            taken.add(slot)
            pinned = pinned or ready.pin is not None
            if ready.guard and ready.guard.register not in self._guards:
                self._guard(ready)
        if pinned:
            for ready, slot in placed:
                if ready.pin is not None:
                    self._pin(ready, slot)
        self._read_ports(placed)
        self._links(placed)

    def _slot_taken(self, ready: Ready, slot: int, placed: Placed) -> None:
        taken = {other for _, other in placed}
        others = [k for _, k in self.chooser.fitting(ready) if k not in taken]
        first = next(other for other, where in placed if where == slot)
        name = self.core.slots[slot].name
        found = f"{ready.operation.name} in {name}, where {first.operation.name} (line {first.call.mnemonic.line}) is"
        remedy = f"on {self.core.slots[others[0]].name}" if others else "another beat"
        self.illegal("slot-taken", ready, found, "one operation a slot a bundle", remedy)

    def _guard(self, ready: Ready) -> None:
        assert ready.guard
        assert ready.call.guard
        name = self.core.register_names[ready.guard.register]
        allowed = "guards " + (" ".join(self.core.guards) or "are not allowed on this core")
        found = f"guard {name}"
        self.complaints.add("guard-register", ready.call.guard.where, found, allowed, kind="illegal")

    def _pin(self, ready: Ready, slot: int) -> None:
        """A pin the slot cannot serve."""
        core, call = self.core, ready.call
        unit, home = core.slots[slot], core.slot_clusters[slot]
        others = [core.slots[k].name for _, k in self.chooser.fitting(ready)]
        remedy = f"on {others[0]}" if others else ""
        if ready.operation.operation_class not in unit.classes:
            found = f"{ready.operation.name} ({ready.operation.operation_class}) in {unit.name}"
            self.illegal("slot-class", ready, found, f"{unit.name} executes {' '.join(unit.classes)}", remedy)
        for register, _, _ in ready.writes:
            if core.register_clusters[register] != home:
                name = core.register_names[register]
                found = f"{name} written from {unit.name}"
                self.illegal("links", ready, found, f"results of {unit.name} in cluster {unit.cluster}", remedy)
                return
        for register, operand in ready.reads:
            source = core.register_clusters[register]
            if source == home:
                continue
            name = core.register_names[register]
            if (source, home) not in core.link_table:
                allowed = f"links to {unit.cluster} from {self._sources(home)}"
                self.illegal("links", ready, f"{name} read by {unit.name}", allowed, remedy)
                return
            if operand not in unit.crossing:
                found = f"{name} as {operand} of {call.mnemonic.text} in {unit.name}"
                allowed = f"over a link in {unit.name}: {' '.join(unit.crossing) or 'nothing'}"
                self.illegal("links", ready, found, allowed, remedy)
                return

    def _sources(self, home: int) -> str:
        names = [self.core.clusters[a].name for a, b in self.core.link_table if b == home]
        return " ".join(names) or "nowhere"

    def _read_ports(self, placed: Placed) -> None:
        reads = sum([len(ready.reads) for ready, _ in placed])
        if reads <= self._fewest_ports:
            return
        seen: dict[int, set[int]] = {}
        for ready, _ in placed:
            for register, _ in ready.reads:
                cluster = self.core.register_clusters[register]
                registers = seen.setdefault(cluster, set())
                registers.add(register)
                if len(registers) > self._ports[cluster]:
                    name, ports = self.core.clusters[cluster].name, self._ports[cluster]
                    total = {
                        other_register
                        for other, _ in placed
                        for other_register, _ in other.reads
                        if self.core.register_clusters[other_register] == cluster
                    }
                    found = f"{len(total)} registers of {name} read in one bundle"
                    self.illegal("read-ports", ready, found, f"{ports} read ports in cluster {name}")
                    return

    def _links(self, placed: Placed) -> None:
        for pair, carried in link_load(self.core, placed).items():
            link = self.core.link_table[pair]
            if len(carried) > link.operands:
                ready = placed[carried[link.operands][0]][0]
                names = " ".join(self.core.register_names[register] for _, register in carried)
                found = f"{len(carried)} operands from {link.source} to {link.reader}: {names}"
                shared = ", one register read several times counting once" if link.shared else ""
                allowed = f"{link.operands} a bundle{shared}"
                self.illegal("links", ready, found, allowed)

    def no_slot(self, bundle: Sequence[Ready], crowds: Sequence[Crowd]) -> None:
        """Tell which operations compete for which slots, and the guards that are not allowed."""
        for ready in bundle:
            if ready.guard and ready.guard.register not in self._guards:
                self._guard(ready)
        pins = {ready.pin: ready for ready in bundle if ready.pin is not None}
        for crowd in crowds:
            rivals = [bundle[k] for k in crowd.operations]
            if len(rivals) == 1 and not self.chooser.fitting(rivals[0]):
                self._nowhere(rivals[0])
            else:
                self._crowded(rivals, crowd, pins)

    def _crowded(self, rivals: list[Ready], crowd: Crowd, pins: dict[int, Ready]) -> None:
        names = [slot.name for slot in self.core.slots]
        pinned = sorted({k for ready in rivals for _, k in self.chooser.fitting(ready)} & pins.keys())
        who = ", ".join(f"{ready.operation.name} (line {ready.call.mnemonic.line})" for ready in rivals)
        if crowd.slots:
            found = f"{len(rivals)} operations compete for {' '.join(names[k] for k in crowd.slots)}: {who}"
            allowed = f"{len(crowd.slots)} of them in one bundle"
        else:
            found, allowed = f"no slot left for {who}", "one operation a slot a bundle"
        if pinned:
            told = ", ".join(
                f"{names[k]} to {pins[k].operation.name} (line {pins[k].call.mnemonic.line})" for k in pinned
            )
            found += f"; pinned: {told}"
        self.illegal("no-slot", rivals[-1], found, allowed, "one of them in another beat")

    def _nowhere(self, ready: Ready) -> None:
        """An operation that no slot of the core can carry out, even alone."""
        core, operation = self.core, ready.operation
        able = [slot.name for slot in core.slots if operation.operation_class in slot.classes]
        if not able:
            classes = sorted({name for slot in core.slots for name in slot.classes})
            found = f"{operation.name} is {operation.operation_class}, which no slot of {core.name} executes"
            self.illegal("no-slot", ready, found, "classes " + " ".join(classes))
            return
        written = [core.register_names[register] for register, _, _ in ready.writes]
        read = [core.register_names[register] for register, _ in ready.reads]
        parts = [f"writes {' '.join(written)}"] if written else []
        parts += [f"reads {' '.join(read)}"] if read else []
        found = f"{operation.name} {' and '.join(parts)}, which no slot reaches together"
        allowed = f"{' '.join(able)}: results in its own cluster, other clusters' operands where a link carries them"
        self.illegal("no-slot", ready, found, allowed, "a move to the slot's cluster first")
