"""Undefined data: what may reach a guard, a count, a condition, a target, an address or an output.

Registers start undefined unless an input is in them; memory starts as the caller fills it. Results inherit it. A level
says how it may come about; what is in flight has one too, so that a read before a landing counts as what it gets.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from typing import NamedTuple

from vliwsim.check.inputs import Inputs
from vliwsim.check.spread import Spread
from vliwsim.description.operations import Kind, Operation
from vliwsim.description.values import Undefined
from vliwsim.flow.graph import Graph
from vliwsim.machine.parts import Part
from vliwsim.program.code import Mode

DEFINED, FROM_MEMORY, PERHAPS, SURELY = range(4)
"""Levels: never undefined; where memory is; on some data; wholly, for certain, on some path."""

SAMPLES = ((3, 5, 9), (0x80000001, 0x7FFF0002, 0x00010003))
"""Values beside an undefined operand, to find out whether a result is wholly undefined with it."""


class Use(NamedTuple):
    """An undefined register at a place that must not be: ``what`` of an instruction (None: a returned value)."""

    context: int
    instruction: int | None
    register: int
    what: str
    level: int
    sure: bool


class Definedness:
    """The domain of levels."""

    def __init__(self, graph: Graph, inputs: Inputs) -> None:
        self.graph, self.inputs = graph, inputs
        self._strict: dict[tuple[int, tuple[int | None, ...], int], tuple[bool, ...]] = {}

    def entry(self, register: int) -> int:
        return DEFINED if register in self.inputs.defined or register in self._zero else SURELY

    @property
    def _zero(self) -> frozenset[int]:
        core = self.graph.ready.core
        return frozenset(core.register_numbers[name] for name in core.zero_registers)

    def join(self, one: int, other: int) -> int:
        return max(one, other)

    def maybe(self, old: int, new: int) -> int:
        worst = max(old, new)
        return worst if min(old, new) == SURELY else min(worst, PERHAPS)

    def sticky(self, old: int, new: int) -> int:
        return max(old, new)

    def along(self, source: int, target: int, values: list[int]) -> list[int]:
        return values

    def issue(self, context: int, registers: Sequence[int]) -> Mapping[int, int]:
        sent: dict[int, int] = {}
        beat = self.graph.beats[context]
        assert beat is not None
        for part, on in zip(self._parts(context), beat.guards, strict=True):
            if on is not False:
                for number, level, _ in self.results(part, registers):
                    sent[number] = level
        return sent

    def _parts(self, context: int) -> tuple[Part, ...]:
        return self.graph.ready[self.graph.contexts[context].at].parts

    def results(self, part: Part, registers: Sequence[int]) -> Iterator[tuple[int, int, tuple[int, ...]]]:
        """(write number, level, registers that alone make it wholly undefined) of each result and update."""
        operation = part.operation
        levels = {k: max(registers[r] for r in self.input_registers(part, k)) for k in self.register_inputs(part)}
        for position, numbers in enumerate(part.results):
            if operation.kind is Kind.BRANCH:
                made: tuple[int, tuple[int, ...]] = DEFINED, ()
            else:
                made = self._level(part, position, levels, registers)
            for number in numbers:
                yield (number, *made)
        reach = part.reach
        if reach and reach.update is not None:
            behind = [r for r in (reach.base, reach.step) if r < self.graph.ready.first_constant]
            yield (
                reach.update,
                max(registers[r] for r in behind),
                tuple(r for r in behind if registers[r] == SURELY),
            )

    def _level(
        self, part: Part, position: int, levels: Mapping[int, int], registers: Sequence[int]
    ) -> tuple[int, tuple[int, ...]]:
        floor = FROM_MEMORY if part.operation.kind is Kind.LOAD else DEFINED
        worst = max(levels.values(), default=DEFINED)
        if worst < SURELY:
            return max(floor, worst), ()
        guilty: list[int] = []
        for k, level in levels.items():
            if level == SURELY and self.strict(part, k)[position]:
                guilty += [r for r in self.input_registers(part, k) if registers[r] == SURELY]
        return (SURELY if guilty else PERHAPS), tuple(guilty)

    def register_inputs(self, part: Part) -> list[int]:
        """The inputs that come from registers, by index."""
        return [k for k, i in enumerate(part.inputs) if 0 <= i.index < self.graph.ready.first_constant]

    @staticmethod
    def input_registers(part: Part, k: int) -> tuple[int, ...]:
        index = part.inputs[k].index
        return (index, index + 1) if part.inputs[k].pair else (index,)

    def strict(self, part: Part, k: int) -> tuple[bool, ...]:
        """For each output, whether it is wholly undefined where input ``k`` is, as far as samples tell."""
        key = part.operation.code, part.halves, k
        found = self._strict.get(key)
        if found is None:
            found = self._strict[key] = _strict(part.operation, part, k)
        return found

    def uses(self, context: int, registers: Sequence[int]) -> Iterator[Use]:
        """Undefined registers that the bundle of a context must not use."""
        beat = self.graph.beats[context]
        assert beat is not None
        if self._judges_guards(context):
            for k, part in enumerate(self._parts(context)):
                guard = part.instruction.guard
                if guard and registers[guard.register]:
                    yield Use(context, k, guard.register, "guard", registers[guard.register], True)
        for k, (part, on) in enumerate(zip(self._parts(context), beat.guards)):
            if on is not False:
                for register, what, certain in self._needed(part):
                    if registers[register]:
                        yield Use(context, k, register, what, registers[register], certain and on is True)

    def _judges_guards(self, context: int) -> bool:
        """Whether guards are judged in the beat: where a bundle issues, or waits with none of them pending."""
        beat, ready = self.graph.beats[context], self.graph.ready
        assert beat is not None
        if beat.guards or not ready.core.interlocked:
            return bool(beat.guards)
        guards = {p.instruction.guard.register for p in self._parts(context) if p.instruction.guard}
        flights = self.graph.contexts[context].flights
        return not any(f.beats and ready.sites[f.number].write.register in guards for f in flights)

    def _needed(self, part: Part) -> Iterator[tuple[int, str, bool]]:
        """(register, what, whether an undefined one is an error for certain) of what must be defined."""
        reach, first = part.reach, self.graph.ready.first_constant
        if reach:
            yield reach.base, "address", True
            if reach.mode is not Mode.AFTER and reach.step < first:
                yield reach.step, "address", True
        if part.branches:
            for k in self.register_inputs(part):
                for register in self.input_registers(part, k):
                    yield register, "count" if part.operation.count else "condition", True
            if part.target_register is not None:
                yield part.target_register, "target", not part.inputs

    def at_the_end(self, spread: Spread[int], context: int) -> Iterator[Use]:
        """Returned values that may be undefined where the bundle of a context halts."""
        registers, before, beat = spread.read[context], spread.before[context], self.graph.beats[context]
        assert registers is not None
        assert before is not None
        assert beat is not None
        landing = [
            (f.beats, f.number, value, not f.on)
            for f, value in zip(self.graph.contexts[context].flights, before[1], strict=True)
            if f.beats
        ]
        sent = self.issue(context, registers)
        for part, on in zip(self._parts(context), beat.guards, strict=True):
            for number in part.numbers:
                if number in sent:
                    sure = on is True and not part.operation.count
                    landing.append((spread.sites[number].write.latency, number, sent[number], sure))
        final = list(registers)
        for _, number, value, sure in sorted(landing, key=lambda item: item[:2]):
            spread.land(final, number, value, sure)
        certain = any(
            part.operation.kind is Kind.HALT and on is True
            for part, on in zip(self._parts(context), beat.guards, strict=True)
        )
        for name, register in self.inputs.outputs:
            if final[register]:
                yield Use(context, None, register, f"output {name}", final[register], certain)


def _strict(operation: Operation, part: Part, k: int) -> tuple[bool, ...]:
    outputs = [True] * len(operation.outputs)
    for sample in SAMPLES:
        values = [sample[j % 3] if not i.pair else sample[j % 3] << 32 | 7 for j, i in enumerate(part.inputs)]
        given = [v & 0xF if wanted.index < 0 else v for v, wanted in zip(values, part.inputs)]
        small = [v & 7 if _constant(operation, wanted.name) else v for v, wanted in zip(given, part.inputs)]
        wide = part.inputs[k].pair
        small[k] = Undefined(0, 0xFF if wide else 0xF, 8 if wide else 4)  # type: ignore[call-overload]
        for position, value in enumerate(operation.evaluate(small, part.halves)):
            whole = isinstance(value, Undefined) and value.unknown == (1 << value.size) - 1
            outputs[position] = outputs[position] and whole
    return tuple(outputs)


def _constant(operation: Operation, name: str) -> bool:
    return any(operand.name == name and operand.role.value == "constant" for operand in operation.operands)


def way(spread: Spread[int], domain: Definedness, use: Use) -> tuple[int, ...]:
    """Contexts from the entry to that of ``use``, along which its register is wholly undefined for certain."""
    graph = spread.graph
    before_of: dict[int, list[int]] = {}
    for index in range(len(graph.contexts)):
        if spread.before[index] is not None and graph.beats[index] is not None:
            for target in graph.successors(index):
                if target is not None:
                    before_of.setdefault(target, []).append(index)
    # places: a register as the beat begins, or something in flight; the register a use reads comes from one of them
    first = [(use.context, place) for place in _read_from(spread, use.context, use.register)]
    if use.instruction is None:
        first = [(use.context, ("register", r)) for r in range(len(spread.graph.ready.core.register_names))]
        first += [(use.context, ("flight", f.number, f.beats)) for f in graph.contexts[use.context].flights]
        first = [(c, place) for c, place in first if _level_at(spread, c, place) == SURELY] or first[:1]
    came: dict[tuple[int, tuple[object, ...]], tuple[int, tuple[object, ...]] | None] = dict.fromkeys(first)
    ahead = deque(first)
    while ahead:
        here = ahead.popleft()
        index, place = here
        if index == 0:
            path = [index]
            step = came[here]
            while step is not None:
                path.append(step[0])
                step = came[step]
            return tuple(path)
        for source in before_of.get(index, ()):
            for origin in _origins(spread, domain, source, place):
                if (source, origin) not in came:
                    came[source, origin] = here
                    ahead.append((source, origin))
    return graph.path(use.context)


def _level_at(spread: Spread[int], context: int, place: tuple[object, ...]) -> int:
    before = spread.before[context]
    assert before is not None
    if place[0] == "register":
        return before[0][place[1]]  # type: ignore[call-overload]
    flights = spread.graph.contexts[context].flights
    return next(v for f, v in zip(flights, before[1], strict=True) if (f.number, f.beats) == place[1:])


def _read_from(spread: Spread[int], context: int, register: int) -> list[tuple[object, ...]]:
    """Where the register comes from that a context's bundle reads, as far as that is wholly undefined."""
    places: list[tuple[object, ...]] = []
    landed = [
        f
        for f in spread.graph.contexts[context].flights
        if f.beats == 0 and spread.sites[f.number].write.register == register
    ]
    if not any(not f.on and spread.sites[f.number].write.what != "sticky" for f in landed):
        places.append(("register", register))
    places += [("flight", f.number, 0) for f in landed]
    return [place for place in places if _level_at(spread, context, place) == SURELY]


def _origins(
    spread: Spread[int], domain: Definedness, source: int, place: tuple[object, ...]
) -> Iterator[tuple[object, ...]]:
    """Places of context ``source`` that make ``place`` of its successor wholly undefined."""
    beat, registers = spread.graph.beats[source], spread.read[source]
    assert beat is not None
    if beat.did == "fork":
        if _level_at(spread, source, place) == SURELY:
            yield place
        return
    assert registers is not None
    if place[0] == "register":
        if registers[place[1]] == SURELY:  # type: ignore[call-overload]
            yield from _read_from(spread, source, place[1])  # type: ignore[arg-type]
        return
    _, number, beats = place
    site = spread.sites[number]  # type: ignore[call-overload]
    at = spread.graph.contexts[source].at
    if beat.guards and site.bundle == at and beats == site.write.latency - 1:
        for sent, level, guilty in domain.results(spread.graph.ready[at].parts[site.instruction], registers):
            if sent == number and level == SURELY:
                for register in guilty:
                    yield from _read_from(spread, source, register)
        return
    aged = ("flight", number, beats + 1)  # type: ignore[operator]
    if _level_at(spread, source, aged) == SURELY:
        yield aged
