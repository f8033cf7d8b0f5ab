"""Expressions of a meaning: from white-listed nodes of Python's tree to ours."""

from __future__ import annotations

import ast
import struct
from collections.abc import Callable, Mapping, Sequence

from vliwsim.description.language.names import ARITHMETIC, NAMED_LANES, Names
from vliwsim.description.language.reading import DEEPEST, MOST_NODES, fault_at, is_name, said
from vliwsim.description.language.tree import (
    TRUTH,
    Binary,
    Call,
    Choose,
    Compare,
    Fit,
    Input,
    Iterate,
    Logic,
    Node,
    Number,
    Real,
    Unary,
    Variable,
)
from vliwsim.description.language.types import LONGEST, TYPES

MOST_ITERATIONS = 64
MOST_STEPS = 20_000

MODES = ("half_up", "half_even", "half_away", "floor", "ceiling", "truncate")
FLOAT_MODES = ("half_even", "half_away", "floor", "ceiling", "truncate")

FUNCTIONS: Mapping[str, tuple[int, str]] = {
    "abs": (1, "abs(x)"),
    "unsigned": (1, "unsigned(x)"),
    "signed": (1, "signed(x)"),
    "bits": (3, "bits(x, low, count)"),
    "clz": (1, "clz(x)"),
    "ctz": (1, "ctz(x)"),
    "popcount": (1, "popcount(x)"),
    "clmul": (2, "clmul(a, b)"),
    "tdiv": (2, "tdiv(a, b)"),
    "trem": (2, "trem(a, b)"),
    "sqrt": (1, "sqrt(x)"),
    "fma": (3, "fma(a, b, c)"),
    "fmin": (2, "fmin(a, b)"),
    "fmax": (2, "fmax(a, b)"),
    "int_to_float": (1, "int_to_float(x)"),
    "as_float": (1, "as_float(x)"),
    "classify": (1, "classify(x)"),
}
"""Functions whose arguments are all expressions: how many, and how a call looks.

Besides these: ``min max`` (two or more, or ``for k``), ``sum(x for k)``, ``concat`` (two or more), ``round(x, n,
MODE)``, ``float_to_int(x, type, MODE)``, ``iterate(n, name, step)``, ``wrap sat uwrap usat``, ``mem[address, type]``.
"""

ALL_FORMS = "numbers, names, lanes, + - * // % << >> & | ^ ~, comparisons, and or not, x if c else y, functions"
ALL_FUNCTIONS = sorted(
    [*FUNCTIONS, "min", "max", "sum", "concat", "round", "float_to_int", "iterate", "wrap", "sat", "uwrap", "usat"]
)

_UNARY: Mapping[type, str] = {ast.USub: "-", ast.Invert: "~", ast.Not: "not"}
_COMPARE: Mapping[type, str] = {
    ast.Eq: "==", ast.NotEq: "!=", ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">=",
}  # fmt: skip


class Expressions(Names):
    """The readers of expressions, one a kind of node."""

    def expression(self, node: ast.expr) -> Node:
        self.nodes += 1
        self.depth += 1
        try:
            if self.nodes > MOST_NODES or self.depth > DEEPEST:
                raise fault_at(node, "too-long", "a meaning too long or too deep",
                             f"{MOST_NODES} parts, {DEEPEST} levels, lanes counted")  # fmt: skip
            reader = _READERS.get(type(node))
            if reader is None:
                raise fault_at(node, "not-in-language", said(node), ALL_FORMS)
            made = reader(self, node)
            made.line, made.column = node.lineno, node.col_offset
            return made
        finally:
            self.depth -= 1

    def constant(self, node: ast.Constant) -> Node:
        value = node.value
        if isinstance(value, bool):
            return Number(int(value), kind=TRUTH)
        if isinstance(value, int):
            if value >= 1 << LONGEST:
                raise fault_at(node, "too-big", "a number of more than 128 bits", f"at most {LONGEST} bits")
            return Number(value)
        if isinstance(value, float):
            return self.real(node, value)
        raise fault_at(node, "not-in-language", said(node), "integers, and decimal numbers as binary32")

    def real(self, node: ast.AST, value: float) -> Node:
        try:
            return Real(struct.unpack("<I", struct.pack("<f", value))[0])
        except (OverflowError, struct.error):
            raise fault_at(node, "too-big", f"{value}", "a number that binary32 holds") from None

    def name(self, node: ast.Name) -> Node:
        name = node.id
        if name == "k":
            if self.lane is None:
                raise fault_at(node, "unknown-name", "k outside lanes", "d[k] = …, or sum(… for k)")
            return Number(self.lane)
        if name == "link":
            self.uses_link = True
            return Input("link", TYPES["u32"])
        return self.value_of(name, None, node)

    def subscript(self, node: ast.Subscript) -> Node:
        if is_name(node.value, "mem"):
            kind = self.memory(node, store=False)
            return Input("loaded", kind)
        if not isinstance(node.value, ast.Name):
            raise fault_at(node, "not-in-language", said(node), "a lane of a name: a[k], a[0]")
        return self.value_of(node.value.id, self.index(node.slice), node)

    def attribute(self, node: ast.Attribute) -> Node:
        if not isinstance(node.value, ast.Name) or node.attr not in NAMED_LANES:
            raise fault_at(node, "not-in-language", said(node), "name.re or name.im")
        self.two_lanes(node.value.id, node)
        return self.value_of(node.value.id, NAMED_LANES[node.attr], node)

    def unary(self, node: ast.UnaryOp) -> Node:
        operator = _UNARY.get(type(node.op))
        if operator is None:
            raise fault_at(node, "not-in-language", "unary +", "- ~ not")
        return Unary(operator, self.expression(node.operand))

    def binary(self, node: ast.BinOp) -> Node:
        if isinstance(node.op, ast.Pow):
            base, power = node.left, node.right
            good = isinstance(base, ast.Constant) and base.value == 2 and isinstance(power, ast.Constant)
            if good and type(power.value) is int and 0 <= power.value < LONGEST:  # type: ignore[attr-defined]
                return Number(1 << power.value)  # type: ignore[attr-defined]
            raise fault_at(node, "not-in-language", said(node), "2**k with literal k below 128; shifts with <<")
        operator = ARITHMETIC.get(type(node.op))
        if operator is None:
            raise fault_at(node, "not-in-language", said(node), "+ - * // % << >> & | ^, and / of floats")
        return Binary(operator, self.expression(node.left), self.expression(node.right))

    def compare(self, node: ast.Compare) -> Node:
        operands = [node.left, *node.comparators]
        parts: list[Node] = []
        for operator, left, right in zip(node.ops, operands, operands[1:]):
            symbol = _COMPARE.get(type(operator))
            if symbol is None:
                raise fault_at(node, "not-in-language", said(node), "== != < <= > >=")
            pair = Compare(symbol, self.expression(left), self.expression(right))
            pair.line, pair.column = left.lineno, left.col_offset
            parts.append(pair)
        return parts[0] if len(parts) == 1 else Logic("and", tuple(parts))

    def logic(self, node: ast.BoolOp) -> Node:
        word = "and" if isinstance(node.op, ast.And) else "or"
        return Logic(word, tuple(self.expression(part) for part in node.values))

    def choose(self, node: ast.IfExp) -> Node:
        return Choose(self.expression(node.test), self.expression(node.body), self.expression(node.orelse))

    def call(self, node: ast.Call) -> Node:
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        special = _SPECIAL.get(name)
        if name not in FUNCTIONS and special is None:
            raise fault_at(node, "unknown-function", said(node.func), " ".join(ALL_FUNCTIONS))
        if node.keywords or any(isinstance(a, ast.Starred) for a in node.args):
            raise fault_at(node, "bad-arguments", f"{name} with named or starred arguments", "plain arguments")
        if special is not None:
            return special(self, node, name)
        count, form = FUNCTIONS[name]
        _count(node, name, count, count, form)
        return Call(name, tuple(self.expression(argument) for argument in node.args))

    def gathered(self, node: ast.Call, name: str) -> Node:
        """sum, min, max: over lanes, or (min and max) over their arguments."""
        if len(node.args) == 1 and isinstance(node.args[0], ast.GeneratorExp):
            parts = self.over_lanes(node.args[0])
        elif name == "sum":
            raise fault_at(node, "bad-arguments", said(node), "sum(expression for k)")
        else:
            _count(node, name, 2, 16, f"{name}(a, b, …) or {name}(expression for k)")
            parts = [self.expression(argument) for argument in node.args]
        made = parts[0]
        for part in parts[1:]:
            made = Binary("+", made, part) if name == "sum" else Call(name, (made, part))
            made.line, made.column = node.lineno, node.col_offset
        return made

    def over_lanes(self, node: ast.GeneratorExp) -> list[Node]:
        loop = node.generators[0]
        plain = len(node.generators) == 1 and not loop.ifs and not loop.is_async
        if not plain or not is_name(loop.target, "k") or not is_name(loop.iter, "_"):
            raise fault_at(node, "not-in-language", said(node), "expression for k")
        outer = self.lane
        try:
            parts = []
            for lane in range(self.lanes_in(node.elt, node)):
                self.lane = lane
                parts.append(self.expression(node.elt))
            return parts
        finally:
            self.lane = outer

    def concat(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 2, LONGEST, "concat(high, …, low)")
        return Call(name, tuple(self.expression(argument) for argument in node.args))

    def fit(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 1, 2, f"{name}(x) or {name}(x, bits)")
        how = name.removeprefix("u")
        if len(node.args) == 2:
            value = node.args[1]
            if (
                isinstance(value, ast.Name)
                and name in ("wrap", "sat")
                and value.id in TYPES
                and not TYPES[value.id].packed
            ):
                kind = TYPES[value.id]
                return Fit(how, kind.bits, kind.signed, self.expression(node.args[0]))
            bits = self.literal(value, 1, LONGEST, f"{name}(x, bits)")
            return Fit(how, bits, name == how, self.expression(node.args[0]))
        if self.aim is None or self.aim.floating or name != how:
            allowed = f"{name}(x, bits)" if name != how else f"{name}(x, bits), or an assignment to an integer result"
            raise fault_at(node, "bad-arguments", f"{name}(x) with nothing to say the width", allowed)
        return Fit(how, self.aim.bits, self.aim.signed, self.expression(node.args[0]))

    def round(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 3, 3, "round(x, n, MODE)")
        mode = self.word(node.args[2], MODES)
        return Call(name, (self.expression(node.args[0]), self.expression(node.args[1])), mode=mode)

    def float_to_int(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 3, 3, "float_to_int(x, type, MODE)")
        kinds = [kind for kind, found in TYPES.items() if not found.packed and not found.floating]
        kind = TYPES[self.word(node.args[1], kinds)]
        mode = self.word(node.args[2], FLOAT_MODES)
        return Call(name, (self.expression(node.args[0]),), mode=mode, to=kind)

    def iterate(self, node: ast.Call, name: str) -> Node:
        form = "iterate(n, name, step)"
        _count(node, name, 3, 3, form)
        count = self.literal(node.args[0], 1, MOST_ITERATIONS, form)
        if not isinstance(node.args[1], ast.Name):
            raise fault_at(node, "bad-arguments", said(node.args[1]), f"{form} with a name that has a value")
        over = node.args[1].id
        start = self.expression(node.args[1])
        variable = Variable(self.identifier("_i_" + over, None))
        key = (over, None)
        before, steps, nodes = self.variables.get(key), self.steps, self.nodes
        self.variables[key] = variable
        self.steps *= count
        try:
            step = self.expression(node.args[2])
        finally:
            if before is None:
                del self.variables[key]
            else:
                self.variables[key] = before
        if self.steps * (self.nodes - nodes) > MOST_STEPS:
            raise fault_at(
                node, "too-long", "iterations too many for their step", f"{MOST_STEPS} computed parts in all"
            )
        self.steps = steps
        return Iterate(count, variable, start, step)

    def literal(self, node: ast.expr, low: int, high: int, form: str) -> int:
        value = node.value if isinstance(node, ast.Constant) else None
        if type(value) is not int or not low <= value <= high:
            raise fault_at(node, "bad-arguments", said(node), f"{form} with a literal from {low} to {high}")
        return value

    def word(self, node: ast.expr, allowed: Sequence[str]) -> str:
        if not isinstance(node, ast.Name) or node.id not in allowed:
            raise fault_at(node, "bad-arguments", said(node), ", ".join(allowed))
        return node.id


_READERS: Mapping[type, Callable[..., Node]] = {
    ast.Constant: Expressions.constant,
    ast.Name: Expressions.name,
    ast.Subscript: Expressions.subscript,
    ast.Attribute: Expressions.attribute,
    ast.UnaryOp: Expressions.unary,
    ast.BinOp: Expressions.binary,
    ast.Compare: Expressions.compare,
    ast.BoolOp: Expressions.logic,
    ast.IfExp: Expressions.choose,
    ast.Call: Expressions.call,
}
_SPECIAL: Mapping[str, Callable[..., Node]] = {
    "sum": Expressions.gathered,
    "min": Expressions.gathered,
    "max": Expressions.gathered,
    "concat": Expressions.concat,
    "wrap": Expressions.fit,
    "sat": Expressions.fit,
    "uwrap": Expressions.fit,
    "usat": Expressions.fit,
    "round": Expressions.round,
    "float_to_int": Expressions.float_to_int,
    "iterate": Expressions.iterate,
}


def _count(node: ast.Call, name: str, least: int, most: int, form: str) -> None:
    if not least <= len(node.args) <= most or any(isinstance(a, ast.GeneratorExp) for a in node.args):
        raise fault_at(
            node, "bad-arguments", f"{name} with {len(node.args)} argument{'s' * (len(node.args) != 1)}", form
        )
