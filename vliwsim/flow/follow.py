"""Which registers' values are followed, and what operations make of them.

Followed are registers that decide something: guards, ``count`` registers, branch operands and indirect targets, and
what they are copied or told from. Of the operations only what their meaning says plainly is known: a copy, a constant,
a comparison with zero, a value passed where another is (not) zero, a count, a link; any other result is a value of
its own.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

from vliwsim.description.language.tree import INTEGER, Choose, Compare, Fit, Input, Node, Number
from vliwsim.description.operations import Kind, Operation
from vliwsim.flow.values import ALWAYS, Condition, Constant, Identity, Knowledge, Known, Literal, literal
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation

COUNTED_OUT = 64
"""Constants up to this are counted down exactly; larger ones become values of which nothing is known."""


WHOLE = ("i32", "u32", "f32")
"""Types of operands that are a whole register and nothing else."""
OTHER = {"zero": "nonzero", "nonzero": "zero"}


class Values(Protocol):
    """What a step offers: values of followed registers, knowledge, and new identities."""

    knowledge: Knowledge

    def value(self, register: int) -> Known: ...

    def fresh_identity(self) -> Identity: ...


class Follow:
    """The registers of one program that are followed: ``registers`` in order, ``index`` their places.

    ``addresses``: those among them that indirect branches go by, and what these are copied from.
    """

    def __init__(self, ready: Preparation) -> None:
        self.ready = ready
        followed: set[int] = set()
        parts = [part for index in range(len(ready.program.bundles)) for part in ready[index].parts]
        for part in parts:
            if part.instruction.guard:
                followed.add(part.instruction.guard.register)
            if part.branches:
                followed.update(i.index for i in part.inputs if 0 <= i.index < ready.first_constant)
                if part.target_register is not None:
                    followed.add(part.target_register)
        self.registers = tuple(sorted(self.origins(parts, followed)))
        self.index = {register: k for k, register in enumerate(self.registers)}
        targets = {part.target_register for part in parts if part.target_register is not None}
        self.addresses = self.origins(parts, targets) if targets else targets

    def origins(self, parts: Sequence[Part], registers: set[int]) -> set[int]:
        """The registers, and all that they are copied or told from."""
        found = set(registers)
        while True:
            more = {
                part.inputs[source].index
                for part in parts
                if len(part.results) == 1 and part.effects.writes[0].register in found
                for source in told_from(part.operation)
            }
            more = {r for r in more if 0 <= r < self.ready.first_constant} - found
            if not more:
                return found
            found |= more

    def operand(self, values: Values, part: Part, source: int) -> Known:
        """The value of an input: of a followed register, or a constant."""
        wanted = part.inputs[source]
        if wanted.index >= self.ready.first_constant:
            return Constant(self.ready.constants[wanted.index - self.ready.first_constant])
        return values.value(wanted.index) if wanted.index in self.index else values.fresh_identity()

    def result(self, values: Values, part: Part) -> tuple[Known | None, Known | None]:
        """(value of the first result where it is known for what it is, else None; what a count counts down)."""
        operation = part.operation
        if operation.count:
            old = self.operand(values, part, 0)
            return self.counted_down(values, old), old
        if operation.kind is Kind.BRANCH:
            return (None if part.link is None else Constant(part.link)), None
        if not part.results or not any(w.register in self.index for w in part.effects.writes):
            return None, None
        kind = telling(operation)
        if kind is None:
            return None, None
        value = self.operand(values, part, 0)
        if kind == "copy":
            return value, None
        if kind.startswith("passed"):
            return self.passed(values, value, literal(self.operand(values, part, 1), kind == "passed nonzero")), None
        return self.compared(values, value, kind), None

    @staticmethod
    def counted_down(values: Values, old: Known) -> Known:
        if isinstance(old, Constant):
            if old.bits > COUNTED_OUT:
                return values.fresh_identity()
            return Constant(max(0, old.bits - 1))
        new = values.fresh_identity()
        values.knowledge.imply(new, [Literal(old, True)])
        return new

    @staticmethod
    def compared(values: Values, value: Known, kind: str) -> Known:
        """1 where a value is (not) zero, else 0: known only where the value is."""
        nonzero = kind == "nonzero"
        if isinstance(value, Constant):
            return Constant(int((value.bits != 0) == nonzero))
        known = values.knowledge.facts.get(value)
        if known is not None:
            return Constant(int(known == nonzero))
        if nonzero:
            return value
        new = values.fresh_identity()
        values.knowledge.imply(new, [Literal(value, False)])
        return new

    @staticmethod
    def passed(values: Values, value: Known, where: Condition | None) -> Known:
        """``value`` where a condition holds, else 0."""
        if where is None or value == Constant(0):
            return Constant(0)
        if not where:
            return value
        new = values.fresh_identity()
        values.knowledge.imply(new, [*where, *([] if isinstance(value, Constant) else [Literal(value, True)])])
        return new

    def taken(self, values: Values, part: Part) -> Condition | None:
        """The condition that a guard-on branch is taken; None where it is not for certain."""
        operation = part.operation
        if operation.inputs in ((), ("link",)):
            return ALWAYS
        if operation.count:
            return literal(self.operand(values, part, 0), True)
        known = [self.operand(values, part, k) for k in range(len(part.inputs))]
        if all(isinstance(v, Constant) for v in known):
            decided = operation.evaluate([v.bits for v in known if isinstance(v, Constant)], part.halves)[-1]
            return ALWAYS if decided else None
        side = zero_test(operation)
        if side is not None and len(known) == 2 and isinstance(known[1], Constant) and known[1].bits == 0:
            return literal(known[0], side)
        return literal(values.fresh_identity(), True)


def told_from(operation: Operation) -> range:
    """The inputs that a result is a copy of, or tells something about: their indices, none for other operations."""
    kind = telling(operation)
    return range(0) if kind is None else range(2) if kind.startswith("passed") else range(1)


def telling(operation: Operation) -> str | None:
    """What a result tells of the inputs, read off the meaning, not the name; None where that is nothing.

    ``copy`` of input 0; ``nonzero`` or ``zero``: 1 where input 0 is (not) zero, else 0; ``passed nonzero`` or ``passed
    zero``: input 0 where input 1 is (not) zero, else 0.
    """
    if operation.kind is not Kind.COMPUTE or not 1 <= len(operation.inputs) <= 2 or len(operation.outputs) != 1:
        return None
    if any(operand.half or operand.pair or operand.type not in WHOLE for operand in operation.operands):
        return None
    statements = operation.meaning.statements
    if len(statements) != 1 or statements[0].lane is not None:
        return None
    node = bare(statements[0].value)
    if len(operation.inputs) == 2:
        return passing(node, operation.inputs)
    if isinstance(node, Input) and node.lane is None:
        return "copy"
    if isinstance(node, Choose) and isinstance(node.yes, Number) and isinstance(node.no, Number):
        yes, no, test = node.yes.value, node.no.value, node.test
        if (yes, no) not in ((1, 0), (0, 1)):
            return None
        told = compared_with_zero(test)
        if told is None:
            return None
        return told if yes else OTHER[told]
    return compared_with_zero(node)


def passing(node: Node, inputs: Sequence[str]) -> str | None:
    """``passed nonzero`` or ``passed zero`` for a choice between input 0 and 0 by a comparison of input 1 with 0."""
    if not isinstance(node, Choose):
        return None
    told, yes, no = compared_with_zero(node.test), bare(node.yes), bare(node.no)
    if told is None or bare(node.test.left).name != inputs[1]:  # type: ignore[attr-defined]
        return None
    if isinstance(yes, Number):
        yes, no, told = no, yes, OTHER[told]
    if isinstance(no, Number) and no.value == 0 and isinstance(yes, Input) and yes.name == inputs[0]:
        return f"passed {told}"
    return None


def compared_with_zero(node: Node) -> str | None:
    """``zero`` or ``nonzero`` for ``input == 0`` and ``input != 0``."""
    if not isinstance(node, Compare) or not isinstance(bare(node.left), Input) or not isinstance(node.right, Number):
        return None
    if node.left.kind != INTEGER:  # a float may be zero and have bits: -0.0
        return None
    if node.right.value != 0:
        return None
    return {"==": "zero", "!=": "nonzero"}.get(node.operator)


def zero_test(operation: Operation) -> bool | None:
    """Of a branch that compares its two inputs: whether it is taken where they differ (True) or are equal (False)."""
    for assign in operation.meaning.statements:
        if assign.output == "taken" and isinstance(assign.value, Compare):
            return {"!=": True, "==": False}.get(assign.value.operator)
    return None


def bare(node: Node) -> Node:
    """A node without the reading of its bits as signed or not."""
    while isinstance(node, Fit) and node.how == "wrap" and node.bits == 32:
        node = node.operand
    return node
