"""The slow, exact evaluator: computes a meaning over its tree, following undefined bytes.

Rules (section 3.2 of the design, lane by lane): a copy that fills its destination byte for byte — a whole operand, a
lane, a half, bytes cut out with ``bits``, such put together with ``concat``, the low bytes kept by ``wrap``, a load or
store of the same width — keeps undefined bytes where they are. Everything that computes, sign and zero extension
included, gives a wholly undefined lane (or scalar) when any byte it computes with is undefined. ``x if c else y``
computes and passes only the arm chosen; an undefined ``c`` gives undefined. ``and`` and ``or`` stop at the first part
that decides.
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Mapping, Sequence

from vliwsim.description.language import floats, helpers
from vliwsim.description.language.check.ranges import truncate
from vliwsim.description.language.tree import (
    FLOAT,
    Assign,
    Binary,
    Call,
    Choose,
    Compare,
    Fit,
    Input,
    Iterate,
    Local,
    Logic,
    Node,
    Number,
    Real,
    Unary,
    Variable,
)
from vliwsim.description.language.types import ValueType
from vliwsim.description.values import Undefined, Value, parts, value_of

LOST = Undefined(0, 0, 0)
"""An undefined value that is no copy of bytes."""

_INTEGER_OPERATORS: Mapping[str, Callable[[int, int], int]] = {
    "+": operator.add, "-": operator.sub, "*": operator.mul, "//": operator.floordiv, "%": operator.mod,
    "<<": operator.lshift, ">>": operator.rshift, "&": operator.and_, "|": operator.or_, "^": operator.xor,
}  # fmt: skip
_FLOAT_OPERATORS: Mapping[str, Callable[[int, int], int]] = {
    "+": floats.add, "-": floats.subtract, "*": floats.multiply, "/": floats.divide,
}  # fmt: skip
_COMPARISONS: Mapping[str, Callable[[float, float], bool]] = {
    "==": operator.eq, "!=": operator.ne, "<": operator.lt, "<=": operator.le, ">": operator.gt, ">=": operator.ge,
}  # fmt: skip


def evaluate(
    statements: Sequence[Assign],
    outputs: Mapping[str, ValueType],
    inputs: Mapping[str, Value],
    halves: Mapping[str, int | None],
) -> dict[str, Value]:
    """The raw value of each output, from the raw values of the inputs (checked statements)."""
    machine = _Evaluator(inputs, halves)
    lanes: dict[tuple[str, int | None], Value] = {}
    for assign in statements:
        value = machine.visit(assign.value)
        machine.variables[assign.variable] = value
        if assign.output:
            lanes[assign.output, assign.lane] = value
    return {name: _raw(name, kind, lanes) for name, kind in outputs.items()}


def _raw(name: str, kind: ValueType, lanes: Mapping[tuple[str, int | None], Value]) -> Value:
    """A whole output as its register (or the memory) gets it: lanes side by side, narrow scalars extended."""
    if (name, None) in lanes:
        value = lanes[name, None]
        size = kind.width // 8 if name == "stored" else max(4, kind.width // 8)
        return _filled(value, size)
    bits = unknown = 0
    size = kind.bits // 8
    for lane in range(kind.lanes):
        here, missing = parts(_filled(lanes[name, lane], size))
        bits |= here << lane * kind.bits
        unknown |= missing << lane * size
    return value_of(bits, unknown, kind.width // 8)


def _filled(value: Value, size: int) -> Value:
    """The value in ``size`` bytes: a copy of just so many bytes keeps them, else it is undefined in all."""
    if isinstance(value, int):
        return int(value) & (1 << 8 * size) - 1
    return value if value.size == size else Undefined(0, (1 << size) - 1, size)


def _cut(value: Undefined, low: int, count: int) -> Value:
    """``count`` bytes of an undefined value from byte ``low``."""
    bits, unknown = value.bits >> 8 * low & (1 << 8 * count) - 1, value.unknown >> low & (1 << count) - 1
    return value_of(bits, unknown, count)


class _Evaluator:
    def __init__(self, inputs: Mapping[str, Value], halves: Mapping[str, int | None]) -> None:
        self.inputs = inputs
        self.halves = halves
        self.variables: dict[Variable, Value] = {}

    def visit(self, node: Node) -> Value:
        """Its value (binary32 and packed: bits), or an Undefined: of its size in bytes if a copy, else LOST."""
        found: Value = _VISITS[type(node)](self, node)
        return found

    def number(self, node: Number) -> Value:
        return node.value

    def real(self, node: Real) -> Value:
        return node.bits

    def input(self, node: Input) -> Value:
        raw, kind = self.inputs[node.name], node.type
        half = self.halves.get(node.name)
        low = 0 if half is None else 16 * half
        width = kind.width
        if node.lane is not None:
            low, width = node.lane * kind.bits, kind.bits
        if isinstance(raw, Undefined):
            raw = _cut(raw, low // 8, width // 8)
            if isinstance(raw, Undefined):
                return raw
            low = 0
        if kind.packed and node.lane is None:
            return raw
        return kind.value(raw >> low)

    def local(self, node: Local) -> Value:
        return self.variables[node.variable]

    def unary(self, node: Unary) -> Value:
        value = self.visit(node.operand)
        if isinstance(value, Undefined):
            return LOST
        if node.operator == "not":
            return int(value == 0)
        if node.operand.kind == FLOAT:
            return floats.negate(value)
        return -value if node.operator == "-" else ~value

    def binary(self, node: Binary) -> Value:
        left, right = self.visit(node.left), self.visit(node.right)
        if isinstance(left, Undefined) or isinstance(right, Undefined):
            return LOST
        return (_FLOAT_OPERATORS if node.kind == FLOAT else _INTEGER_OPERATORS)[node.operator](left, right)

    def compare(self, node: Compare) -> Value:
        left, right = self.visit(node.left), self.visit(node.right)
        if isinstance(left, Undefined) or isinstance(right, Undefined):
            return LOST
        if node.left.kind == FLOAT:
            return int(_COMPARISONS[node.operator](floats.to_float(left), floats.to_float(right)))
        return int(_COMPARISONS[node.operator](left, right))

    def logic(self, node: Logic) -> Value:
        for part in node.parts:
            value = self.visit(part)
            if isinstance(value, Undefined):
                return LOST
            if bool(value) == (node.operator == "or"):
                return int(bool(value))
        return int(node.operator == "and")

    def choose(self, node: Choose) -> Value:
        test = self.visit(node.test)
        if isinstance(test, Undefined):
            return LOST
        return self.visit(node.yes if test else node.no)

    def fit(self, node: Fit) -> Value:
        value = self.visit(node.operand)
        if isinstance(value, Undefined):
            if node.how == "wrap" and node.bits % 8 == 0 and node.bits // 8 <= value.size:
                cut = _cut(value, 0, node.bits // 8)
                return cut if isinstance(cut, Undefined) else self.wrapped(node, cut)
            return LOST
        if node.how == "sat":
            return min(max(value, node.low), node.high)
        return self.wrapped(node, value)

    def wrapped(self, node: Fit, value: int) -> int:
        value &= (1 << node.bits) - 1
        return value - (1 << node.bits) if value > node.high else value

    def iterate(self, node: Iterate) -> Value:
        value = self.visit(node.start)
        for _ in range(node.count):
            self.variables[node.variable] = value
            value = self.visit(node.step)
        return value

    def call(self, node: Call) -> Value:
        if node.function in _COPIES:
            return _COPIES[node.function](self, node)
        values = []
        for argument in node.arguments:
            value = self.visit(argument)
            if isinstance(value, Undefined):
                return LOST
            values.append(value)
        return _compute(node, values)

    def bits(self, node: Call) -> Value:
        value, low, count = (self.visit(argument) for argument in node.arguments)
        if isinstance(low, Undefined) or isinstance(count, Undefined):
            return LOST
        if isinstance(value, Undefined):
            fixed = isinstance(node.arguments[1], Number) and isinstance(node.arguments[2], Number)
            if fixed and not low % 8 and not count % 8 and 0 < count <= 8 * value.size - low:
                return _cut(value, low // 8, count // 8)
            return LOST
        return value >> low & (1 << count) - 1

    def concat(self, node: Call) -> Value:
        bits = unknown = width = 0
        for argument in reversed(node.arguments):
            value = self.visit(argument)
            size = argument.pattern or 1
            if isinstance(value, Undefined):
                if size % 8 or width % 8:
                    return LOST
                value = _filled(value, size // 8)
            here, missing = parts(value)
            bits |= (here & (1 << size) - 1) << width
            unknown |= missing << width // 8
            width += size
        if unknown and width % 8:
            return LOST
        return value_of(bits, unknown, width // 8)

    def reread(self, node: Call) -> Value:
        """unsigned, signed."""
        value = self.visit(node.arguments[0])
        width = node.pattern or 1
        if isinstance(value, Undefined):
            return value if width == 8 * value.size else LOST
        value &= (1 << width) - 1
        return value - (1 << width) if node.function == "signed" and value >> width - 1 else value

    def as_float(self, node: Call) -> Value:
        return _filled(self.visit(node.arguments[0]), 4)


def _compute(node: Call, values: list[int]) -> int:
    """A function of defined values."""
    name, argument = node.function, node.arguments[0]
    if name in _PLAIN:
        return _PLAIN[name](*values)
    if name == "round":
        return helpers.rounded(values[0], values[1], node.mode)
    if name == "float_to_int":
        assert node.to is not None
        return floats.to_int(values[0], node.to.low, node.to.high, node.mode)
    if name == "abs":
        return floats.absolute(values[0]) if node.kind == FLOAT else abs(values[0])
    width = argument.pattern or 1
    patterns = [value & (1 << (part.pattern or 1)) - 1 for value, part in zip(values, node.arguments, strict=True)]
    if name == "clmul":
        return helpers.clmul(*patterns)
    if name == "popcount":
        return patterns[0].bit_count()
    if name == "clz":
        return width - patterns[0].bit_length()
    assert name == "ctz"
    return (patterns[0] & -patterns[0]).bit_length() - 1 if patterns[0] else width


_PLAIN: Mapping[str, Callable[..., int]] = {
    "min": min, "max": max, "tdiv": truncate, "trem": lambda x, y: x - y * truncate(x, y), "sqrt": floats.sqrt,
    "fma": floats.fma, "fmin": floats.fmin, "fmax": floats.fmax, "int_to_float": floats.from_int,
    "classify": floats.classify,
}  # fmt: skip
_COPIES: Mapping[str, Callable[..., Value]] = {
    "bits": _Evaluator.bits, "concat": _Evaluator.concat, "unsigned": _Evaluator.reread,
    "signed": _Evaluator.reread, "as_float": _Evaluator.as_float,
}  # fmt: skip
_VISITS: Mapping[type, Callable[..., Value]] = {
    Number: _Evaluator.number, Real: _Evaluator.real, Input: _Evaluator.input, Local: _Evaluator.local,
    Unary: _Evaluator.unary, Binary: _Evaluator.binary, Compare: _Evaluator.compare, Logic: _Evaluator.logic,
    Choose: _Evaluator.choose, Fit: _Evaluator.fit, Iterate: _Evaluator.iterate, Call: _Evaluator.call,
}  # fmt: skip
