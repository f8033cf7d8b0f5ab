"""The small expression language of sources: stamps, sizes, ``let``, ``needs``, budgets, given and table values.

A formula is parsed once with Python's ``ast`` against a white list and becomes nested closures; nothing is ever
evaluated as Python. Numbers are integers and floats, everything is bounded, and comparisons give truth values.

Besides plain names a formula may hold *references*: ``addr(x)``, ``len(x)`` and ``latency(mul.half)``. The caller of
:meth:`Formula.value` supplies ``addr(x)`` and ``len(x)`` under exactly these keys (``{"n": 8, "addr(x)": 64}``);
a ``len(x)`` that is not supplied is taken from ``names["x"]`` when that has a length.
"""

from __future__ import annotations

import ast
import math
import operator
import re
from collections.abc import Callable, Mapping
from typing import Any

import attrs

from vliwsim.problems import Place, Problem, SourceError

LONGEST = 2000
"""Characters of one expression."""
DEEPEST = 60
"""Levels of nesting of one expression."""
BIGGEST = 1 << 256
"""No integer may reach this magnitude."""

_GLUED = re.compile(
    r"(?<![\w.])(?>0[xX][\da-fA-F_]+|0[bB][01_]+|0[oO][0-7_]+|(?:\d[\d_]*\.?[\d_]*|\.\d[\d_]*)(?:[eE][-+]?\d[\d_]*)?)"
    r"(?=[A-Za-z])"
)
"""A number that a letter follows."""

Environment = Mapping[str, Any]
Evaluate = Callable[[Environment], Any]


class Refused(Exception):
    """Why an expression is refused; ``column`` counts characters from 0 in its text, ``length`` what is meant."""

    def __init__(self, name: str, found: str, allowed: str = "", remedy: str = "", at: ast.AST | None = None) -> None:
        super().__init__(found)
        self.name, self.found, self.allowed, self.remedy = name, found, allowed, remedy
        self.column = int(getattr(at, "col_offset", 0))
        self.length = int(getattr(at, "end_col_offset", self.column + 1)) - self.column


def _bounded(value: Any) -> Any:
    if isinstance(value, int) and not -BIGGEST < value < BIGGEST:
        raise Refused("number-too-big", "a number of more than 256 bits", "integers below 2**256")
    return value


def _multiply(a: Any, b: Any) -> Any:
    return _bounded(a * b)


def _power(a: Any, b: Any) -> Any:
    if isinstance(a, int) and isinstance(b, int):
        if abs(a) > 1 and b * abs(a).bit_length() > 512:
            raise Refused("number-too-big", f"{a} ** {b}", "integers below 2**256")
        if abs(b) > 4096:
            raise Refused("number-too-big", f"an exponent of {b}", "exponents to 4096")
    result = a**b
    if isinstance(result, complex):
        raise Refused("no-value", f"{a} ** {b} is not a real number", "real numbers")
    return _bounded(result)


def _shift_left(a: Any, b: Any) -> Any:
    if b > 256:
        raise Refused("number-too-big", f"a shift by {b}", "shifts by 0 to 256")
    return _bounded(a << b)


BINARY: dict[type[ast.operator], Callable[[Any, Any], Any]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: _multiply,
    ast.FloorDiv: operator.floordiv,
    ast.Div: operator.truediv,
    ast.Mod: operator.mod,
    ast.Pow: _power,
    ast.BitAnd: operator.and_,
    ast.BitOr: operator.or_,
    ast.BitXor: operator.xor,
    ast.LShift: _shift_left,
    ast.RShift: operator.rshift,
}

UNARY: dict[type[ast.unaryop], Callable[[Any], Any]] = {
    ast.USub: operator.neg,
    ast.UAdd: operator.pos,
    ast.Invert: operator.invert,
    ast.Not: operator.not_,
}

COMPARE: dict[type[ast.cmpop], Callable[[Any, Any], bool]] = {
    ast.Eq: operator.eq,
    ast.NotEq: operator.ne,
    ast.Lt: operator.lt,
    ast.LtE: operator.le,
    ast.Gt: operator.gt,
    ast.GtE: operator.ge,
}

FUNCTIONS: dict[str, tuple[Callable[..., Any], int, int]] = {
    "min": (min, 2, 16),
    "max": (max, 2, 16),
    "abs": (abs, 1, 1),
    "log2": (math.log2, 1, 1),
    "ceil": (math.ceil, 1, 1),
    "floor": (math.floor, 1, 1),
    "sin": (math.sin, 1, 1),
    "cos": (math.cos, 1, 1),
    "sqrt": (math.sqrt, 1, 1),
    "exp": (math.exp, 1, 1),
}
"""Functions of values: what computes them, the fewest and the most arguments."""

REFERENCES = ("addr", "len", "latency")
"""Functions whose argument is a name, not a value."""

CONSTANTS = {"pi": math.pi}

RESERVED = frozenset((*FUNCTIONS, *REFERENCES, *CONSTANTS, "and", "or", "not", "if", "else", "item", "with", "i"))
"""Names that no size, item or ``let`` may take. (``i`` counts elements in tables.)"""

_ALLOWED = "numbers, names, + - * // / % ** & | ^ ~ << >>, comparisons, and or not, A if C else B, " + ", ".join(
    (*FUNCTIONS, *REFERENCES)
)


def _dotted(node: ast.AST) -> str | None:
    """``a.b.c`` as text, None for anything else."""
    if isinstance(node, ast.Name):
        return node.id
    if isinstance(node, ast.Attribute):
        inner = _dotted(node.value)
        return inner and f"{inner}.{node.attr}"
    return None


class _Builder:
    """Turns a syntax tree into closures and collects the names in it."""

    def __init__(self) -> None:
        self.names: dict[str, ast.AST] = {}
        self.references: dict[str, ast.AST] = {}

    def build(self, node: ast.AST, depth: int = 0) -> Evaluate:
        if depth > DEEPEST:
            raise Refused("too-deep", f"more than {DEEPEST} levels of nesting", f"at most {DEEPEST}", at=node)
        method = getattr(self, "_" + type(node).__name__.lower(), None)
        if method is None:
            raise Refused("bad-expression", "something this language does not have", _ALLOWED, at=node)
        built: Evaluate = method(node, depth + 1)
        return built

    def _constant(self, node: ast.Constant, depth: int) -> Evaluate:
        value = node.value
        if type(value) not in (int, float):
            raise Refused(
                "bad-expression", f"{value!r} is not a number", "integers (decimal, 0x, 0b) and floats", at=node
            )
        if isinstance(value, float) and not math.isfinite(value):
            raise Refused("number-too-big", "a float beyond the largest", "finite floats", at=node)
        _bounded(value)
        return lambda env: value

    def _name(self, node: ast.Name, depth: int) -> Evaluate:
        name = node.id
        if name in CONSTANTS:
            value = CONSTANTS[name]
            return lambda env: value
        if name in FUNCTIONS or name in REFERENCES:
            raise Refused("bad-expression", f"{name} without its argument", f"{name}(…)", at=node)
        self.names.setdefault(name, node)
        return lambda env: env[name]

    def _binop(self, node: ast.BinOp, depth: int) -> Evaluate:
        apply = BINARY.get(type(node.op))
        if apply is None:
            raise Refused("bad-expression", "an operator this language does not have", _ALLOWED, at=node)
        left, right = self.build(node.left, depth), self.build(node.right, depth)
        return lambda env: apply(left(env), right(env))

    def _unaryop(self, node: ast.UnaryOp, depth: int) -> Evaluate:
        apply, inner = UNARY[type(node.op)], self.build(node.operand, depth)
        return lambda env: apply(inner(env))

    def _boolop(self, node: ast.BoolOp, depth: int) -> Evaluate:
        parts = tuple(self.build(part, depth) for part in node.values)
        if isinstance(node.op, ast.And):
            return lambda env: all(part(env) for part in parts)
        return lambda env: any(part(env) for part in parts)

    def _compare(self, node: ast.Compare, depth: int) -> Evaluate:
        first = self.build(node.left, depth)
        rest: list[tuple[Callable[[Any, Any], bool], Evaluate]] = []
        for op, part in zip(node.ops, node.comparators, strict=True):
            if type(op) not in COMPARE:
                raise Refused("bad-expression", "a comparison this language does not have", "== != < <= > >=", at=node)
            rest.append((COMPARE[type(op)], self.build(part, depth)))

        def evaluate(env: Environment) -> bool:
            left = first(env)
            for holds, part in rest:
                right = part(env)
                if not holds(left, right):
                    return False
                left = right
            return True

        return evaluate

    def _ifexp(self, node: ast.IfExp, depth: int) -> Evaluate:
        test, yes, no = (self.build(part, depth) for part in (node.test, node.body, node.orelse))
        return lambda env: yes(env) if test(env) else no(env)

    def _subscript(self, node: ast.Subscript, depth: int) -> Evaluate:
        if not isinstance(node.value, ast.Name):
            raise Refused("bad-expression", "an index on something that is no name", "x[3]", at=node)
        name = node.value.id
        self.names.setdefault(name, node.value)
        index = self.build(node.slice, depth)

        def evaluate(env: Environment) -> Any:
            sequence, where = env[name], index(env)
            if not hasattr(sequence, "__getitem__") or not hasattr(sequence, "__len__"):
                raise Refused("no-value", f"{name} has no elements", "an array", at=node)
            if isinstance(where, float) or not 0 <= where < len(sequence):
                raise Refused("no-value", f"{name}[{where}]", f"{name}[0] to {name}[{len(sequence) - 1}]", at=node)
            return sequence[where]

        return evaluate

    def _call(self, node: ast.Call, depth: int) -> Evaluate:
        name = node.func.id if isinstance(node.func, ast.Name) else None
        if node.keywords or name is None or (name not in FUNCTIONS and name not in REFERENCES):
            found = f"the function {name}" if name and not node.keywords else "a call of this form"
            raise Refused("unknown-function", found, ", ".join((*FUNCTIONS, *REFERENCES)), at=node)
        if name in REFERENCES:
            return self._reference(name, node)
        apply, fewest, most = FUNCTIONS[name]
        if not fewest <= len(node.args) <= most:
            count = f"{fewest} to {most}" if fewest < most else str(fewest)
            raise Refused("bad-expression", f"{name} with {len(node.args)} arguments", f"{name} with {count}", at=node)
        parts = tuple(self.build(part, depth) for part in node.args)
        if len(parts) == 1:
            (only,) = parts
            return lambda env: apply(only(env))
        return lambda env: apply(*[part(env) for part in parts])

    def _reference(self, name: str, node: ast.Call) -> Evaluate:
        target = _dotted(node.args[0]) if len(node.args) == 1 else None
        if target is None or ("." in target and name != "latency"):
            raise Refused("bad-expression", f"{name} of something that is no name", f"{name}(NAME)", at=node)
        key = f"{name}({target})"
        self.references.setdefault(key, node)
        if name != "len":
            return lambda env: env[key]

        def length(env: Environment) -> int:
            return env[key] if key in env else len(env[target])

        return length


@attrs.frozen(eq=False)
class Formula:
    """A parsed expression; see :class:`vliwsim.program.kernel.Formula` for the contract.

    ``bound``: names fixed when the source is assembled (``let`` names, latencies); they are not among ``names``.
    ``references``: the free references in it, such as ``addr(x)``. ``excerpt`` is the source line, for diagnostics.
    """

    text: str
    place: Place
    names: frozenset[str]
    references: frozenset[str]
    bound: Mapping[str, object] = attrs.field(repr=False)
    excerpt: str = attrs.field(default="", repr=False)
    _evaluate: Evaluate = attrs.field(repr=False, default=lambda env: None)

    def value(self, names: Mapping[str, object] = {}) -> Any:
        """The value with these names: an int, float or bool.

        Raises :class:`~vliwsim.problems.SourceError` when a name is missing or there is no value (division by zero…).
        """
        return self.within({**self.bound, **names} if names else self.bound)

    def within(self, environment: Environment) -> Any:
        """The value in an environment that already holds everything the formula needs, ``bound`` included."""
        try:
            value = self._evaluate(environment)
        except Refused as refusal:
            raise self._error(refusal) from None
        except (KeyError, ArithmeticError, ValueError, TypeError) as reason:
            raise self._error(_no_value(self.text, reason)) from None
        if type(value) is float and not math.isfinite(value):
            raise self._error(Refused("no-value", f"{self.text} is {value}", "finite numbers"))
        return value

    def _error(self, refusal: Refused) -> SourceError:
        return SourceError(self.refusal(refusal))

    def refusal(self, refusal: Refused) -> Problem:
        """The problem that says why this formula is refused, at its place."""
        length = max(1, min(refusal.length, len(self.text)))
        place = self.place._replace(column=self.place.column + refusal.column, length=length)
        return Problem(refusal.name, refusal.found, refusal.allowed, refusal.remedy, place, excerpt=self.excerpt)

    def __reduce__(self) -> tuple[object, ...]:
        return (formula, (self.text, self.place, dict(self.bound), self.excerpt))


def _no_value(text: str, reason: Exception) -> Refused:
    """Why evaluating ``text`` ended in ``reason``."""
    if isinstance(reason, KeyError):
        return Refused("unknown-name", f"{reason.args[0]} has no value here", "names with a value")
    if isinstance(reason, ZeroDivisionError):
        return Refused("no-value", f"a division by zero in {text}", "a divisor other than 0")
    if isinstance(reason, TypeError):
        return Refused("no-value", f"{text} mixes values that do not go together", "numbers, each where it fits")
    return Refused("no-value", f"{text} has no value: {reason}", "an expression with a value")


def formula(text: str, place: Place | None = None, bound: Mapping[str, object] = {}, excerpt: str = "") -> Formula:
    """Parse an expression.

    ``place`` is where ``text`` begins. ``bound``: names (and ``latency(…)`` references) with fixed values.
    Raises :class:`~vliwsim.problems.SourceError` with one problem when the text is refused.
    """
    place = place or Place("expression", 1, 1, len(text))
    empty = Formula(text, place, frozenset(), frozenset(), bound, excerpt)
    try:
        names, references, evaluate = _parse(text)
    except Refused as refusal:
        raise SourceError(empty.refusal(refusal)) from None
    free = frozenset(names) - bound.keys()
    return Formula(text, place, free, frozenset(references) - bound.keys(), bound, excerpt, evaluate)


def _parse(text: str) -> tuple[dict[str, ast.AST], dict[str, ast.AST], Evaluate]:
    if len(text) > LONGEST:
        raise Refused("too-long", f"an expression of {len(text)} characters", f"at most {LONGEST}")
    if not text.strip():
        raise Refused("bad-expression", "no expression", _ALLOWED)
    if not (text.isascii() and text.isprintable()):
        raise Refused("bad-expression", f"a character that no expression has, in {text!r}", _ALLOWED)
    lead = len(text) - len(text.lstrip())
    if glued := _GLUED.search(text):  # which Python's tokenizer would only warn of
        refusal = Refused("bad-expression", f"{glued.group()} with a letter behind it", "a blank behind the number")
        refusal.column = glued.start()
        raise refusal
    try:
        tree = ast.parse(text.strip(), mode="eval")
    except SyntaxError as bad:
        if "too many nested" in str(bad.msg):
            raise Refused("too-deep", f"more than {DEEPEST} levels of nesting", f"at most {DEEPEST}") from None
        remedy = "==" if re.search(r"(?<![=<>!])=(?!=)", text) else ""
        refusal = Refused("bad-expression", f"{text.strip()} is not an expression", _ALLOWED, remedy)
        offset = bad.offset or len(text.strip())  # 0: at the end
        refusal.column = lead + max(0, min(offset - 1, len(text) - 1))
        raise refusal from None
    except (RecursionError, MemoryError, ValueError):
        raise Refused("too-deep", f"more than {DEEPEST} levels of nesting", f"at most {DEEPEST}") from None
    builder = _Builder()
    try:
        evaluate = builder.build(tree.body)
    except Refused as refusal:
        refusal.column += lead
        raise
    return builder.names, builder.references, evaluate
