"""The memory rules, as far as addresses are known without input: alignment, and how far apart accesses are."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from itertools import combinations
from typing import NamedTuple

from vliwsim.check.inputs import Inputs
from vliwsim.check.residues import UNKNOWN, WHOLE, Residue, constant, lowest_bit
from vliwsim.description.core import Memory
from vliwsim.description.language.tree import Binary, Input
from vliwsim.description.operations import Kind, Operation
from vliwsim.flow.follow import WHOLE as WHOLE_TYPES
from vliwsim.flow.follow import bare, telling
from vliwsim.flow.graph import Graph
from vliwsim.machine.parts import Part
from vliwsim.program.code import Mode


class Access(NamedTuple):
    """A guard-on access of a context's bundle, for certain (``sure``) or perhaps."""

    instruction: int
    address: Residue
    bytes: int
    store: bool
    sure: bool


class Doubt(NamedTuple):
    """A memory rule that a bundle breaks for certain (``sure``), or that its accesses do not decide."""

    rule: str
    context: int
    instructions: tuple[int, ...]
    sure: bool
    detail: str


class Addresses:
    """The domain of residues."""

    def __init__(self, graph: Graph, inputs: Inputs) -> None:
        self.graph, self.inputs = graph, inputs
        ready = graph.ready
        self.zero = {ready.core.register_numbers[name] for name in ready.core.zero_registers}
        self._sign: dict[int, int] = {}

    def entry(self, register: int) -> Residue:
        return constant(0) if register in self.zero else self.inputs.residues.get(register, UNKNOWN)

    def join(self, one: Residue, other: Residue) -> Residue:
        if one.symbol != other.symbol:
            one, other = self.inputs.absolute(one), self.inputs.absolute(other)
        return one.either(other)

    def maybe(self, old: Residue, new: Residue) -> Residue:
        return self.join(old, new)

    def sticky(self, old: Residue, new: Residue) -> Residue:
        return UNKNOWN

    def along(self, source: int, target: int, values: list[Residue]) -> list[Residue]:
        return values

    def issue(self, context: int, registers: Sequence[Residue]) -> Mapping[int, Residue]:
        sent: dict[int, Residue] = {}
        beat = self.graph.beats[context]
        assert beat is not None
        for part, on in zip(self.graph.ready[self.graph.contexts[context].at].parts, beat.guards, strict=True):
            if on is False:
                continue
            for numbers in part.results:
                sent.update(dict.fromkeys(numbers, UNKNOWN))
            if len(part.results) == 1 and len(part.results[0]) == 1:
                sent[part.results[0][0]] = self._result(part, registers)
            reach = part.reach
            if reach and reach.update is not None:
                moved = self._operand(reach.base, registers).moved(self._operand(reach.step, registers))
                sent[reach.update] = moved.within(reach.ring) if reach.ring else moved
        return sent

    def _operand(self, index: int, registers: Sequence[Residue]) -> Residue:
        first = self.graph.ready.first_constant
        return constant(self.graph.ready.constants[index - first]) if index >= first else registers[index]

    def _result(self, part: Part, registers: Sequence[Residue]) -> Residue:
        operation = part.operation
        sign = self._sign.get(operation.code)
        if sign is None:
            sign = self._sign[operation.code] = sum_or_difference(operation)
        if sign == 2:
            return self._operand(part.inputs[0].index, registers)
        if sign:
            one, other = (self._operand(i.index, registers) for i in part.inputs)
            return one.moved(other, sign)
        return UNKNOWN

    def accesses(self, context: int, registers: Sequence[Residue]) -> list[Access]:
        """The accesses of a context's bundle."""
        found = []
        beat = self.graph.beats[context]
        assert beat is not None
        for k, (part, on) in enumerate(zip(self.graph.ready[self.graph.contexts[context].at].parts, beat.guards)):
            access, reach = part.operation.access, part.reach
            if access and reach and on is not False:
                address = self._operand(reach.base, registers)
                if reach.mode is not Mode.AFTER:
                    address = address.moved(self._operand(reach.step, registers))
                found.append(Access(k, address, access.bytes, access.store, on is True))
        return found

    def doubts(self, context: int, registers: Sequence[Residue]) -> Iterator[Doubt]:
        """What the accesses of a context break, or may break."""
        accesses, memory = self.accesses(context, registers), self.graph.ready.core.memory
        for access in accesses:
            if memory.misaligned == "reject":
                yield from self._alignment(context, access)
            if not self._inside(access):
                yield Doubt("out-of-array", context, (access.instruction,), False, "")
        parts = self.graph.ready[self.graph.contexts[context].at].parts
        for one, other in combinations(accesses, 2):
            if opposite(parts[one.instruction], parts[other.instruction]):
                continue
            if one.store and other.store:
                yield from self._stores(context, one, other)
            if memory.conflict == "reject" and not self._apart_in_banks(one, other, memory):
                yield Doubt("bank-conflict", context, (one.instruction, other.instruction), False, "")

    def _alignment(self, context: int, access: Access) -> Iterator[Doubt]:
        address = self.inputs.absolute(access.address)
        modulus = min(address.modulus, access.bytes)
        if address.offset % modulus:
            detail = f"{address.offset % modulus} bytes off a multiple of {access.bytes}"
            yield Doubt("misaligned", context, (access.instruction,), access.sure, detail)
        elif modulus < access.bytes:
            detail = f"known to be a multiple of {modulus}" if modulus > 1 else ""
            yield Doubt("misaligned", context, (access.instruction,), False, detail)

    def _inside(self, access: Access) -> bool:
        """Whether an access is inside its array, or for a load in what its ``over`` declares, for certain."""
        address = access.address
        array = self.inputs.arrays.get(address.symbol or "")
        if array is None or address.modulus != WHOLE:
            return False
        return address.offset + access.bytes <= array.least + (0 if access.store else array.over)

    def _stores(self, context: int, one: Access, other: Access) -> Iterator[Doubt]:
        apart = self._distance(one, other)
        if apart.offset >= other.bytes and apart.offset + one.bytes <= apart.modulus:
            return
        same = apart.modulus == WHOLE and one.sure and other.sure
        yield Doubt("store-twice", context, (one.instruction, other.instruction), same, "")

    def _distance(self, one: Access, other: Access) -> Residue:
        """``one`` less ``other``, relative to nothing."""
        if one.address.symbol == other.address.symbol:
            return one.address.moved(other.address, -1)
        return self.inputs.absolute(one.address).moved(self.inputs.absolute(other.address), -1)

    def _apart_in_banks(self, one: Access, other: Access, memory: Memory) -> bool:
        """Whether two accesses touch different banks for certain."""
        width, around = memory.bank_width, memory.banks * memory.bank_width
        if memory.banks == 1 or lowest_bit(around) != around:
            return False
        banks = []
        for access in (one, other):
            address = self.inputs.absolute(access.address)
            if address.modulus < around:
                break
            last = address.offset + access.bytes - 1
            banks.append({word % memory.banks for word in range(address.offset // width, last // width + 1)})
        if len(banks) == 2:
            return not banks[0] & banks[1]
        apart = self._distance(one, other).within(around)
        # whole words apart: wherever the first begins in its word, the other begins alike
        if apart.modulus < around or apart.offset % width:
            return False
        aligned = [self.inputs.absolute(a.address) for a in (one, other)]
        if any(a.modulus < min(width, lowest_bit(width)) or a.offset % width for a in aligned):
            return False
        first = apart.offset // width
        touched = {(first + k) % memory.banks for k in range(-(-one.bytes // width))}
        return not touched & set(range(-(-other.bytes // width)))


def opposite(one: Part, other: Part) -> bool:
    """Whether the guards of two instructions of a bundle exclude each other by how they are written."""
    a, b = one.instruction.guard, other.instruction.guard
    return a is not None and b is not None and a.register == b.register and a.negated != b.negated


def sum_or_difference(operation: Operation) -> int:
    """1 for an operation that adds its two inputs, -1 for one that subtracts, 2 for a copy, 0 for any other."""
    if telling(operation) == "copy":
        return 2
    if operation.kind is not Kind.COMPUTE or len(operation.inputs) != 2:
        return 0
    if any(operand.half or operand.pair or operand.type not in WHOLE_TYPES[:2] for operand in operation.operands):
        return 0
    statements = operation.meaning.statements  # read from its text when first asked for: the last thing to ask
    if len(statements) != 1 or statements[0].lane is not None:
        return 0
    node = bare(statements[0].value)
    if not isinstance(node, Binary) or node.operator not in "+-":
        return 0
    names = [
        part.name if isinstance(part, Input) and part.lane is None else ""
        for part in (bare(node.left), bare(node.right))
    ]
    return (1 if node.operator == "+" else -1) if tuple(names) == tuple(operation.inputs) else 0
