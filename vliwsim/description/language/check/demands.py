"""What operators and functions ask of their operands, and the faults when they do not get it."""

from __future__ import annotations

from vliwsim.description.language.faults import Fault
from vliwsim.description.language.tree import FLOAT, INTEGER, PACKED, TRUTH, Interval, Node, Number
from vliwsim.description.language.types import LONGEST

LOWEST, HIGHEST = -(1 << LONGEST - 1), (1 << LONGEST) - 1
SHIFTS = Interval(0, LONGEST - 1)


class Demands:
    """Each raises :class:`Fault` at the operand that is wrong."""

    def integer(self, node: Node, where: str) -> None:
        if node.kind not in (INTEGER, TRUTH):
            remedy = "a[k] or a[0], or unsigned(a) for all bits" if node.kind == PACKED else ""
            raise fault_of(node, "wrong-type", f"{article(node)} as {where}", "an integer", remedy)

    def float(self, node: Node, where: str) -> None:
        if node.kind != FLOAT:
            raise fault_of(
                node, "wrong-type", f"{article(node)} as {where}", "a float", "int_to_float(x), as_float(bits)"
            )

    def truth(self, node: Node, where: str) -> None:
        if node.kind != TRUTH and not (isinstance(node, Number) and node.value in (0, 1)):
            raise fault_of(node, "wrong-type", f"{article(node)} as {where}", "a comparison, True or False")

    def condition(self, node: Node, where: str) -> None:
        if node.kind not in (INTEGER, TRUTH):
            raise fault_of(
                node, "wrong-type", f"{article(node)} as {where}", "a comparison, or an integer (true if not 0)"
            )

    def bits(self, node: Node, where: str) -> int:
        """The width of a node that must be a bit pattern."""
        if node.kind == TRUTH and node.pattern is None:
            return 1
        if node.pattern is None:
            raise fault_of(node, "unknown-width", f"a number with no width as {where}",
                         "an operand, a lane, bits(), wrap(x, bits), uwrap(x, bits)")  # fmt: skip
        return node.pattern

    def divisor(self, operator: str, node: Node) -> None:
        if operator in ("//", "%", "tdiv", "trem") and not node.interval.excludes_zero:
            raise fault_of(node, "may-divide-by-zero", f"a divisor from {node.interval}", "a divisor that is never 0",
                         "… if b != 0 else …")  # fmt: skip

    def count(self, node: Node, what: str) -> None:
        if not node.interval.within(SHIFTS.low, SHIFTS.high):
            why = "may be negative" if node.interval.low < 0 else "may be too large"
            raise fault_of(node, "bad-shift", f"{what} from {node.interval} {why}", f"0 to {SHIFTS.high}",
                         "a & 31, or bits(a, 0, 5)")  # fmt: skip

    def arms_pattern(self, yes: Node, no: Node) -> int | None:
        """The arms' common width; a literal takes the width of the other arm where it fits."""
        if yes.pattern == no.pattern:
            return yes.pattern
        for one, other in ((yes, no), (no, yes)):
            width = other.pattern
            if isinstance(one, Number) and width and one.interval.within(-(1 << width - 1), (1 << width) - 1):
                return width
        return None


def article(node: Node) -> str:
    return {
        INTEGER: "an integer",
        TRUTH: "a comparison",
        FLOAT: "a float",
        PACKED: "packed lanes",
    }[node.kind]


def bounds_of(interval: Interval) -> str:
    """An interval too long to print, by its bits."""
    low = f"-2**{interval.low.bit_length()}" if interval.low < 0 else "0"
    return f"{low} to 2**{interval.high.bit_length()}"


def fault_of(node: Node, name: str, found: str, allowed: str, remedy: str = "") -> Fault:
    return Fault(name, found, allowed, remedy, line=node.line, column=node.column)
