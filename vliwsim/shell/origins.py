"""Where a value came from: operation by operation, back to inputs and constants.

The walk goes backwards in time through stretches of the run that are run again (:mod:`vliwsim.shell.trace`). It asks
byte by byte: of an operation only the inputs are followed that the asked bytes depend on
(:mod:`vliwsim.shell.influence`). Every operation is met once, after everything that uses it, so that the walk is linear
in the operations behind a value.
"""

from __future__ import annotations

import heapq

import attrs

from vliwsim.description.values import Value, join
from vliwsim.machine.parts import Part
from vliwsim.program.code import Mode
from vliwsim.shell.faults import unclear
from vliwsim.shell.history import History, Saved, Watch
from vliwsim.shell.influence import influence
from vliwsim.shell.nodes import Leaf, Origin, Source, Step, is_given
from vliwsim.shell.session import Session
from vliwsim.shell.trace import Beat, Landed, Store, Stretch, backwards

Key = tuple[int, int, int, bool]
"""Beat, bundle, instruction, and whether its updated base is meant: that depends on less than its results do."""
MOST = 30_000
"""Operations that one question follows, at most."""


@attrs.define(eq=False)
class _Waiting:
    """A source that waits for the latest landing on its register, or store to its byte, up to a beat."""

    bound: int
    mask: int
    source: Source


class Walk:
    """One walk backwards."""

    def __init__(self, session: Session, watch: Watch | None = None, most: int = MOST) -> None:
        self.session, self.watch, self.most = session, watch, most
        self.machine = session.machine
        self.root = Source("", "operand", None)
        self.steps: dict[Key, Step] = {}
        self._open: list[Key] = []
        self._registers: dict[int, list[_Waiting]] = {}
        self._bytes: dict[int, list[_Waiting]] = {}
        self._stopped = False
        self._elements: set[tuple[str, int]] = set()
        self._writers: dict[int, set[int]] = {}
        for site in self.machine.ready.sites:
            self._writers.setdefault(site.write.register, set()).add(site.bundle)
        self._storers = {
            k
            for k in range(len(session.kernel.program.bundles))
            for i in session.kernel.program.bundles[k].instructions
            if i.operation.access and i.operation.access.store
        }

    # ------------------------------------------------------------------------------------------------------- questions

    def of_register(self, register: int) -> Origin:
        """Where the value came from that the bundle of this cycle sees in a register."""
        session, moment = self.session, self.session.moment()
        self.root.name = session.layout.register(register)
        self.root.value = moment.registers[register]
        now = [f for f in moment.landings if f.register == register]
        if now and moment.hazard is None:
            for flight in now:
                self._demand_landing(self.root, register, flight.site.bundle, flight.site.instruction, flight, 15)
            sticky = all(f.site.write.what == "sticky" for f in now)
            if not sticky:
                return self._walk()
        self._wait(self._registers, register, _Waiting(moment.beat - 1, 15, self.root))
        return self._walk()

    def of_bytes(self, name: str, value: Value, address: int, size: int) -> Origin:
        """Where ``size`` bytes of memory came from, as they are before this cycle's bundle stores."""
        self.root.name, self.root.role, self.root.value = name, "memory", value
        for k in range(size):
            self._wait(self._bytes, address + k, _Waiting(self.session.moment().beat, 1, self.root))
        return self._walk()

    # ------------------------------------------------------------------------------------------------------- the walk

    def _walk(self) -> Origin:
        course: History | None = self.session.history.course(self.session.cycle)
        until = self.session.cycle
        while course is not None and not self._stopped:
            for stretch in backwards(self.session, course, until, self._quiet, self._look):
                self._take(stretch)
                if self._stopped or self._done():
                    break
            if course.parent is not None and not self._done():
                self._supposed(course)
            until, course = course.begin, course.parent
        self._end_at_start()
        steps = sorted(self.steps.values(), key=lambda s: (s.beat, s.bundle, s.instruction, s.updates))
        for step in steps:
            step.given = any(is_given(node) for source in step.sources for node in source.nodes)
        return Origin(self.root, steps, self._elements, not self._stopped)

    def _look(self, cycle: int) -> bool:
        if self.watch and self.watch(cycle):
            self._stopped = True
        return self._stopped

    def _done(self) -> bool:
        return not self._open and not self._registers and not self._bytes

    def _quiet(self, before: Saved, after: Saved) -> bool:
        """Nothing in this stretch is waited for: no such operation issues in it, no such register's result lands."""
        if self._open and -self._open[0][0] >= before["beat"]:
            return False
        wanted = {b for r in self._registers for b in self._writers.get(r, ())} | (
            self._storers if self._bytes else set()
        )
        if any(before["counts"][b] != after["counts"][b] for b in wanted):
            return False
        sites = self.machine.ready.sites
        return not any(
            sites[n].write.register in self._registers
            for batches in before["flight"].values()
            for numbers, _ in batches
            for n in numbers
        )

    def _take(self, stretch: Stretch) -> None:
        """Answer what this stretch can answer."""
        for register in list(self._registers):
            waiting = self._registers.pop(register)
            for one in waiting:
                self._find_landing(stretch, register, one)
        for byte in list(self._bytes):
            waiting = self._bytes.pop(byte)
            for one in waiting:
                self._find_store(stretch, byte, one)
        first = min(stretch.beats, default=1 << 62)
        while self._open and -self._open[0][0] >= first:
            minus, *rest = heapq.heappop(self._open)
            step = self.steps[-minus, *rest]  # type: ignore[index]
            self._expand(stretch, stretch.beats[step.beat], step)
            if len(self.steps) >= self.most:
                self._stopped = True
                return

    def _wait(self, table: dict[int, list[_Waiting]], key: int, one: _Waiting) -> None:
        """Put a question off to earlier stretches; questions of the same source and time are one."""
        for other in table.setdefault(key, []):
            if other.source is one.source and other.bound == one.bound:
                other.mask |= one.mask
                return
        table[key].append(one)

    def _find_landing(self, stretch: Stretch, register: int, one: _Waiting) -> None:
        landings = stretch.landings.get(register, ())
        for landed in reversed(landings):
            if landed.beat > one.bound:
                continue
            site = self.machine.ready.sites[landed.number]
            self._demand_landing(one.source, register, site.bundle, site.instruction, landed, one.mask)
            if site.write.what != "sticky":
                return
        self._wait(self._registers, register, one)

    def _demand_landing(
        self, source: Source, register: int, bundle: int, instruction: int, landed: object, mask: int
    ) -> None:
        number = getattr(landed, "number", None)
        site = self.machine.ready.sites[number] if number is not None else landed.site  # type: ignore[attr-defined]
        lands = landed.beat if isinstance(landed, Landed) else landed.lands  # type: ignore[attr-defined]
        updates = site.write.what == "update"
        step = self._demand(source, (lands - site.write.latency, bundle, instruction, updates))
        step.values[register] = landed.value  # type: ignore[attr-defined]
        if updates:
            self._ask(step, "base", 15)
        else:
            part = self.machine.ready[bundle].parts[instruction]
            odd = _odd_of_pair(part, site.write.operand, register)
            self._ask(step, site.write.operand, mask << 4 if odd else mask)

    def _find_store(self, stretch: Stretch, byte: int, one: _Waiting) -> None:
        for store in reversed(stretch.stores_by_byte.get(byte, ())):
            if store.beat < one.bound:
                self._demand_store(one.source, store, byte)
                return
        self._wait(self._bytes, byte, one)

    def _demand_store(self, source: Source, store: Store, byte: int) -> None:
        step = self._demand(source, (store.beat, store.bundle, store.instruction, False))
        little = self.session.kernel.core.memory.endianness == "little"
        offset = byte - store.address
        self._ask(step, "stored", 1 << (offset if little else store.size - 1 - offset))

    def _demand(self, source: Source, key: Key) -> Step:
        step = self.steps.get(key)
        if step is None:
            step = self.steps[key] = Step(*key[:3], updates=key[3])
            heapq.heappush(self._open, (-key[0], *key[1:]))
        if step not in source.nodes:
            source.nodes.append(step)
        return step

    @staticmethod
    def _ask(step: Step, output: str, mask: int) -> None:
        step.asked[output] = step.asked.get(output, 0) | mask

    # ------------------------------------------------------------------------------------------------------- expanding

    def _expand(self, stretch: Stretch, beat: Beat, step: Step) -> None:
        """Ask for everything that an operation used for what is asked of it."""
        part = self.machine.ready[beat.bundle].parts[step.instruction]
        registers = beat.registers
        step.cycle, step.counted, step.within = beat.cycle, beat.counted, beat.within
        if part.instruction.guard:
            guard = part.instruction.guard.register
            self._from_register(stretch, step, beat, "guard", "guard", guard, 15)
        reach = part.reach
        if reach:
            role = "operand" if step.updates else "address"
            self._from_register(stretch, step, beat, "base", role, reach.base, 15)
            stepped = step.updates or reach.mode is not Mode.AFTER  # [base then +step] is made of the base alone
            if stepped and reach.step < len(self.session.kernel.core.register_names):
                self._from_register(stretch, step, beat, "step", role, reach.step, 15)
        if step.updates:
            return
        inputs = [self._input(registers, wanted) for wanted in part.inputs]
        sizes = [self._size(part, k) for k in range(len(inputs))]
        reached = influence(part.operation, inputs, sizes, part.halves)
        outputs = part.operation.outputs
        for k in range(len(inputs)):
            mask = 0
            for byte, by_output in enumerate(reached[k]):
                if any(by_output[o] & step.asked.get(name, 0) for o, name in enumerate(outputs)):
                    mask |= 1 << byte
            if mask:
                self._from_input(stretch, step, beat, part, k, inputs[k], mask)
        access = part.operation.access
        if access and access.store and reach:
            address = reach.address(registers[reach.base], registers[reach.step])
            assert isinstance(address, int)
            step.stored = part.operation.evaluate(inputs, part.halves)[-1], address, access.bytes

    @staticmethod
    def _input(registers: list[Value], wanted: object) -> Value:
        index, pair = wanted.index, wanted.pair  # type: ignore[attr-defined]
        if index < 0:
            return 0
        return join(registers[index], registers[index + 1]) if pair else registers[index]

    @staticmethod
    def _size(part: Part, k: int) -> int:
        wanted = part.inputs[k]
        if wanted.name == "loaded" and part.operation.access:
            return part.operation.access.bytes
        return 8 if wanted.pair else 4

    def _from_input(
        self, stretch: Stretch, step: Step, beat: Beat, part: Part, k: int, value: Value, mask: int
    ) -> None:
        wanted = part.inputs[k]
        count = len(self.session.kernel.core.register_names)
        if wanted.name == "loaded" and wanted.index < 0:
            self._from_memory(stretch, step, beat, part, mask)
        elif wanted.index < 0:
            step.sources.append(Source("link", "operand", part.link, [Leaf("link", "the address behind the call")]))
        elif wanted.index >= count:
            step.sources.append(Source(wanted.name, "operand", value, [Leaf("constant", wanted.name, value)]))
        else:
            if mask & 15:
                self._from_register(stretch, step, beat, wanted.name, "operand", wanted.index, mask & 15)
            if mask >> 4:
                self._from_register(stretch, step, beat, wanted.name, "operand", wanted.index + 1, mask >> 4)

    def _from_register(
        self, stretch: Stretch, step: Step, beat: Beat, name: str, role: str, register: int, mask: int
    ) -> None:
        shown = self.session.layout.register(register)
        source = Source(shown, role, beat.registers[register])
        step.sources.append(source)
        self._find_landing(stretch, register, _Waiting(beat.beat, mask, source))

    def _from_memory(self, stretch: Stretch, step: Step, beat: Beat, part: Part, mask: int) -> None:
        reach, access = part.reach, part.operation.access
        assert reach is not None
        assert access is not None
        address = reach.address(beat.registers[reach.base], beat.registers[reach.step])
        assert isinstance(address, int)
        little = self.session.kernel.core.memory.endianness == "little"
        source = Source(f"memory at {address:#x}", "memory", None)
        step.sources.append(source)
        for k in range(access.bytes):
            if mask >> k & 1:
                byte = address + (k if little else access.bytes - 1 - k)
                self._find_store(stretch, byte, _Waiting(beat.beat, 1, source))

    # ------------------------------------------------------------------------------------------------------- the start

    def _supposed(self, course: History) -> None:
        """What was edited where this branch of time begins ends the walk."""
        for edit in course.edits:
            kind, key = edit
            table = self._registers if kind == "register" else self._bytes
            for one in table.pop(key, []):
                name = self.session.layout.register(key) if kind == "register" else f"byte {key:#x}"
                leaf = Leaf("supposed", f"{name} in cycle {course.begin}")
                if leaf not in one.source.nodes:
                    one.source.nodes.append(leaf)

    def _end_at_start(self) -> None:
        """What is still asked for was there from the start, or was not followed."""
        if self._stopped:
            rest = [one for table in (self._registers, self._bytes) for ones in table.values() for one in ones]
            for one in rest:
                if not any(isinstance(n, Leaf) and n.kind == "unfollowed" for n in one.source.nodes):
                    one.source.nodes.append(Leaf("unfollowed", "further back"))
            return
        for register, waiting in self._registers.items():
            for one in waiting:
                leaf = self._register_leaf(register)
                if leaf not in one.source.nodes:
                    one.source.nodes.append(leaf)
        for byte, waiting in sorted(self._bytes.items()):
            for one in waiting:
                leaf = self._byte_leaf(byte)
                if leaf not in one.source.nodes:
                    one.source.nodes.append(leaf)

    def _register_leaf(self, register: int) -> Leaf:
        setup = self.session.setup
        name = self.session.layout.register(register)
        value = setup.registers.get(register)
        if value is None:
            if name in self.session.kernel.core.zero_registers:
                return Leaf("constant", name, 0)
            return Leaf("undefined", f"{name} from the start")
        item = next((i for i in setup.kernel.items if i.register == register and i.kind != "returns"), None)
        if item is None:
            return Leaf("input", f"{name} as given", value)
        if item.size is not None:
            return Leaf("input", f"the address of {item.name}", value)
        return Leaf("input", f"{item.name} as given" if item.value is None else f"{item.name} as computed", value)

    def _byte_leaf(self, byte: int) -> Leaf:
        found = self.session.names.array_at(byte)
        if found is None:
            return Leaf("undefined", f"memory at {byte:#x} outside every array")
        array, index = found
        given = self.session.setup.arrays.get(array.name)
        if given is None:
            return Leaf("undefined", f"{array.name}[{index}] from the start")
        self._elements.add((array.name, index))
        raw = array.element.raw(given[index])
        return Leaf("element", f"{array.name}[{index}]", raw, array.name, index)


def _odd_of_pair(part: Part, operand: str, register: int) -> bool:
    """Whether a register is the odd one of a pair result."""
    registers = [w.register for w in part.effects.writes if w.operand == operand]
    return len(registers) == 2 and register == max(registers)


def maker(session: Session, what: str, watch: Watch | None = None) -> Step | None:
    """The operation that made the present value of a register or element, None where none did."""
    nodes = origin_of(session, what, watch, most=1).root.nodes
    made = [node for node in nodes if isinstance(node, Step) and node.cycle >= 0]
    return max(made, key=lambda step: step.beat) if made else None


def origin_of(session: Session, what: str, watch: Watch | None = None, most: int = MOST) -> Origin:
    """The origin of a register (by any of its names) or of one element ``y[3]``; raises ``Unclear``."""
    name, bracket, rest = what.strip().partition("[")
    walk = Walk(session, watch, most)
    if not bracket:
        if name in session.names.arrays:
            raise unclear(f"{name} is an array", "one element", f"why {name}[0]")
        return walk.of_register(session.names.register(name))
    array = session.names.array(name.strip())
    if not rest.endswith("]"):
        raise unclear(what.strip(), "a register, or an element such as y[3]")
    index, end = session.range_of(array, rest[:-1], None)
    assert end == index + 1
    size = array.element.bytes
    value = array.value(session.state, index)
    return walk.of_bytes(f"{array.name}[{index}]", value, array.start + index * size, size)
