"""Names of a meaning while it is read: operands, locals, lanes, the access to memory."""

from __future__ import annotations

import ast
from collections.abc import Mapping, Sequence

from vliwsim.description.language.faults import REPEATED
from vliwsim.description.language.reading import fault_at, is_name, said
from vliwsim.description.language.tree import Input, Local, Node, Variable
from vliwsim.description.language.types import TYPES, ValueType, type_named
from vliwsim.description.operations import Access, Operand, Role

NAMED_LANES = {"re": 0, "im": 1}
ARITHMETIC: Mapping[type, str] = {
    ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.FloorDiv: "//", ast.Mod: "%", ast.Div: "/",
    ast.LShift: "<<", ast.RShift: ">>", ast.BitAnd: "&", ast.BitOr: "|", ast.BitXor: "^",
}  # fmt: skip


class Names:
    """One meaning being resolved. ``lane`` is the value of k where there is one."""

    def __init__(self, operands: Sequence[Operand]) -> None:
        self.operands = {operand.name: operand for operand in operands}
        self.types = {name: type_named(operand.type) for name, operand in self.operands.items()}
        self.variables: dict[tuple[str, int | None], Variable] = {}
        self.lane_counts: dict[str, int] = {}
        self.assigned: dict[str, set[int | None]] = {}
        self.identifiers: set[str] = set()
        self.read: set[str] = set()
        self.failed: set[str] = set()
        self.access: Access | None = None
        self.uses_link = False
        self.lane: int | None = None
        self.aim: ValueType | None = None
        self.nodes = 0
        self.steps = 1
        self.depth = 0

    def memory(self, node: ast.Subscript, store: bool) -> ValueType:
        """Notes the one access; returns its type."""
        parts = node.slice.elts if isinstance(node.slice, ast.Tuple) else []
        good = len(parts) == 2 and isinstance(parts[0], ast.Name) and isinstance(parts[1], ast.Name)
        if not good:
            raise fault_at(node, "bad-access", said(node), "mem[address operand, type]")
        name, kind = parts[0].id, parts[1].id  # type: ignore[attr-defined]
        if name not in self.operands or self.operands[name].role is not Role.ADDRESS:
            raise fault_at(node, "bad-access", f"mem at {name}", "an operand such as at:address")
        if kind not in TYPES:
            raise fault_at(node, "bad-access", f"mem of type {kind}", ", ".join(TYPES))
        found = TYPES[kind]
        access = Access(kind, found.width // 8, store)
        if self.access is not None and (store or self.access != access):
            raise fault_at(node, "bad-access", "a second access to memory", "one load or one store")
        self.access = access
        return found

    def two_lanes(self, name: str, place: ast.AST) -> None:
        if name in self.types and self.types[name].lanes != 2:
            raise fault_at(place, "no-such-lane", f".re or .im of {name}", "an operand with two lanes")

    def lanes_in(self, value: ast.AST, place: ast.AST) -> int:
        """How many lanes k runs over: those of the operands and locals that stand with [k] (or an index of k)."""
        counts = set()
        for node in ast.walk(value):
            if isinstance(node, ast.Subscript) and isinstance(node.value, ast.Name):
                name = node.value.id
                if name in self.types and self.types[name].packed:
                    counts.add(self.types[name].lanes)
                elif name in self.lane_counts:
                    counts.add(self.lane_counts[name])
        if len(counts) != 1:
            found = "lanes of different number" if counts else "k over nothing with lanes"
            raise fault_at(place, "no-such-lane", found, "operands with one number of lanes, as a[k]")
        return counts.pop()

    def index(self, node: ast.expr) -> int:
        """A lane number: an expression of k and literals."""
        try:
            return self._index(node)
        except (ValueError, ZeroDivisionError, OverflowError):
            raise fault_at(
                node, "no-such-lane", f"lane {said(node)}", "a number, k, or an expression of them"
            ) from None

    def _index(self, node: ast.expr) -> int:
        if isinstance(node, ast.Constant) and type(node.value) is int and abs(node.value) < 64:
            return node.value
        if is_name(node, "k") and self.lane is not None:
            return self.lane
        if isinstance(node, ast.BinOp):
            left, right = self._index(node.left), self._index(node.right)
            operator = ARITHMETIC.get(type(node.op))
            made = {"+": left + right, "-": left - right, "*": left * right, "^": left ^ right, "&": left & right}
            if operator in made and abs(made[operator]) < 64:
                return made[operator]
        raise ValueError

    def value_of(self, name: str, lane: int | None, node: ast.AST) -> Node:
        variable = self.variables.get((name, lane))
        if variable is not None:
            return Local(variable)
        operand = self.operands.get(name)
        if name in self.failed:
            raise fault_at(node, REPEATED, name, "")
        if lane is not None and operand is None and self.variables.get((name, None)) is not None:
            raise fault_at(node, "no-such-lane", f"lane {lane} of {name}", f"{name} has no lanes")
        if operand is None or operand.role in (Role.ADDRESS, Role.TARGET, Role.STICKY):
            known = [n for n, o in self.operands.items() if o.role not in (Role.ADDRESS, Role.TARGET, Role.STICKY)]
            known += sorted({n for n, _ in self.variables if n not in self.operands})
            shown = name if lane is None else f"{name}[{lane}]"
            raise fault_at(node, "unknown-name", shown, ", ".join(known) or "no names")
        if name in self.assigned and operand.role is not Role.INOUT:
            raise fault_at(node, "unknown-name", f"{name} before it is assigned as a whole", "a local name")
        kind = self.types[name]
        if lane is not None and (not kind.packed or not 0 <= lane < kind.lanes):
            raise fault_at(
                node, "no-such-lane", f"lane {lane} of {name}:{kind.name}", f"{kind.lanes} lane{'s' * kind.packed}"
            )
        self.read.add(name)
        return Input(name, kind, lane)

    def identifier(self, name: str, lane: int | None) -> str:
        """A fresh identifier; operands' own names stay free for their inputs."""
        base = name if lane is None else f"{name}_{lane}"
        if name in self.operands or lane is not None:
            base = f"_{base}"
        fresh, count = base, 1
        while fresh in self.identifiers:
            count += 1
            fresh = f"_{base.lstrip('_')}__{count}"
        self.identifiers.add(fresh)
        return fresh
