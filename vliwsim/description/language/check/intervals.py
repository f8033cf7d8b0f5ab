"""Types and intervals of every node of a meaning: what is refused before anything is computed.

Works over mathematical integers: a value is refused where it might not fit its result, a divisor where it might be 0,
a shift count where it might be negative or above 127. Tests refine the names in them (:mod:`.refine`).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

from vliwsim.description.language.check import ranges
from vliwsim.description.language.check.demands import HIGHEST, LOWEST, article, bounds_of, fault_of
from vliwsim.description.language.check.functions import CALLS, Functions
from vliwsim.description.language.check.refine import Known, key_of, refine
from vliwsim.description.language.faults import Fault, Faults
from vliwsim.description.language.tree import (
    FLOAT,
    INTEGER,
    PACKED,
    TRUTH,
    Assign,
    Binary,
    Call,
    Choose,
    Compare,
    Fit,
    Input,
    Interval,
    Iterate,
    Local,
    Logic,
    Node,
    Number,
    Real,
    Unary,
    walk,
)
from vliwsim.description.language.types import LONGEST, ValueType

_TRUE = Interval(0, 1)
_FLOAT_OPERATORS = ("+", "-", "*", "/")


class _Unsound(Exception):
    """A name whose assignment was already refused is read."""


def check(statements: Sequence[Assign]) -> None:
    """Annotates every node; raises :class:`Faults` with what is refused, at most one a statement."""
    faults: list[Fault] = []
    for assign in statements:
        try:
            _Checker().assign(assign)
        except Fault as fault:
            assign.variable.sound = False
            faults.append(fault)
        except _Unsound:
            assign.variable.sound = False
    if faults:
        raise Faults(_without_repeats(faults))


def _without_repeats(faults: list[Fault]) -> list[Fault]:
    """One of several that lanes spread out made alike."""
    seen: dict[tuple[str, int, int], Fault] = {}
    for fault in faults:
        seen.setdefault((fault.name, fault.line, fault.column), fault)
    return list(seen.values())


class _Checker(Functions):
    """Visits one statement."""

    def assign(self, assign: Assign) -> None:
        self.visit(assign.value, {})
        value, variable, kind = assign.value, assign.variable, assign.variable.type
        variable.kind, variable.interval, variable.pattern = value.kind, value.interval, value.pattern
        if kind is None:
            return
        if kind.name == "truth":
            self.truth(value, "taken")
            variable.kind = TRUTH
        elif kind.floating or (kind.packed and assign.lane is None):
            self.whole(assign, kind)
        else:
            self.integer(value, f"a result of type {kind.name}")
            if not value.interval.within(kind.low, kind.high):
                raise fault_of(value, "may-not-fit", f"values from {value.interval} for {_shown(assign)}",
                             f"{kind.low} to {kind.high} ({kind.name})",
                             f"wrap({'…'}) or sat({'…'})")  # fmt: skip
            variable.kind, variable.pattern = INTEGER, kind.bits

    def whole(self, assign: Assign, kind: ValueType) -> None:
        """A binary32 or packed result assigned as a whole: its own kind, or 32 bits put together by hand."""
        value, variable = assign.value, assign.variable
        want = FLOAT if kind.floating else PACKED
        bits = value.pattern == kind.width and all(_made_of_bits(leaf) for leaf in _leaves(value))
        same_lanes = want != PACKED or all(_lanes(leaf) in (kind.lanes, None) for leaf in _leaves(value))
        if not (value.kind == want and same_lanes or (value.kind == INTEGER and bits)):
            allowed = "a float" if kind.floating else f"{_shown(assign)}[k] = …, another {kind.name}"
            raise fault_of(value, "wrong-type", f"{article(value)} for {_shown(assign)}:{kind.name}",
                         f"{allowed}, or 32 bits made with concat, bits, wrap or unsigned")  # fmt: skip
        variable.kind, variable.pattern, variable.interval = want, 32, Interval(0, 2**32 - 1)

    # Visits

    def visit(self, node: Node, known: Known) -> None:
        _VISITS[type(node)](self, node, known)
        signed = node.interval.low < 0
        if node.kind in (INTEGER, TRUTH) and not node.interval.within(LOWEST, -LOWEST - 1 if signed else HIGHEST):
            raise fault_of(node, "too-big", f"an intermediate from {bounds_of(node.interval)}", f"{LONGEST} bits")

    def number(self, node: Number, known: Known) -> None:
        node.interval = Interval(node.value, node.value)

    def real(self, node: Real, known: Known) -> None:
        node.kind, node.pattern = FLOAT, 32

    def input(self, node: Input, known: Known) -> None:
        kind = node.type
        node.pattern = kind.bits
        if kind.floating:
            node.kind = FLOAT
        elif kind.packed and node.lane is None:
            node.kind, node.pattern, node.interval = PACKED, kind.width, Interval(0, (1 << kind.width) - 1)
        else:
            node.interval = known.get(key_of(node) or (), Interval(kind.low, kind.high))

    def local(self, node: Local, known: Known) -> None:
        if not node.variable.sound:
            raise _Unsound
        node.kind, node.pattern = node.variable.kind, node.variable.pattern
        node.interval = known.get(key_of(node) or (), node.variable.interval)

    def unary(self, node: Unary, known: Known) -> None:
        self.visit(node.operand, known)
        if node.operator == "not":
            self.condition(node.operand, "operand of not")
            node.kind, node.interval = TRUTH, _TRUE
        elif node.operator == "-" and node.operand.kind == FLOAT:
            node.kind, node.pattern = FLOAT, 32
        else:
            self.integer(node.operand, f"operand of {node.operator}")
            change = ranges.negate if node.operator == "-" else ranges.invert
            node.interval = change(node.operand.interval)
            if node.operator == "~":
                node.pattern = node.operand.pattern

    def binary(self, node: Binary, known: Known) -> None:
        self.visit(node.left, known)
        self.visit(node.right, known)
        self.literals(node, ("left", "right"))
        where = f"operand of {node.operator}"
        if FLOAT in (node.left.kind, node.right.kind) or node.operator == "/":
            if node.operator not in _FLOAT_OPERATORS:
                raise fault_of(node, "wrong-type", f"{node.operator} of floats", "+ - * / of floats")
            for side in (node.left, node.right):
                if node.operator == "/" and side.kind != FLOAT:
                    raise fault_of(side, "wrong-type", f"{article(side)} as {where}", "floats",
                                 "// (floor) or tdiv (toward 0) for integers")  # fmt: skip
                self.float(side, where)
            node.kind, node.pattern = FLOAT, 32
            return
        self.integer(node.left, where)
        self.integer(node.right, where)
        self.divisor(node.operator, node.right)
        if node.operator in ("<<", ">>"):
            self.count(node.right, "a shift count")
        node.interval = ranges.BINARY[node.operator](node.left.interval, node.right.interval)
        if node.operator in ("&", "|", "^"):
            node.pattern = self.common(node.left, node.right, node.interval)

    def common(self, left: Node, right: Node, interval: Interval) -> int | None:
        """The width of a bitwise result: that of both sides, or of one beside a literal that fits it."""
        widths = {side.pattern for side in (left, right) if not isinstance(side, Number)}
        if len(widths) != 1 or None in widths:
            return None
        width = widths.pop() or 1
        return width if interval.within(-(1 << width - 1), (1 << width) - 1) else None

    def literals(self, node: Node, names: tuple[str, str]) -> None:
        """Makes a whole number beside a float the float it stands for."""
        for name, other in (names, names[::-1]):
            side = getattr(node, name)
            if isinstance(side, Number) and getattr(node, other).kind == FLOAT:
                if abs(side.value) > 1 << 24:
                    raise fault_of(
                        side, "wrong-type", f"{side.value} beside a float", "at most 2**24, or int_to_float(x)"
                    )
                from vliwsim.description.language.floats import from_int

                real = Real(from_int(side.value))
                self.real(real, {})
                setattr(node, name, real)

    def compare(self, node: Compare, known: Known) -> None:
        self.visit(node.left, known)
        self.visit(node.right, known)
        self.literals(node, ("left", "right"))
        if FLOAT in (node.left.kind, node.right.kind):
            self.float(node.left, f"operand of {node.operator}")
            self.float(node.right, f"operand of {node.operator}")
        elif not (node.left.kind == node.right.kind == PACKED and node.operator in ("==", "!=")):
            self.integer(node.left, f"operand of {node.operator}")
            self.integer(node.right, f"operand of {node.operator}")
        node.kind, node.interval = TRUTH, _TRUE

    def logic(self, node: Logic, known: Known) -> None:
        here: Known | None = known
        for part in node.parts:
            self.visit(part, known if here is None else here)
            self.condition(part, f"operand of {node.operator}")
            here = None if here is None else refine(here, part, node.operator == "and")
        node.kind, node.interval = TRUTH, _TRUE

    def choose(self, node: Choose, known: Known) -> None:
        self.visit(node.test, known)
        self.condition(node.test, "a test")
        reached = []
        for arm, holds in ((node.yes, True), (node.no, False)):
            here = refine(known, node.test, holds)
            self.visit(arm, known if here is None else here)
            if here is not None:
                reached.append(arm)
        self.literals(node, ("yes", "no"))
        kinds = {node.yes.kind, node.no.kind}
        if kinds == {INTEGER, TRUTH}:
            kinds = {INTEGER}
        if len(kinds) != 1:
            raise fault_of(node, "wrong-type", f"{article(node.yes)} or {article(node.no)}", "two arms of one type")
        node.kind = kinds.pop()
        node.pattern = self.arms_pattern(node.yes, node.no)
        arms = [node.yes, node.no] if len(reached) != 1 else reached
        node.interval = arms[0].interval.union(arms[-1].interval)

    def fit(self, node: Fit, known: Known) -> None:
        self.visit(node.operand, known)
        self.integer(node.operand, f"operand of {node.how}")
        inside, node.pattern = node.operand.interval, node.bits
        if inside.within(node.low, node.high):
            node.interval = inside
        elif node.how == "sat":
            node.interval = Interval(
                min(max(inside.low, node.low), node.high), max(min(inside.high, node.high), node.low)
            )
        else:
            node.interval = Interval(node.low, node.high)

    def iterate(self, node: Iterate, known: Known) -> None:
        self.visit(node.start, known)
        self.integer(node.start, "operand of iterate")
        variable, seen = node.variable, node.start.interval
        variable.kind, variable.pattern = INTEGER, node.start.pattern
        for turn in range(node.count):
            variable.interval = seen
            self.visit(node.step, known)
            self.integer(node.step, "step of iterate")
            if variable.pattern is not None and node.step.pattern != variable.pattern:
                variable.pattern = None
                self.visit(node.step, known)
            if node.step.interval.within(seen.low, seen.high) or turn == node.count - 1:
                break
            seen = seen.union(node.step.interval)
        node.interval, node.pattern = node.step.interval, variable.pattern

    def call(self, node: Call, known: Known) -> None:
        for argument in node.arguments:
            self.visit(argument, known)
        CALLS[node.function](self, node)


_VISITS: Mapping[type, Callable[..., None]] = {
    Number: _Checker.number, Real: _Checker.real, Input: _Checker.input, Local: _Checker.local, Unary: _Checker.unary,
    Binary: _Checker.binary, Compare: _Checker.compare, Logic: _Checker.logic, Choose: _Checker.choose,
    Fit: _Checker.fit, Iterate: _Checker.iterate, Call: _Checker.call,
}  # fmt: skip


def _leaves(node: Node) -> list[Node]:
    """The values a choice can give."""
    if isinstance(node, Choose):
        return _leaves(node.yes) + _leaves(node.no)
    return [node]


def _made_of_bits(node: Node) -> bool:
    if isinstance(node, Local):
        return node.pattern == 32
    return isinstance(node, (Number, Fit)) or (
        isinstance(node, Call) and node.function in ("bits", "concat", "unsigned")
    )


def _lanes(node: Node) -> int | None:
    return node.type.lanes if isinstance(node, Input) else None


def _shown(assign: Assign) -> str:
    return assign.output if assign.lane is None else f"{assign.output}[{assign.lane}]"


def nodes(statements: Sequence[Assign]) -> list[Node]:
    """Every node of a meaning."""
    return [node for assign in statements for node in walk(assign.value)]
