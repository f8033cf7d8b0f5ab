"""Bundles made ready for the machine: what can be known of each before it first issues."""

from __future__ import annotations

import attrs

from vliwsim.description.core import Link
from vliwsim.description.operations import Role
from vliwsim.machine.bundle_rules import fresh_operands, static_hazard
from vliwsim.machine.parts import Input, Part, Reach, WriteSite
from vliwsim.machine.rows import Rows, lay_out
from vliwsim.program.code import Address, Bundle, Immediate, Instruction, Mode, Program, Register
from vliwsim.program.effects import effects


@attrs.frozen
class Prepared:
    """A bundle, ready.

    ``static`` is what step 3 will complain of whatever happens: (instruction, rank in ROUND_ONE, found). ``fresh``:
    (instruction, register, link) of every crossing operand whose link stalls or rejects freshness. ``watch``: registers
    that may hold the bundle up or be read early, empty where neither is asked for. ``writes``: (latency, most results)
    pairs. ``rows`` is None where only the definition can take the bundle.
    """

    index: int
    bundle: Bundle
    parts: tuple[Part, ...]
    static: tuple[int, int, str] | None
    fresh: tuple[tuple[int, int, Link], ...]
    watch: tuple[int, ...]
    writes: tuple[tuple[int, int], ...]
    rows: Rows | None


class Preparation:
    """Prepares the bundles of one program, each once, when first asked for.

    ``to_run``: with the rows that the hot loop takes; who only looks at bundles does not need them.
    """

    def __init__(self, program: Program, *, to_run: bool = True) -> None:
        self.to_run = to_run
        self.program = program
        self.core = program.core
        self.sites: list[WriteSite] = []
        self.constants: list[int] = []
        self._constant_index: dict[int, int] = {}
        self._parts: list[tuple[Part, ...]] = []
        self._bundles: list[Prepared | None] = [None] * len(program.bundles)
        self.first_constant = len(self.core.register_names)
        self.constant(0)
        for index, bundle in enumerate(program.bundles):
            self._parts.append(tuple(self._part(index, k, i) for k, i in enumerate(bundle.instructions)))

    def __getitem__(self, index: int) -> Prepared:
        found = self._bundles[index]
        if found is None:
            found = self._bundles[index] = self._prepare(index)
        return found

    def constant(self, value: int) -> int:
        """Operand-file index of a constant."""
        index = self._constant_index.get(value)
        if index is None:
            index = self._constant_index[value] = self.first_constant + len(self.constants)
            self.constants.append(value)
        return index

    def _part(self, bundle: int, position: int, instruction: Instruction) -> Part:
        operation, core = instruction.operation, self.core
        found = effects(core, instruction)
        first = len(self.sites)
        self.sites.extend(WriteSite(bundle, position, write) for write in found.writes)
        numbers: dict[str, list[int]] = {}
        for k, write in enumerate(found.writes):
            numbers.setdefault(write.operand, []).append(first + k)
        inputs: dict[str, Input] = {}
        reach, target, target_register = None, None, None
        for operand, place in zip(operation.operands, instruction.places, strict=True):
            if isinstance(place, Address):
                base = numbers["base"][0] if place.mode is not Mode.OFFSET else None
                reach = Reach(place.base, self._index(place.step), place.mode, place.ring, base)
            elif operand.role is Role.TARGET:
                if isinstance(place, Register):
                    target_register = place.number
                else:
                    assert isinstance(place, Immediate)
                    target = self.program.index_at.get(place.value)
            else:
                half = place.half if isinstance(place, Register) else None
                inputs[operand.name] = Input(operand.name, self._index(place), operand.pair, half)
        wanted = tuple(inputs.get(name, Input(name, -1, False, None)) for name in operation.inputs)
        results = tuple(tuple(numbers[name]) for name in operation.outputs if name in numbers)
        return Part(
            instruction,
            found,
            wanted,
            range(first, len(self.sites)),
            results,
            reach,
            target,
            target_register,
            frozenset([place.value for place in instruction.targets if isinstance(place, Immediate)]) or None,
            self._link(bundle),
        )

    def _index(self, place: object) -> int:
        if isinstance(place, Register):
            return place.number
        assert isinstance(place, Immediate)
        return self.constant(place.value)

    def _link(self, bundle: int) -> int | None:
        """Address of the word that begins one branch latency behind ``bundle`` in program order."""
        program = self.program
        index = program.index_at_position.get(program.bundles[bundle].position + self.core.branch.latency)
        return None if index is None else program.bundles[index].address

    def _prepare(self, index: int) -> Prepared:
        parts, core = self._parts[index], self.core
        most: dict[int, int] = {}
        for part in parts:
            for write in part.effects.writes:
                most[write.latency] = most.get(write.latency, 0) + 1
        static = static_hazard(core, parts)
        rows = None if static or not self.to_run else lay_out(core, parts, self.constant(0))
        bundle = self.program.bundles[index]
        return Prepared(
            index, bundle, parts, static, fresh_operands(core, parts), self._watch(parts), tuple(most.items()), rows
        )

    def _watch(self, parts: tuple[Part, ...]) -> tuple[int, ...]:
        core = self.core
        if not core.interlocked and core.issue.early == "old":
            return ()
        watch: dict[int, None] = {}
        for part in parts:
            if part.instruction.guard:
                watch[part.instruction.guard.register] = None
            watch.update((read.register, None) for read in part.effects.reads)
            if core.interlocked:
                watch.update((write.register, None) for write in part.effects.writes)
        return tuple(watch)
