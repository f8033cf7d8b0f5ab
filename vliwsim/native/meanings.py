"""An operation's meaning as an LLVM function, made from its typed tree.

The function takes the raw bits of the operation's inputs and gives a structure of the raw bits of its outputs. It has
no effects and no branches: both arms of a choice are computed, so what may not be computed where it is not chosen (a
division, a long shift) is made harmless first.

In the *following* form every value has beside it which of its bytes are undefined, by the rules of
:mod:`vliwsim.description.language.evaluate`: a mask of bytes (0: defined) and the size in bytes of what it is a copy
of; a value that is no copy has size 0.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

from vliwsim.description.language.tree import (
    FLOAT,
    PACKED,
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
    Variable,
)
from vliwsim.description.language.types import ValueType
from vliwsim.description.operations import Operation
from vliwsim.native import floating
from vliwsim.native.calls import Calls
from vliwsim.native.text import number
from vliwsim.native.values import Halves, Val, container, signed_bits, widths

LONG = 120
"""Lines from which on a function is called rather than put in place."""


def result_type(operation: Operation, following: bool, bare: bool = False) -> str:
    _, made = widths(operation)
    fields = [f"i{w}" for w in made] + (["i8"] * len(made) if following else []) + ["i1"] * bare
    return "{" + ", ".join(fields) + "}"


def function(
    operation: Operation, halves: Halves, name: str, following: bool, external: bool = False, bare: bool = False
) -> str:
    """The text of the function ``@name``. In the following form masks stand behind the bits, in and out.

    ``bare``: a last result says whether some float made is a NaN; the others then mean nothing.
    """
    return _Meaning(operation, halves, following, bare).text(name, external)


class _Meaning(Calls):
    def text(self, name: str, external: bool) -> str:
        meaning = self.operation.meaning
        lanes: dict[tuple[str, int | None], tuple[Assign, Val]] = {}
        for assign in meaning.statements:
            value = self.value(assign.value)
            self.keep(assign.variable, assign.value, value)
            if assign.output:
                lanes[assign.output, assign.lane] = assign, value
        outputs = [
            self.output(out, kind, width, lanes)
            for (out, kind), width in zip(meaning.output_types.items(), self.made, strict=True)
        ]
        kind = result_type(self.operation, self.following, self.bare)
        fields = [(f"i{w}", bits) for w, (bits, _) in zip(self.made, outputs, strict=True)]
        if self.following:
            fields += [("i8", mask) for _, mask in outputs]
        if self.odd is not None:
            fields.append(("i1", self.either(self.odd) or "false"))
        made = "undef"
        for k, (field, code) in enumerate(fields):
            made = self.let(f"insertvalue {kind} {made}, {field} {code}, {k}")
        parameters = [f"i{w} %{n}" for n, w in self.widths.items()]
        if self.following:
            parameters += [f"i8 %{n}.u" for n in self.widths]
        head = f"define {'' if external else 'internal '}{kind} @{name}({', '.join(parameters)})"
        body = "\n".join([*self.lines, f"  ret {kind} {made}" if fields else "  ret {} undef"])
        return f"{head}{self.inlined(external)} nounwind {{\n{body}\n}}\n"

    def inlined(self, external: bool) -> str:
        """Long ones are called: the code of a program would grow, and take long to make, out of all proportion."""
        return "" if external else " noinline" if len(self.lines) > LONG else " alwaysinline"

    def output(
        self, name: str, kind: ValueType, width: int, lanes: Mapping[tuple[str, int | None], tuple[Assign, Val]]
    ) -> tuple[str, str]:
        """Bits and mask (i8) of an output."""
        if (name, None) in lanes:
            assign, value = lanes[name, None]
            if name == "taken":
                return self.compare("ne", f"i{assign.value.width}", value.code, "0"), self.byte(self.filled(value, 1))
            bits = self.resize(value.code, assign.value.width, width, assign.value.signed)
            mask = self.filled(value, width // 8)
            return self.cleared(bits, width, mask), self.byte(mask)
        bits, mask = "0", None
        for lane in range(kind.lanes):
            assign, value = lanes[name, lane]
            here = self.resize(value.code, assign.value.width, kind.bits, assign.value.signed)
            missing = self.filled(value, kind.bits // 8)
            here = self.resize(self.cleared(here, kind.bits, missing), kind.bits, width, False)
            if lane:
                here = self.let(f"shl i{width} {here}, {lane * kind.bits}")
                here = self.let(f"or i{width} {bits}, {here}")
                if missing:
                    missing = self.let(f"shl i16 {missing}, {lane * kind.bits // 8}")
            bits = here
            mask = self.joined(mask, missing)
        return bits, self.byte(mask)

    def keep(self, variable: Variable, node: Node, value: Val) -> None:
        self.variables[variable] = value
        self.variable_widths[variable] = node.width, node.signed

    def number(self, node: Number) -> Val:
        return Val(number(node.value, node.width))

    def real(self, node: Real) -> Val:
        return Val(number(node.bits, 32))

    def input(self, node: Input) -> Val:
        kind, whole = node.type, self.widths[node.name]
        half = self.halves.get(node.name)
        low, width = (16 * half, kind.width) if half is not None else (0, kind.width)
        if node.lane is not None:
            low, width = node.lane * kind.bits, kind.bits
        code = f"%{node.name}"
        if low:
            code = self.let(f"lshr i{whole} {code}, {low}")
        code = self.resize(code, whole, width, False)
        signed = kind.signed and not (kind.packed and node.lane is None) and not kind.floating
        code = self.resize(code, width, node.width, signed)
        if not self.following:
            return Val(code)
        mask = self.let(f"zext i8 %{node.name}.u to i16")
        if low:
            mask = self.let(f"lshr i16 {mask}, {low // 8}")
        size = -(-width // 8)
        return Val(code, self.let(f"and i16 {mask}, {(1 << size) - 1}"), str(width // 8))

    def local(self, node: Local) -> Val:
        found = self.variables[node.variable]
        width, signed = self.variable_widths[node.variable]
        return found._replace(code=self.resize(found.code, width, node.width, signed))

    def unary(self, node: Unary) -> Val:
        kind = f"i{node.width}"
        if node.operator == "not":
            test, value = self.test(node.operand)
            return self.truth(self.invert(test), value)
        if node.kind == FLOAT:
            value = self.value(node.operand)
            return self.computed(floating.negate(self, value.code), value)
        value = self.sized(node.operand, node.width)
        code = f"sub {kind} 0, {value.code}" if node.operator == "-" else f"xor {kind} {value.code}, -1"
        return self.computed(self.let(code), value)

    def binary(self, node: Binary) -> Val:
        if node.kind == FLOAT:
            one, other = self.value(node.left), self.value(node.right)
            return self.computed(floating.arithmetic(self, node.operator, one.code, other.code), one, other)
        if node.operator in _SHIFTS:
            return self.shift(node)
        if node.operator in ("//", "%"):
            return self.divide(node.left, node.right, node, node.operator)
        one, other = self.sized(node.left, node.width), self.sized(node.right, node.width)
        return self.computed(self.let(f"{_PLAIN[node.operator]} i{node.width} {one.code}, {other.code}"), one, other)

    def shift(self, node: Binary) -> Val:
        left = node.operator == "<<"
        width = node.width if left else max(node.width, node.left.width)
        one, count = self.sized(node.left, width), self.sized(node.right, width)
        code = self.shifted(one.code, count.code, width, node.right, left, node.left.signed)
        return self.computed(self.resize(code, width, node.width, node.left.signed), one, count)

    def compared(self, node: Compare) -> Val:
        left, right = node.left, node.right
        if left.kind == FLOAT:
            one, other = self.value(left), self.value(right)
            return self.truth(floating.compared(self, node.operator, one.code, other.code), one, other)
        width, signed = (32, False) if left.kind == PACKED else self.common(left, right)
        one, other = self.sized(left, width), self.sized(right, width)
        how = _COMPARISONS[node.operator]
        if how not in ("eq", "ne"):
            how = ("s" if signed else "u") + how
        return self.truth(self.compare(how, f"i{width}", one.code, other.code), one, other)

    def logic(self, node: Logic) -> Val:
        deciding = "true" if node.operator == "or" else "false"
        found, lost, open_ = "", None, None
        for part in node.parts:
            test, value = self.test(part)
            unknown = self.unknown(value)
            if unknown is not None:
                here = self.both(open_, unknown)
                assert here is not None
                lost = here if lost is None else self.let(f"or i1 {lost}, {here}")
            found = test if not found else self.let(f"{node.operator} i1 {found}, {test}")
            goes_on = self.let(f"icmp ne i1 {test}, {deciding}")
            open_ = self.both(open_, goes_on)
            if unknown is not None:
                open_ = self.both(open_, self.invert(unknown))
        code = self.let(f"zext i1 {found} to i32")
        return Val(code) if lost is None else Val(code, self.select(lost, "i16", "1", "0"))

    def choose(self, node: Choose) -> Val:
        test, tested = self.test(node.test)
        yes, no = self.sized(node.yes, node.width), self.sized(node.no, node.width)
        code = self.select(test, f"i{node.width}", yes.code, no.code)
        unknown = self.unknown(tested)
        if yes.mask is None and no.mask is None:
            return self.computed(code, tested)
        mask = self.select(test, "i16", yes.mask or "0", no.mask or "0")
        size = self.select(test, "i8", yes.size, no.size)
        if unknown is not None:
            mask, size = self.select(unknown, "i16", "1", mask), self.select(unknown, "i8", "0", size)
        return Val(code, mask, size)

    def fit(self, node: Fit) -> Val:
        if node.how == "sat":
            return self.saturated(node)
        value = self.sized(node.operand, node.bits)
        code = self.resize(value.code, node.bits, node.width, node.to_signed)
        if node.bits % 8:
            return self.computed(code, value)
        return self.cut(value, 0, node.bits // 8)._replace(code=code)

    def saturated(self, node: Fit) -> Val:
        inside = node.operand.interval
        width = container(max(signed_bits(inside), signed_bits(Interval(node.low, node.high))))
        value, kind = self.sized(node.operand, width), f"i{width}"
        code = value.code
        if inside.low < node.low:
            test = self.compare("slt", kind, code, number(node.low, width))
            code = self.select(test, kind, number(node.low, width), code)
        if inside.high > node.high:
            test = self.compare("sgt", kind, code, number(node.high, width))
            code = self.select(test, kind, number(node.high, width), code)
        return self.computed(self.resize(code, width, node.width, True), value)

    def iterate(self, node: Iterate) -> Val:
        # every step has the width of the widest; a step's value is kept in it
        width, signed = node.width, node.signed
        for one in (node.start, node.step):
            width, signed = max(width, one.width), signed or one.signed
        if any(n.width == width and not n.signed for n in (node.start, node.step)) and signed:
            width = container(width + 1)
        value = self.sized(node.start, width)
        for _ in range(node.count):
            self.variables[node.variable], self.variable_widths[node.variable] = value, (width, signed)
            value = self.sized(node.step, width)
        return value._replace(code=self.resize(value.code, width, node.width, signed))

    def value(self, node: Node) -> Val:
        found: Val = _VALUES[type(node)](self, node)
        return found


_PLAIN = {"+": "add", "-": "sub", "*": "mul", "&": "and", "|": "or", "^": "xor"}

_SHIFTS = ("<<", ">>")

_COMPARISONS = {"==": "eq", "!=": "ne", "<": "lt", "<=": "le", ">": "gt", ">=": "ge"}

_VALUES: Mapping[type, Callable[..., Val]] = {
    Number: _Meaning.number, Real: _Meaning.real, Input: _Meaning.input, Local: _Meaning.local,
    Unary: _Meaning.unary, Binary: _Meaning.binary, Compare: _Meaning.compared, Logic: _Meaning.logic,
    Choose: _Meaning.choose, Fit: _Meaning.fit, Iterate: _Meaning.iterate, Call: _Meaning.call,
}  # fmt: skip
