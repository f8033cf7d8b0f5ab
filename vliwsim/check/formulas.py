"""What the formulas of a header prove without any input: intervals and residues of values.

The formulas are those of :mod:`vliwsim.program.source.expressions`, read once more with Python's ``ast`` and never
evaluated. What is not understood is any number at all.
"""

from __future__ import annotations

import ast
import math
from collections.abc import Iterator, Mapping
from typing import NamedTuple

from vliwsim.check.residues import UNKNOWN, Residue, constant, lowest_bit
from vliwsim.program.kernel import Formula

INFINITY = math.inf


class Range(NamedTuple):
    """Whole numbers from ``low`` to ``high``, both included, that leave ``rest`` when divided by ``step``.

    ``address``: the value as a residue.
    """

    low: float = -INFINITY
    high: float = INFINITY
    step: int = 1
    rest: int = 0
    address: Residue = UNKNOWN

    @property
    def exact(self) -> int | None:
        return int(self.low) if self.low == self.high and abs(self.low) < INFINITY else None

    def nonzero(self) -> bool | None:
        """Whether the value is not zero for certain (True), is zero (False), or None."""
        if self.low > 0 or self.high < 0 or self.rest:
            return True
        return False if self.exact == 0 else None

    def narrowed(self, low: float = -INFINITY, high: float = INFINITY) -> Range:
        """Inside ``low`` to ``high`` too, the ends moved to numbers that leave ``rest``."""
        low, high = max(self.low, low), min(self.high, high)
        if abs(low) < INFINITY:
            low = low + (self.rest - int(low)) % self.step
        if abs(high) < INFINITY:
            high = high - (int(high) - self.rest) % self.step
        return self._replace(low=low, high=high)

    def stepped(self, step: int, rest: int) -> Range:
        """Leaving ``rest`` when divided by ``step`` too, where that is the finer statement."""
        if step <= self.step:
            return self
        address = Residue.of(None, rest, lowest_bit(step))
        return self._replace(step=step, rest=rest % step, address=address).narrowed()


ANY = Range()


def exactly(value: int) -> Range:
    return Range(value, value, address=constant(value))


class Reader:
    """Ranges of formulas, given those of names; ``needs`` refines them."""

    def __init__(self, names: Mapping[str, Range]) -> None:
        self.names = dict(names)

    def range_of(self, formula: Formula) -> Range:
        """The range of a formula's value."""
        return self._range(ast.parse(formula.text.strip(), mode="eval").body, _bound(formula))

    def require(self, formula: Formula) -> None:
        """Learn from a condition that holds: comparisons of a name with a range, and of its remainder."""
        bound = _bound(formula)
        for left, operator, right in _comparisons(ast.parse(formula.text.strip(), mode="eval").body):
            self._learn(left, operator, self._range(right, bound), bound)
            self._learn(right, _MIRRORED[operator], self._range(left, bound), bound)

    def _learn(self, node: ast.expr, operator: type[ast.cmpop], other: Range, bound: Mapping[str, object]) -> None:
        if isinstance(node, ast.Name) and node.id in self.names:
            known = self.names[node.id]
            if operator is ast.Eq:
                known = known.narrowed(other.low, other.high)
                if other.exact is not None:
                    known = exactly(other.exact)
            elif operator in (ast.Lt, ast.LtE):
                known = known.narrowed(high=other.high - (operator is ast.Lt))
            elif operator in (ast.Gt, ast.GtE):
                known = known.narrowed(low=other.low + (operator is ast.Gt))
            elif operator is ast.NotEq and other.exact is not None and known.low == other.exact:
                known = known.narrowed(low=known.low + 1)
            self.names[node.id] = known
        elif isinstance(node, ast.BinOp) and isinstance(node.op, ast.Mod) and operator is ast.Eq:
            step, rest = self._range(node.right, bound).exact, other.exact
            if (
                isinstance(node.left, ast.Name)
                and node.left.id in self.names
                and step
                and step > 0
                and rest is not None
            ):
                self.names[node.left.id] = self.names[node.left.id].stepped(step, rest)

    def _range(self, node: ast.expr, bound: Mapping[str, object]) -> Range:
        if isinstance(node, ast.Constant):
            return exactly(node.value) if type(node.value) is int else ANY
        if isinstance(node, ast.Name):
            value = bound.get(node.id)
            return exactly(value) if type(value) is int else self.names.get(node.id, ANY)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name):
            return self._called(node, bound)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
            return _difference(exactly(0), self._range(node.operand, bound))
        if isinstance(node, ast.BinOp):
            left, right = self._range(node.left, bound), self._range(node.right, bound)
            return _combined(type(node.op), left, right)
        if isinstance(node, ast.IfExp):
            return _either(self._range(node.body, bound), self._range(node.orelse, bound))
        return ANY

    def _called(self, node: ast.Call, bound: Mapping[str, object]) -> Range:
        assert isinstance(node.func, ast.Name)
        name = node.func.id
        if name in ("addr", "len", "latency"):
            key = f"{name}({ast.unparse(node.args[0])})" if node.args else name
            value = bound.get(key)
            return exactly(value) if type(value) is int else self.names.get(key, ANY)
        parts = [self._range(part, bound) for part in node.args]
        if name in ("min", "max") and parts:
            pick = min if name == "min" else max
            return Range(pick(part.low for part in parts), pick(part.high for part in parts))
        if name == "abs" and len(parts) == 1 and parts[0].low >= 0:
            return parts[0]
        return ANY


_MIRRORED: Mapping[type[ast.cmpop], type[ast.cmpop]] = {
    ast.Lt: ast.Gt, ast.Gt: ast.Lt, ast.LtE: ast.GtE, ast.GtE: ast.LtE, ast.Eq: ast.Eq, ast.NotEq: ast.NotEq,
}  # fmt: skip


def _bound(formula: Formula) -> Mapping[str, object]:
    return getattr(formula, "bound", {})


def _comparisons(node: ast.expr) -> Iterator[tuple[ast.expr, type[ast.cmpop], ast.expr]]:
    """The comparisons that hold where a condition does."""
    if isinstance(node, ast.BoolOp) and isinstance(node.op, ast.And):
        for part in node.values:
            yield from _comparisons(part)
    elif isinstance(node, ast.Compare):
        left = node.left
        for operator, right in zip(node.ops, node.comparators, strict=True):
            if type(operator) in _MIRRORED:
                yield left, type(operator), right
            left = right


def _difference(left: Range, right: Range) -> Range:
    address = left.address.moved(right.address, -1)
    return Range(left.low - right.high, left.high - right.low, address=address)


def _combined(operator: type[ast.operator], left: Range, right: Range) -> Range:
    if operator is ast.Add:
        return Range(left.low + right.low, left.high + right.high, address=left.address.moved(right.address))
    if operator is ast.Sub:
        return _difference(left, right)
    if operator is ast.Mult:
        if left.exact is not None:
            left, right = right, left
        factor = right.exact
        if factor is None:
            return ANY
        if factor == 0:
            return exactly(0)
        one, other = left.low * factor, left.high * factor
        return Range(min(one, other), max(one, other), address=left.address.times(factor))
    if operator is ast.FloorDiv and right.exact is not None and right.exact > 0:
        low, high = (end if abs(end) == INFINITY else end // right.exact for end in (left.low, left.high))
        return Range(low, high)
    if operator is ast.Mod and right.exact is not None and right.exact > 0:
        return Range(0, right.exact - 1)
    if operator is ast.BitAnd and right.exact is not None and right.exact >= 0:
        return Range(0, right.exact)
    if operator is ast.LShift and right.exact is not None and 0 <= right.exact <= 64:
        return _combined(ast.Mult, left, exactly(1 << right.exact))
    return ANY


def _either(one: Range, other: Range) -> Range:
    return Range(min(one.low, other.low), max(one.high, other.high), address=one.address.either(other.address))
