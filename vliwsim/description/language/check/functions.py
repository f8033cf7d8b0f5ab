"""Types and intervals of the built-in functions."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from vliwsim.description.language.check import ranges
from vliwsim.description.language.check.demands import LOWEST, Demands, bounds_of, fault_of
from vliwsim.description.language.tree import FLOAT, INTEGER, PACKED, Call, Interval
from vliwsim.description.language.types import LONGEST


class Functions(Demands):
    """One method a function or family of functions; the arguments are already checked."""

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
            raise fault_of(node, "too-big", f"{width} bits put together", f"at most {LONGEST}")
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
            raise fault_of(node, "too-big", f"a carry-less product of {total} bits", f"at most {LONGEST}")
        node.interval, node.pattern = Interval(0, (1 << total) - 1), total

    def call_integers(self, node: Call) -> None:
        """tdiv, trem, min, max."""
        left, right = node.arguments
        for side in (left, right):
            if side.kind == FLOAT:
                raise fault_of(
                    side, "wrong-type", f"a float as operand of {node.function}", "integers", "fmin, fmax, /"
                )
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
        if not Interval(inside.low - half, inside.high + half).within(LOWEST, -LOWEST - 1):
            raise fault_of(
                node,
                "too-big",
                f"rounding of {bounds_of(inside)} by {high} bits",
                f"{LONGEST} bits with the half added",
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
            raise fault_of(value, "wrong-type", f"{value.pattern} bits as operand of as_float", "32 bits")
        node.kind, node.pattern = FLOAT, 32

    def call_classify(self, node: Call) -> None:
        self.float(node.arguments[0], "operand of classify")
        node.interval = Interval(1, 512)


CALLS: Mapping[str, Callable[..., None]] = {
    "bits": Functions.call_bits, "concat": Functions.call_concat, "unsigned": Functions.call_reread,
    "signed": Functions.call_reread, "clz": Functions.call_count, "ctz": Functions.call_count,
    "popcount": Functions.call_count, "clmul": Functions.call_clmul, "tdiv": Functions.call_integers,
    "trem": Functions.call_integers, "min": Functions.call_integers, "max": Functions.call_integers,
    "abs": Functions.call_abs, "round": Functions.call_round, "sqrt": Functions.call_floats,
    "fma": Functions.call_floats,
    "fmin": Functions.call_floats, "fmax": Functions.call_floats, "float_to_int": Functions.call_float_to_int,
    "int_to_float": Functions.call_int_to_float, "as_float": Functions.call_as_float,
    "classify": Functions.call_classify,
}  # fmt: skip
