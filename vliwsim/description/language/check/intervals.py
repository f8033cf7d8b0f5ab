"""Types and intervals of every node of a meaning: what is refused before anything is computed.

Works over mathematical integers: a value is refused where it might not fit its result, a divisor where it might be 0,
a shift count where it might be negative or above 127. Tests refine the names in them (:mod:`.refine`).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

from vliwsim.description.language.check import ranges
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

_LOWEST, _HIGHEST = -(1 << LONGEST - 1), (1 << LONGEST) - 1
_SHIFTS = Interval(0, LONGEST - 1)
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


class _Checker:
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
                raise _fault(value, "may-not-fit", f"values from {value.interval} for {_shown(assign)}",
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
            raise _fault(value, "wrong-type", f"{_article(value)} for {_shown(assign)}:{kind.name}",
                         f"{allowed}, or 32 bits made with concat, bits, wrap or unsigned")  # fmt: skip
        variable.kind, variable.pattern, variable.interval = want, 32, Interval(0, 2**32 - 1)

    # Demands

    def integer(self, node: Node, where: str) -> None:
        if node.kind not in (INTEGER, TRUTH):
            remedy = "a[k] or a[0], or unsigned(a) for all bits" if node.kind == PACKED else ""
            raise _fault(node, "wrong-type", f"{_article(node)} as {where}", "an integer", remedy)

    def float(self, node: Node, where: str) -> None:
        if node.kind != FLOAT:
            raise _fault(
                node, "wrong-type", f"{_article(node)} as {where}", "a float", "int_to_float(x), as_float(bits)"
            )

    def truth(self, node: Node, where: str) -> None:
        if node.kind != TRUTH and not (isinstance(node, Number) and node.value in (0, 1)):
            raise _fault(node, "wrong-type", f"{_article(node)} as {where}", "a comparison, True or False")

    def condition(self, node: Node, where: str) -> None:
        if node.kind not in (INTEGER, TRUTH):
            raise _fault(
                node, "wrong-type", f"{_article(node)} as {where}", "a comparison, or an integer (true if not 0)"
            )

    def bits(self, node: Node, where: str) -> int:
        """The width of a node that must be a bit pattern."""
        if node.kind == TRUTH and node.pattern is None:
            return 1
        if node.pattern is None:
            raise _fault(node, "unknown-width", f"a number with no width as {where}",
                         "an operand, a lane, bits(), wrap(x, bits), uwrap(x, bits)")  # fmt: skip
        return node.pattern

    # Visits

    def visit(self, node: Node, known: Known) -> None:
        _VISITS[type(node)](self, node, known)
        if node.kind in (INTEGER, TRUTH):
            if not node.interval.within(_LOWEST, _HIGHEST) or (
                node.interval.low < 0 and node.interval.high > -_LOWEST - 1
            ):
                raise _fault(node, "too-big", f"an intermediate from {_power(node.interval)}", f"{LONGEST} bits")

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
                raise _fault(node, "wrong-type", f"{node.operator} of floats", "+ - * / of floats")
            for side in (node.left, node.right):
                if node.operator == "/" and side.kind != FLOAT:
                    raise _fault(side, "wrong-type", f"{_article(side)} as {where}", "floats",
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
                    raise _fault(
                        side, "wrong-type", f"{side.value} beside a float", "at most 2**24, or int_to_float(x)"
                    )
                from vliwsim.description.language.floats import from_int

                real = Real(from_int(side.value), line=side.line, column=side.column)
                self.real(real, {})
                setattr(node, name, real)

    def divisor(self, operator: str, node: Node) -> None:
        if operator in ("//", "%", "tdiv", "trem") and not node.interval.excludes_zero:
            raise _fault(node, "may-divide-by-zero", f"a divisor from {node.interval}", "a divisor that is never 0",
                         "… if b != 0 else …")  # fmt: skip

    def count(self, node: Node, what: str) -> None:
        if not node.interval.within(_SHIFTS.low, _SHIFTS.high):
            why = "may be negative" if node.interval.low < 0 else "may be too large"
            raise _fault(node, "bad-shift", f"{what} from {node.interval} {why}", f"0 to {_SHIFTS.high}",
                         "a & 31, or bits(a, 0, 5)")  # fmt: skip

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
            raise _fault(node, "wrong-type", f"{_article(node.yes)} or {_article(node.no)}", "two arms of one type")
        node.kind = kinds.pop()
        node.pattern = self.arms_pattern(node.yes, node.no)
        arms = [node.yes, node.no] if len(reached) != 1 else reached
        node.interval = arms[0].interval.union(arms[-1].interval)

    def arms_pattern(self, yes: Node, no: Node) -> int | None:
        """The arms' common width; a literal takes the width of the other arm where it fits."""
        if yes.pattern == no.pattern:
            return yes.pattern
        for one, other in ((yes, no), (no, yes)):
            width = other.pattern
            if isinstance(one, Number) and width and one.interval.within(-(1 << width - 1), (1 << width) - 1):
                return width
        return None

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

    # Functions

    def call(self, node: Call, known: Known) -> None:
        for argument in node.arguments:
            self.visit(argument, known)
        _CALLS[node.function](self, node)

    def call_bits(self, node: Call) -> None:
        value, low, count = node.arguments
        if value.kind not in (PACKED, FLOAT):
            self.integer(value, "operand of bits")
        self.integer(low, "low of bits")
        self.integer(count, "count of bits")
        self.count(low, "the low bit")
        self.count(count, "a count of bits")
        most = count.interval.high
        node.interval = Interval(0, (1 << most) - 1)
        if value.kind == INTEGER and value.interval.low >= 0 and low.interval.low == low.interval.high:
            top = value.interval.high >> low.interval.low
            node.interval = Interval(0, min(node.interval.high, top))
        if count.interval.low == most and most > 0:
            node.pattern = most

    def call_concat(self, node: Call) -> None:
        width = sum(self.bits(part, "part of concat") for part in node.arguments)
        if width > LONGEST:
            raise _fault(node, "too-big", f"{width} bits put together", f"at most {LONGEST}")
        node.pattern, node.interval = width, Interval(0, (1 << width) - 1)

    def call_reread(self, node: Call) -> None:
        """unsigned, signed."""
        value = node.arguments[0]
        width = self.bits(value, f"operand of {node.function}")
        node.pattern = width
        as_signed = node.function == "signed"
        low = -(1 << width - 1) if as_signed else 0
        high = (1 << width - as_signed) - 1
        inside = value.interval
        fits = value.kind == INTEGER and inside.within(low, high)
        node.interval = inside if fits else Interval(low, high)

    def call_count(self, node: Call) -> None:
        """clz, ctz, popcount."""
        width = self.bits(node.arguments[0], f"operand of {node.function}")
        node.interval = Interval(0, width)

    def call_clmul(self, node: Call) -> None:
        widths = [self.bits(argument, "operand of clmul") for argument in node.arguments]
        for argument in node.arguments:
            self.integer(argument, "operand of clmul")
        total = sum(widths) - 1
        if total > LONGEST:
            raise _fault(node, "too-big", f"a carry-less product of {total} bits", f"at most {LONGEST}")
        node.interval, node.pattern = Interval(0, (1 << total) - 1), total

    def call_integers(self, node: Call) -> None:
        """tdiv, trem, min, max."""
        left, right = node.arguments
        for side in (left, right):
            if side.kind == FLOAT:
                raise _fault(side, "wrong-type", f"a float as operand of {node.function}", "integers", "fmin, fmax, /")
            self.integer(side, f"operand of {node.function}")
        self.divisor(node.function, right)
        node.interval = ranges.BINARY[node.function](left.interval, right.interval)
        if node.function in ("min", "max"):
            node.pattern = self.arms_pattern(left, right)

    def call_abs(self, node: Call) -> None:
        value = node.arguments[0]
        if value.kind == FLOAT:
            node.kind, node.pattern = FLOAT, 32
            return
        self.integer(value, "operand of abs")
        node.interval = ranges.absolute(value.interval)

    def call_round(self, node: Call) -> None:
        value, count = node.arguments
        self.integer(value, "operand of round")
        self.integer(count, "count of round")
        self.count(count, "a rounding shift")
        high = count.interval.high
        half = (1 << high) >> 1
        inside = value.interval
        if not Interval(inside.low - half, inside.high + half).within(_LOWEST, -_LOWEST - 1):
            raise _fault(
                node, "too-big", f"rounding of {_power(inside)} by {high} bits", f"{LONGEST} bits with the half added"
            )
        node.interval = ranges.rounded(inside, count.interval)

    def call_floats(self, node: Call) -> None:
        """sqrt, fma, fmin, fmax."""
        for argument in node.arguments:
            self.float(argument, f"operand of {node.function}")
        node.kind, node.pattern = FLOAT, 32

    def call_float_to_int(self, node: Call) -> None:
        self.float(node.arguments[0], "operand of float_to_int")
        assert node.to is not None
        node.interval, node.pattern = Interval(node.to.low, node.to.high), node.to.bits

    def call_int_to_float(self, node: Call) -> None:
        self.integer(node.arguments[0], "operand of int_to_float")
        node.kind, node.pattern = FLOAT, 32

    def call_as_float(self, node: Call) -> None:
        value = node.arguments[0]
        if self.bits(value, "operand of as_float") != 32:
            raise _fault(value, "wrong-type", f"{value.pattern} bits as operand of as_float", "32 bits")
        node.kind, node.pattern = FLOAT, 32

    def call_classify(self, node: Call) -> None:
        self.float(node.arguments[0], "operand of classify")
        node.interval = Interval(1, 512)


_VISITS: Mapping[type, Callable[..., None]] = {
    Number: _Checker.number, Real: _Checker.real, Input: _Checker.input, Local: _Checker.local, Unary: _Checker.unary,
    Binary: _Checker.binary, Compare: _Checker.compare, Logic: _Checker.logic, Choose: _Checker.choose,
    Fit: _Checker.fit, Iterate: _Checker.iterate, Call: _Checker.call,
}  # fmt: skip
_CALLS: Mapping[str, Callable[..., None]] = {
    "bits": _Checker.call_bits, "concat": _Checker.call_concat, "unsigned": _Checker.call_reread,
    "signed": _Checker.call_reread, "clz": _Checker.call_count, "ctz": _Checker.call_count,
    "popcount": _Checker.call_count, "clmul": _Checker.call_clmul, "tdiv": _Checker.call_integers,
    "trem": _Checker.call_integers, "min": _Checker.call_integers, "max": _Checker.call_integers,
    "abs": _Checker.call_abs, "round": _Checker.call_round, "sqrt": _Checker.call_floats, "fma": _Checker.call_floats,
    "fmin": _Checker.call_floats, "fmax": _Checker.call_floats, "float_to_int": _Checker.call_float_to_int,
    "int_to_float": _Checker.call_int_to_float, "as_float": _Checker.call_as_float, "classify": _Checker.call_classify,
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


def _article(node: Node) -> str:
    return {
        INTEGER: "an integer",
        TRUTH: "a comparison",
        FLOAT: "a float",
        PACKED: "packed lanes",
    }[node.kind]


def _power(interval: Interval) -> str:
    """An interval too long to print, by its bits."""
    bits = max(interval.high.bit_length(), interval.low.bit_length()) + (interval.low < 0)
    return f"{'-2**' + str(interval.low.bit_length()) if interval.low < 0 else '0'} to 2**{interval.high.bit_length()} ({bits} bits)"


def _fault(node: Node, name: str, found: str, allowed: str, remedy: str = "") -> Fault:
    return Fault(name, found, allowed, remedy, line=node.line, column=node.column)


def nodes(statements: Sequence[Assign]) -> list[Node]:
    """Every node of a meaning."""
    return [node for assign in statements for node in walk(assign.value)]
