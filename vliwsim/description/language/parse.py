"""From the text of a meaning to its tree.

Python's own parser reads the text; every node of it is then looked up in a white list and turned into a node of ours.
Nothing of the text is ever run.
"""

from __future__ import annotations

import ast
from collections.abc import Sequence
from typing import NamedTuple

import attrs

from vliwsim.description.language.expressions import Expressions
from vliwsim.description.language.faults import REPEATED, Fault, Faults
from vliwsim.description.language.names import NAMED_LANES
from vliwsim.description.language.operands import name_fault
from vliwsim.description.language.reading import fault_at, is_name, read_statements, said
from vliwsim.description.language.tree import Assign, Node, Variable
from vliwsim.description.language.types import ValueType
from vliwsim.description.operations import Access, Operand, Role

_TRUTH_TYPE = ValueType("truth", 1, False)


class Parsed(NamedTuple):
    """The syntax of one meaning: roles settled, names resolved, types not yet checked."""

    operands: tuple[Operand, ...]
    statements: tuple[Assign, ...]
    access: Access | None
    halt: bool
    uses_link: bool


def parse(operands: Sequence[Operand], text: str) -> Parsed:
    """The tree of ``text``. Raises :class:`Faults` with every mistake found, at most one a statement."""
    try:
        return _Parser(operands).run(read_statements(text))
    except Fault as fault:
        raise Faults([fault]) from None


@attrs.define(eq=False, repr=False)
class _Target:
    """What an assignment writes: ``lanes`` is None for a whole value, or the lanes written."""

    name: str
    lanes: list[int] | None
    each: bool = False
    """``name[k] = …``: for all k."""


class _Parser(Expressions):
    """Reads the statements of one meaning."""

    def run(self, body: list[ast.stmt]) -> Parsed:
        assigns: list[Assign] = []
        faults: list[Fault] = []
        if len(body) == 1 and isinstance(body[0], ast.Expr) and is_name(body[0].value, "halt"):
            if self.operands:
                raise Fault("bad-operand", "halt with operands", "none")
            return Parsed((), (), None, True, False)
        for statement in body:
            try:
                assigns.extend(self.statement(statement))
            except Fault as fault:
                self.failed.update(_names_written(statement))
                if fault.name != REPEATED:
                    faults.append(fault)
        if not faults:
            faults = self.whole()
        if faults:
            raise Faults(faults)
        return Parsed(self.settled(), tuple(assigns), self.access, False, self.uses_link)

    def whole(self) -> list[Fault]:
        """What only the whole meaning shows: lanes left out, operands not used, roles that do not fit."""
        faults: list[Fault] = []
        for name, operand in self.operands.items():
            done = self.assigned.get(name)
            kind = self.types[name]
            if done and None not in done and (missing := set(range(kind.lanes)) - done):
                faults.append(Fault("lanes-left-out", f"{name}[{min(missing)}] is not assigned", "every lane, once"))
            if operand.role in (Role.INOUT, Role.STICKY) and not done:
                faults.append(
                    Fault("not-assigned", f"{operand.role.value} {name} is not assigned", "an assignment to it")
                )
            if operand.role in (Role.SOURCE, Role.CONSTANT) and not done and name not in self.read:
                faults.append(
                    Fault("not-used", f"operand {name} is neither read nor assigned", "every operand is used")
                )
            if operand.role is Role.ADDRESS and self.access is None:
                faults.append(Fault("not-used", f"address {name} without an access", f"one mem[{name}, type]"))
            if operand.role is Role.TARGET and "taken" not in self.assigned:
                faults.append(Fault("not-assigned", "a target, but taken is not assigned", "taken = condition"))
        if not self.assigned and not faults:
            faults.append(Fault("nothing-said", "nothing is assigned", "at least one result"))
        return faults

    def settled(self) -> tuple[Operand, ...]:
        """The operands with their final roles: a plain one that is assigned is a RESULT."""
        return tuple(
            operand._replace(role=Role.RESULT) if operand.role is Role.SOURCE and name in self.assigned else operand
            for name, operand in self.operands.items()
        )

    # Statements

    def statement(self, node: ast.stmt) -> list[Assign]:
        if not isinstance(node, ast.Assign) or len(node.targets) != 1:
            raise fault_at(node, "bad-statement", f"{said(node)}", "name = expression, or halt alone")
        place = node.targets[0]
        if isinstance(place, ast.Subscript) and is_name(place.value, "mem"):
            return [self.store(place, node.value)]
        target = self.target(place, node.value)
        kind = self.output_type(target, place)
        assigns: list[Assign] = []
        for lane in [None] if target.lanes is None else target.lanes:
            self.lane = lane if target.each else None
            self.aim = kind
            value = self.expression(node.value)
            assigns.append(self.assign(target.name, lane, kind, value))
        self.lane = None
        for assign in assigns:
            self.variables[target.name, assign.lane] = assign.variable
        return assigns

    def target(self, place: ast.expr, value: ast.expr) -> _Target:
        if isinstance(place, ast.Name):
            return _Target(place.id, None)
        if isinstance(place, ast.Attribute) and isinstance(place.value, ast.Name) and place.attr in NAMED_LANES:
            self.two_lanes(place.value.id, place)
            return _Target(place.value.id, [NAMED_LANES[place.attr]])
        if isinstance(place, ast.Subscript) and isinstance(place.value, ast.Name):
            name = place.value.id
            if not is_name(place.slice, "k"):
                return _Target(name, [self.index(place.slice)])
            count = self.types[name].lanes if name in self.types else self.lanes_in(value, place)
            return _Target(name, list(range(count)), each=True)
        raise fault_at(
            place, "bad-statement", f"assignment to {said(place)}", "a name, name[k], name.re, mem[address, type]"
        )

    def output_type(self, target: _Target, place: ast.expr) -> ValueType | None:
        """The type of an output, None for a local; refuses what cannot be assigned."""
        name = target.name
        operand = self.operands.get(name)
        if name == "taken":
            if not any(o.role is Role.TARGET for o in self.operands.values()):
                raise fault_at(place, "bad-statement", "taken without a target operand", "an operand such as to:target")
            if target.lanes is not None or "taken" in self.assigned:
                raise fault_at(place, "assigned-twice", "taken again", "one assignment to taken")
            return _TRUTH_TYPE
        if operand is None:
            if wrong := name_fault(name):
                raise fault_at(
                    place, "bad-name", wrong, "a name of small letters, digits and _, no word of the language"
                )
            lanes = self.lane_counts.get(name)
            if target.each:
                assert target.lanes is not None
                self.lane_counts[name] = len(target.lanes)
            elif target.lanes:
                self.lane_counts[name] = max(lanes or 0, target.lanes[0] + 1)
            return None
        if operand.role in (Role.ADDRESS, Role.TARGET, Role.CONSTANT) or operand.half:
            raise fault_at(
                place, "bad-statement", f"assignment to {operand.role.value} operand {name}", "a result operand"
            )
        if operand.role is Role.SOURCE and name in self.read:
            raise fault_at(
                place, "bad-statement", f"{name} is read before it is assigned", f"{name}:inout {operand.type}"
            )
        kind = self.types[name]
        if target.lanes is not None and (not kind.packed or max(target.lanes) >= kind.lanes):
            raise fault_at(place, "no-such-lane", said(place), f"{name} has {kind.lanes} lane{'s' * kind.packed}")
        done = self.assigned.setdefault(name, set())
        new: set[int | None] = {None} if target.lanes is None else set(target.lanes)
        if done & new or (done and None in done | new):
            raise fault_at(
                place, "assigned-twice", f"{said(place)} again", "every result once; use a local name between"
            )
        return kind

    def assign(self, name: str, lane: int | None, kind: ValueType | None, value: Node) -> Assign:
        output = name if kind is not None else ""
        if output:
            self.assigned.setdefault(name, set()).add(lane)
        variable = Variable(self.identifier(name, lane), kind)
        return Assign(variable, value, output, lane)

    def store(self, place: ast.Subscript, value: ast.expr) -> Assign:
        kind = self.memory(place, store=True)
        self.aim, self.lane = kind, None
        node = self.expression(value)
        self.assigned["stored"] = {None}
        return Assign(Variable(self.identifier("_stored", None), kind), node, "stored")


def _names_written(statement: ast.stmt) -> list[str]:
    """The names an assignment, or what was meant as one, writes."""
    targets = statement.targets if isinstance(statement, ast.Assign) else []
    return [node.id for target in targets for node in ast.walk(target) if isinstance(node, ast.Name)]
