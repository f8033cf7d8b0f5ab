"""Which registers' values are followed, and what operations make of them.

Followed are registers that decide something: guards, ``count`` registers, branch operands and indirect targets, and
what they are copied or told from. Of the operations only what their meaning says plainly is known: a copy, a constant,
a comparison with zero, a count, a link; any other result is a value of its own.
"""

from __future__ import annotations

from typing import Protocol

from vliwsim.description.language.tree import Choose, Compare, Fit, Input, Node, Number
from vliwsim.description.operations import Kind, Operation
from vliwsim.flow.values import ALWAYS, Condition, Constant, Identity, Knowledge, Known, literal
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation

COUNTED_OUT = 64
"""Constants up to this are counted down exactly; larger ones become values of which nothing is known."""


class Values(Protocol):
    """What a step offers: values of followed registers, knowledge, and new identities."""

    knowledge: Knowledge

    def value(self, register: int) -> Known: ...

    def fresh_identity(self) -> Identity: ...


class Follow:
    """The registers of one program that are followed: ``registers`` in order, ``index`` their places."""

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
        while True:
            more = {
                part.inputs[source].index
                for part in parts
                if len(part.results) == 1 and part.effects.writes[0].register in followed
                for source in [told_from(part.operation)]
                if source is not None
            }
            more = {r for r in more if 0 <= r < ready.first_constant} - followed
            if not more:
                break
            followed |= more
        self.registers = tuple(sorted(followed))
        self.index = {register: k for k, register in enumerate(self.registers)}

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
        return self.compared(values, value, kind), None

    @staticmethod
    def counted_down(values: Values, old: Known) -> Known:
        if isinstance(old, Constant):
            if old.bits > COUNTED_OUT:
                return values.fresh_identity()
            return Constant(max(0, old.bits - 1))
        new = values.fresh_identity()
        values.knowledge.steps[new] = old
        if values.knowledge.facts.get(old) is False:
            values.knowledge.facts[new] = False
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
        return value if nonzero else values.fresh_identity()

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

    def target(self, values: Values, part: Part) -> int | None:
        """Bundle index of a branch's target, -1 where no bundle begins, None where it is not known."""
        if part.target_register is None:
            return -1 if part.target is None else part.target
        address = values.value(part.target_register)
        if not isinstance(address, Constant):
            return None
        return self.ready.program.index_at.get(address.bits, -1)


def told_from(operation: Operation) -> int | None:
    """The input that a result is a copy of, or tells zero from: its index, None for other operations."""
    return None if telling(operation) is None else 0


def telling(operation: Operation) -> str | None:
    """``copy``, ``nonzero`` (of input 0, as 1 or 0), ``zero``, or None: read off the meaning, not the name."""
    if operation.kind is not Kind.COMPUTE or len(operation.inputs) != 1 or len(operation.outputs) != 1:
        return None
    if any(operand.half or operand.pair for operand in operation.operands):
        return None
    statements = operation.meaning.statements
    if len(statements) != 1 or statements[0].lane is not None:
        return None
    node = bare(statements[0].value)
    if isinstance(node, Input) and node.lane is None:
        return "copy"
    if isinstance(node, Choose) and isinstance(node.yes, Number) and isinstance(node.no, Number):
        yes, no, test = node.yes.value, node.no.value, node.test
        if (yes, no) not in ((1, 0), (0, 1)):
            return None
        told = compared_with_zero(test)
        if told is None:
            return None
        return told if yes else {"zero": "nonzero", "nonzero": "zero"}[told]
    return compared_with_zero(node)


def compared_with_zero(node: Node) -> str | None:
    """``zero`` or ``nonzero`` for ``input == 0`` and ``input != 0``."""
    if not isinstance(node, Compare) or not isinstance(bare(node.left), Input) or not isinstance(node.right, Number):
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
