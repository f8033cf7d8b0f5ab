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

from typing import Any

import attrs

from vliwsim.description.language.types import ValueType

INTEGER, TRUTH, FLOAT, PACKED = "integer", "truth", "float", "packed"
"""Kinds of nodes. A truth is 0 or 1 and may be used as an integer; a float is binary32, held as its bits; packed is the
whole register of a packed operand, as bits, which can be cut and copied but not computed with."""


@attrs.frozen
class Interval:
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


@attrs.define(eq=False)
class Node:
    """An expression, at ``line`` and ``column`` (from 1) of its text.

    ``pattern``: the number of bits of a value that stands for a bit pattern (an operand, a field, a wrapped value);
    None for a value that is only a number.
    """

    line: int = attrs.field(default=1, kw_only=True)
    column: int = attrs.field(default=1, kw_only=True)
    kind: str = attrs.field(default=INTEGER, kw_only=True)
    interval: Interval = attrs.field(default=Interval(0, 0), kw_only=True)
    pattern: int | None = attrs.field(default=None, kw_only=True)

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


@attrs.define(eq=False)
class Number(Node):
    """A literal integer."""

    value: int


@attrs.define(eq=False)
class Real(Node):
    """A literal binary32 number, as its bits."""

    bits: int


@attrs.define(eq=False)
class Input(Node):
    """The value brought in by operand ``name`` (or ``loaded``, ``link``), or lane ``lane`` of it.

    ``type``: the whole operand's type. ``lane`` None of a packed type means all of it, as bits.
    """

    name: str
    type: ValueType
    lane: int | None = None


@attrs.define(eq=False)
class Variable:
    """A name assigned once. ``type`` is the output's type, or None of a local name or loop variable.

    ``identifier`` is unique in its meaning and a legal identifier of C and Python.
    """

    identifier: str
    type: ValueType | None = None
    interval: Interval = Interval(0, 0)
    kind: str = INTEGER
    pattern: int | None = None
    sound: bool = True
    """False once its assignment was found wrong: later faults of it would only repeat that."""


@attrs.define(eq=False)
class Local(Node):
    """The value of a variable assigned before."""

    variable: Variable


@attrs.define(eq=False)
class Unary(Node):
    """``-`` (integers and floats), ``~`` (integers), ``not`` (truths)."""

    operator: str
    operand: Node

    def children(self) -> tuple[Node, ...]:
        return (self.operand,)


@attrs.define(eq=False)
class Binary(Node):
    """``+ - * // % << >> & | ^`` over integers (``//``, ``%``, ``>>`` floor); ``+ - * /`` over floats."""

    operator: str
    left: Node
    right: Node

    def children(self) -> tuple[Node, ...]:
        return (self.left, self.right)


@attrs.define(eq=False)
class Compare(Node):
    """``== != < <= > >=``; of floats, every comparison with a NaN is false except ``!=``. A truth."""

    operator: str
    left: Node
    right: Node

    def children(self) -> tuple[Node, ...]:
        return (self.left, self.right)


@attrs.define(eq=False)
class Logic(Node):
    """``and`` or ``or`` of truths, from the left, stopping where the answer is known. A truth."""

    operator: str
    parts: tuple[Node, ...]

    def children(self) -> tuple[Node, ...]:
        return self.parts


@attrs.define(eq=False)
class Choose(Node):
    """``yes if test else no``; only the chosen arm is computed. ``test`` is a truth, or an integer that is not 0."""

    test: Node
    yes: Node
    no: Node

    def children(self) -> tuple[Node, ...]:
        return (self.test, self.yes, self.no)


@attrs.define(eq=False)
class Fit(Node):
    """``wrap``/``uwrap`` (the low ``bits``, read as signed or not) or ``sat``/``usat`` (the nearest that fits).

    ``how`` is ``wrap`` or ``sat``.
    """

    how: str
    bits: int
    to_signed: bool
    operand: Node

    @property
    def low(self) -> int:
        return -(1 << self.bits - 1) if self.to_signed else 0

    @property
    def high(self) -> int:
        return (1 << self.bits - self.to_signed) - 1

    def children(self) -> tuple[Node, ...]:
        return (self.operand,)


@attrs.define(eq=False)
class Call(Node):
    """A built-in function; :data:`~vliwsim.description.language.expressions.FUNCTIONS` has them and their arguments.

    ``mode``: of ``round`` and ``float_to_int``, the rounding. ``to``: the integer type ``float_to_int`` gives.
    """

    function: str
    arguments: tuple[Node, ...]
    mode: str = ""
    to: ValueType | None = None

    def children(self) -> tuple[Node, ...]:
        return self.arguments


@attrs.define(eq=False)
class Iterate(Node):
    """``variable`` begins as ``start`` and becomes ``step`` (which reads it) ``count`` times; the last is the value."""

    count: int
    variable: Variable
    start: Node
    step: Node

    def children(self) -> tuple[Node, ...]:
        return (self.start, self.step)


@attrs.define(eq=False)
class Assign:
    """``variable = value``. ``output``: the operand (or ``stored``, ``taken``) it gives, else ``""``; ``lane`` of it.

    An output's variable holds the value, which fits its type (checked); a packed or binary32 output assigned as a whole
    (``lane`` None) from a 32-bit pattern holds the bits.
    """

    variable: Variable
    value: Node
    output: str = ""
    lane: int | None = None
    line: int = 1
    column: int = 1


def walk(node: Node) -> list[Node]:
    """The node and all below it, parents first."""
    found: list[Node] = []
    ahead: list[Any] = [node]
    while ahead:
        here = ahead.pop()
        found.append(here)
        ahead.extend(reversed(here.children()))
    return found
