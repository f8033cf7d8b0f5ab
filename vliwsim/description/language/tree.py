"""The typed tree of a meaning: what the parser builds, the check annotates, and every engine reads.

A meaning is a tuple of :class:`Assign`, run in order. Lanes are already spread out (``d[k] = …`` is one assignment a
lane), sums are additions, and every name is resolved: :class:`Input` is the value an operand brings in, :class:`Local`
a :class:`Variable` assigned earlier (each variable is assigned once). There are no effects, so a node may be computed
whenever its operands are known, *except* that the arms of a :class:`Choose` and the later parts of a :class:`Logic`
must only be computed where they are chosen: they may divide by what the test excludes.

After :func:`~vliwsim.description.language.check.intervals.check` every node has ``kind``, and integers and truths have
``interval``, ``width`` and ``signed``: the mathematical value always lies in the interval, and fits a machine word of
``width`` (32, 64 or 128) bits, signed or not. Shift counts always lie in 0…127, divisors are never 0.
"""

from __future__ import annotations

from typing import Any, NamedTuple

from vliwsim.description.language.types import ValueType

INTEGER, TRUTH, FLOAT, PACKED = "integer", "truth", "float", "packed"
"""Kinds of nodes. A truth is 0 or 1 and may be used as an integer; a float is binary32, held as its bits; packed is the
whole register of a packed operand, as bits, which can be cut and copied but not computed with."""


class Interval(NamedTuple):
    """Integers from ``low`` to ``high``, both included; ``nonzero`` leaves out 0."""

    low: int
    high: int
    nonzero: bool = False

    def __str__(self) -> str:
        return f"{self.low} to {self.high}" + (" without 0" if self.nonzero and self.low <= 0 <= self.high else "")

    @property
    def excludes_zero(self) -> bool:
        return self.nonzero or self.low > 0 or self.high < 0

    def within(self, low: int, high: int) -> bool:
        return low <= self.low and self.high <= high

    def union(self, other: Interval) -> Interval:
        return Interval(
            min(self.low, other.low), max(self.high, other.high), self.excludes_zero and other.excludes_zero
        )


NOTHING_YET = Interval(0, 0)


class Node:
    """An expression, at ``line`` and ``column`` (from 1) of its text.

    ``pattern``: how many low bits of the value stand for a bit pattern (an operand, a field, a wrapped value); None for
    a value that is only a number.

    Plain classes, written out: this module is loaded by every cold run, and generated ones would take most of its time.
    """

    __slots__ = ("column", "interval", "kind", "line", "pattern")

    def __init__(self, kind: str = INTEGER) -> None:
        self.line = 1
        self.column = 1
        self.kind = kind
        self.interval = NOTHING_YET
        self.pattern: int | None = None

    @property
    def signed(self) -> bool:
        """May the value be negative?"""
        return self.interval.low < 0

    @property
    def width(self) -> int:
        """The machine word that holds the value: 32, 64 or 128 bits."""
        if self.kind in (FLOAT, PACKED):
            return 32
        needed = max(self.interval.high.bit_length(), (~self.interval.low).bit_length() if self.signed else 0)
        needed += self.signed
        return 32 if needed <= 32 else 64 if needed <= 64 else 128

    def children(self) -> tuple[Node, ...]:
        return ()

    def __repr__(self) -> str:
        own = ", ".join(f"{name}={getattr(self, name)!r}" for name in type(self).__slots__)
        return f"{type(self).__name__}({own})"


class Number(Node):
    """A literal integer."""

    __slots__ = ("value",)

    def __init__(self, value: int, kind: str = INTEGER) -> None:
        super().__init__(kind)
        self.value = value


class Real(Node):
    """A literal binary32 number, as its bits."""

    __slots__ = ("bits",)

    def __init__(self, bits: int) -> None:
        super().__init__(FLOAT)
        self.bits = bits


class Input(Node):
    """The value brought in by operand ``name`` (or ``loaded``, ``link``), or lane ``lane`` of it.

    ``type``: the whole operand's type. ``lane`` None of a packed type means all of it, as bits.
    """

    __slots__ = ("lane", "name", "type")

    def __init__(self, name: str, type: ValueType, lane: int | None = None) -> None:
        super().__init__()
        self.name = name
        self.type = type
        self.lane = lane


class Variable:
    """A name assigned once. ``type`` is the output's type, or None of a local name or loop variable.

    ``identifier`` is unique in its meaning and a legal identifier of C and Python. ``kind``, ``interval``, ``pattern``:
    as of a node. ``sound`` is False once the assignment was found wrong: later faults of it would only repeat that.
    """

    __slots__ = ("identifier", "interval", "kind", "pattern", "sound", "type")

    def __init__(self, identifier: str, type: ValueType | None = None) -> None:
        self.identifier = identifier
        self.type = type
        self.interval = NOTHING_YET
        self.kind = INTEGER
        self.pattern: int | None = None
        self.sound = True

    def __repr__(self) -> str:
        return f"Variable({self.identifier})"


class Local(Node):
    """The value of a variable assigned before."""

    __slots__ = ("variable",)

    def __init__(self, variable: Variable) -> None:
        super().__init__()
        self.variable = variable


class Unary(Node):
    """``-`` (integers and floats), ``~`` (integers), ``not`` (truths)."""

    __slots__ = ("operand", "operator")

    def __init__(self, operator: str, operand: Node) -> None:
        super().__init__()
        self.operator = operator
        self.operand = operand

    def children(self) -> tuple[Node, ...]:
        return (self.operand,)


class _Two(Node):
    """An operator between two expressions."""

    __slots__ = ("left", "operator", "right")

    def __init__(self, operator: str, left: Node, right: Node) -> None:
        super().__init__()
        self.operator = operator
        self.left = left
        self.right = right

    def children(self) -> tuple[Node, ...]:
        return (self.left, self.right)

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.left!r} {self.operator} {self.right!r})"


class Binary(_Two):
    """``+ - * // % << >> & | ^`` over integers (``//``, ``%``, ``>>`` floor); ``+ - * /`` over floats."""

    __slots__ = ()


class Compare(_Two):
    """``== != < <= > >=``; of floats, every comparison with a NaN is false except ``!=``. A truth."""

    __slots__ = ()


class Logic(Node):
    """``and`` or ``or`` of truths, from the left, stopping where the answer is known. A truth."""

    __slots__ = ("operator", "parts")

    def __init__(self, operator: str, parts: tuple[Node, ...]) -> None:
        super().__init__()
        self.operator = operator
        self.parts = parts

    def children(self) -> tuple[Node, ...]:
        return self.parts


class Choose(Node):
    """``yes if test else no``; only the chosen arm is computed. ``test`` is a truth, or an integer that is not 0."""

    __slots__ = ("no", "test", "yes")

    def __init__(self, test: Node, yes: Node, no: Node) -> None:
        super().__init__()
        self.test = test
        self.yes = yes
        self.no = no

    def children(self) -> tuple[Node, ...]:
        return (self.test, self.yes, self.no)


class Fit(Node):
    """``wrap``/``uwrap`` (the low ``bits``, read as signed or not) or ``sat``/``usat`` (the nearest that fits).

    ``how`` is ``wrap`` or ``sat``.
    """

    __slots__ = ("bits", "how", "operand", "to_signed")

    def __init__(self, how: str, bits: int, to_signed: bool, operand: Node) -> None:
        super().__init__()
        self.how = how
        self.bits = bits
        self.to_signed = to_signed
        self.operand = operand

    @property
    def low(self) -> int:
        return -(1 << self.bits - 1) if self.to_signed else 0

    @property
    def high(self) -> int:
        return (1 << self.bits - self.to_signed) - 1

    def children(self) -> tuple[Node, ...]:
        return (self.operand,)


class Call(Node):
    """A built-in function; :data:`~vliwsim.description.language.expressions.FUNCTIONS` has them and their arguments.

    ``mode``: of ``round`` and ``float_to_int``, the rounding. ``to``: the integer type ``float_to_int`` gives.
    """

    __slots__ = ("arguments", "function", "mode", "to")

    def __init__(self, function: str, arguments: tuple[Node, ...], mode: str = "", to: ValueType | None = None) -> None:
        super().__init__()
        self.function = function
        self.arguments = arguments
        self.mode = mode
        self.to = to

    def children(self) -> tuple[Node, ...]:
        return self.arguments


class Iterate(Node):
    """``variable`` begins as ``start`` and becomes ``step`` (which reads it) ``count`` times; the last is the value."""

    __slots__ = ("count", "start", "step", "variable")

    def __init__(self, count: int, variable: Variable, start: Node, step: Node) -> None:
        super().__init__()
        self.count = count
        self.variable = variable
        self.start = start
        self.step = step

    def children(self) -> tuple[Node, ...]:
        return (self.start, self.step)


class Assign:
    """``variable = value``. ``output``: the operand (or ``stored``, ``taken``) it gives, else ``""``; ``lane`` of it.

    An output's variable holds the value, which fits its type (checked); a packed or binary32 output assigned as a whole
    (``lane`` None) from a 32-bit pattern holds the bits.
    """

    __slots__ = ("lane", "output", "value", "variable")

    def __init__(self, variable: Variable, value: Node, output: str = "", lane: int | None = None) -> None:
        self.variable = variable
        self.value = value
        self.output = output
        self.lane = lane

    def __repr__(self) -> str:
        return f"Assign({self.variable!r}, {self.value!r}, {self.output!r}, {self.lane})"


def walk(node: Node) -> list[Node]:
    """The node and all below it, parents first."""
    found: list[Node] = []
    ahead: list[Any] = [node]
    while ahead:
        here = ahead.pop()
        found.append(here)
        ahead.extend(reversed(here.children()))
    return found
