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
from typing import NamedTuple

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
from vliwsim.native.text import Text, number

LONG = 120
"""Lines from which on a function is called rather than put in place."""

Halves = tuple[int | None, ...]


class Val(NamedTuple):
    """``code`` in its node's width. ``mask`` (i16) None: surely defined. ``size`` (i8): of the copy, "0" for none."""

    code: str
    mask: str | None = None
    size: str = "0"


def widths(operation: Operation) -> tuple[list[int], list[int]]:
    """Bits of each input and output of the function; ``taken`` has 1."""
    types_in, types_out = operation.meaning.input_types, operation.meaning.output_types
    given = [kind.width if name == "loaded" else max(32, kind.width) for name, kind in types_in.items()]
    made = [
        1 if name == "taken" else kind.width if name == "stored" else max(32, kind.width)
        for name, kind in types_out.items()
    ]
    return given, made


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


def container(bits: int) -> int:
    return next(w for w in (32, 64, 128, 256) if bits <= w)


def signed_bits(interval: Interval) -> int:
    return 1 + max(interval.high.bit_length(), (~interval.low).bit_length() if interval.low < 0 else 0)


class _Meaning(Text):
    def __init__(self, operation: Operation, halves: Halves, following: bool, bare: bool) -> None:
        super().__init__()
        self.bare = bare
        self.odd = [] if bare else None
        self.operation = operation
        self.following = following
        self.halves = dict(zip(operation.inputs, halves or (None,) * len(operation.inputs), strict=True))
        self.given, self.made = widths(operation)
        self.widths = dict(zip(operation.inputs, self.given, strict=True))
        self.variables: dict[Variable, Val] = {}
        self.variable_widths: dict[Variable, tuple[int, bool]] = {}

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

    # ---------------------------------------------------------------------------------------------------- outputs

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

    def joined(self, one: str | None, other: str | None) -> str | None:
        if one is None or other is None:
            return one or other
        return self.let(f"or i16 {one}, {other}")

    def byte(self, mask: str | None) -> str:
        return "0" if mask is None else self.let(f"trunc i16 {mask} to i8")

    def cleared(self, bits: str, width: int, mask: str | None) -> str:
        """Bits with the undefined bytes zero."""
        if mask is None:
            return bits
        for byte in range(width // 8):
            one = self.let(f"and i16 {mask}, {1 << byte}")
            test = self.compare("ne", "i16", one, "0")
            kept = self.let(f"and i{width} {bits}, {number(~(255 << 8 * byte), width)}")
            bits = self.select(test, f"i{width}", kept, bits)
        return bits

    # ------------------------------------------------------------------------------------------------ undefined bytes

    def unknown(self, *values: Val) -> str | None:
        """Whether any of the values is undefined."""
        return self.either([self.compare("ne", "i16", v.mask, "0") for v in values if v.mask is not None])

    def computed(self, code: str, *values: Val) -> Val:
        """A value computed from others: no copy."""
        test = self.unknown(*values)
        return Val(code) if test is None else Val(code, self.select(test, "i16", "1", "0"))

    def filled(self, value: Val, size: int) -> str | None:
        """The mask of a value in ``size`` bytes: of a copy of just so many kept, else all."""
        if value.mask is None:
            return None
        everything = str((1 << size) - 1)
        test = self.compare("ne", "i16", value.mask, "0")
        full = self.select(test, "i16", everything, "0")
        if value.size.isdigit():
            return value.mask if value.size == str(size) else full
        same = self.compare("eq", "i8", value.size, str(size))
        return self.select(same, "i16", value.mask, full)

    def cut(self, value: Val, low: int, count: int) -> Val:
        """Bytes of a copy, where it has so many; else no copy. The code is left alone."""
        if value.mask is None:
            return value
        part = self.let(f"lshr i16 {value.mask}, {low}") if low else value.mask
        part = self.let(f"and i16 {part}, {(1 << count) - 1}")
        fits = self.compare("uge", "i8", value.size, str(low + count))
        test = self.compare("ne", "i16", value.mask, "0")
        lost = self.select(test, "i16", "1", "0")
        return Val(value.code, self.select(fits, "i16", part, lost), self.select(fits, "i8", str(count), "0"))

    # -------------------------------------------------------------------------------------------------------- nodes

    def value(self, node: Node) -> Val:
        """Code for a node's value in its own width."""
        found: Val = _VALUES[type(node)](self, node)
        return found

    def sized(self, node: Node, width: int) -> Val:
        """A node's value in another width, modulo 2**width."""
        found = self.value(node)
        return found._replace(code=self.resize(found.code, node.width, width, node.signed))

    def pattern(self, node: Node) -> tuple[Val, int]:
        """A node's bit pattern in just so many bits."""
        width = node.pattern or 1
        return self.sized(node, width), width

    def test(self, node: Node) -> tuple[str, Val]:
        """Whether a value is not 0 (for an undefined one, anything)."""
        found = self.value(node)
        return self.compare("ne", f"i{node.width}", found.code, "0"), found

    def truth(self, test: str, *values: Val) -> Val:
        return self.computed(self.let(f"zext i1 {test} to i32"), *values)

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

    def shifted(self, code: str, count: str, width: int, by: Node, left: bool, signed: bool) -> str:
        """A shift by a count that may exceed the width (then the sign, or nothing, is left)."""
        how = "shl" if left else "ashr" if signed else "lshr"
        if by.interval.high < width and by.interval.low >= 0:
            return self.let(f"{how} i{width} {code}, {count}")
        short = self.compare("ult", f"i{width}", count, str(width))
        if how == "ashr":
            return self.let(f"ashr i{width} {code}, {self.select(short, f'i{width}', count, str(width - 1))}")
        made = self.let(f"{how} i{width} {code}, {self.select(short, f'i{width}', count, '0')}")
        return self.select(short, f"i{width}", made, "0")

    def common(self, *nodes: Node) -> tuple[int, bool]:
        """A width that holds all these values exactly, and whether as signed numbers."""
        if all(node.interval.low >= 0 for node in nodes):
            return container(max(node.interval.high.bit_length() for node in nodes)), False
        return container(max(signed_bits(node.interval) for node in nodes)), True

    def divide(self, left: Node, right: Node, node: Node, how: str) -> Val:
        """``//`` and ``%`` floor, ``tdiv`` and ``trem`` truncate."""
        width, signed = self.common(left, right, node)
        kind = f"i{width}"
        one, other = self.sized(left, width), self.sized(right, width)
        a, b = one.code, other.code
        bad = self.compare("eq", kind, b, "0")
        if signed:  # where it is not chosen, a quotient may overflow
            least = self.compare("eq", kind, a, number(1 << width - 1, width))
            overflow = self.both(least, self.compare("eq", kind, b, "-1"))
            bad = self.let(f"or i1 {bad}, {overflow}")
        b = self.select(bad, kind, "1", b)
        letter = "s" if signed else "u"
        quotient = self.let(f"{letter}div {kind} {a}, {b}")
        rest = self.let(f"sub {kind} {a}, {self.let(f'mul {kind} {quotient}, {b}')}")
        made = quotient if how in ("//", "tdiv") else rest
        if signed and how in ("//", "%"):
            uneven = self.compare("ne", kind, rest, "0")
            opposite = self.compare("slt", kind, self.let(f"xor {kind} {rest}, {b}"), "0")
            down = self.let(f"and i1 {uneven}, {opposite}")
            lower = self.let(f"sub {kind} {quotient}, 1" if how == "//" else f"add {kind} {rest}, {b}")
            made = self.select(down, kind, lower, made)
        return self.computed(self.resize(made, width, node.width, signed), one, other)

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

    def call(self, node: Call) -> Val:
        found: Val = _CALLS[node.function](self, node)
        return found

    # -------------------------------------------------------------------------------------------------- functions

    def absolute(self, node: Call) -> Val:
        (operand,) = node.arguments
        if node.kind == FLOAT:
            value = self.value(operand)
            return self.computed(floating.absolute(self, value.code), value)
        width = container(max(signed_bits(operand.interval), signed_bits(node.interval)))
        value, kind = self.sized(operand, width), f"i{width}"
        negative = self.compare("slt", kind, value.code, "0")
        code = self.select(negative, kind, self.let(f"sub {kind} 0, {value.code}"), value.code)
        return self.computed(self.resize(code, width, node.width, True), value)

    def extreme(self, node: Call) -> Val:
        left, right = node.arguments
        width, signed = self.common(left, right)
        one, other = self.sized(left, width), self.sized(right, width)
        how = ("s" if signed else "u") + ("lt" if node.function == "min" else "gt")
        test = self.compare(how, f"i{width}", one.code, other.code)
        code = self.select(test, f"i{width}", one.code, other.code)
        return self.computed(self.resize(code, width, node.width, signed), one, other)

    def truncating(self, node: Call) -> Val:
        left, right = node.arguments
        return self.divide(left, right, node, node.function)

    def round(self, node: Call) -> Val:
        operand, by = node.arguments
        width = container(max(signed_bits(operand.interval), by.interval.high + 1, signed_bits(node.interval)) + 2)
        value, count = self.sized(operand, width), self.sized(by, width)
        code = self.rounded(value.code, count.code, width, node.mode)
        return self.computed(self.resize(code, width, node.width, True), value, count)

    def rounded(self, x: str, n: str, width: int, mode: str) -> str:
        """x / 2**n; equals :func:`vliwsim.description.language.helpers.rounded`. Nothing overflows in ``width``."""
        kind = f"i{width}"
        down = self.let(f"ashr {kind} {x}, {n}")
        if mode == "floor":
            return down
        ones = self.let(f"xor {kind} {self.let(f'shl {kind} -1, {n}')}, -1")  # 2**n - 1
        half = self.let(f"lshr {kind} {self.let(f'add {kind} {ones}, 1')}, 1")  # 0 where n is 0
        if mode == "half_up":
            return self.let(f"ashr {kind} {self.let(f'add {kind} {x}, {half}')}, {n}")
        if mode == "ceiling":
            return self.let(f"ashr {kind} {self.let(f'add {kind} {x}, {ones}')}, {n}")
        if mode == "half_even":
            odd = self.let(f"and {kind} {down}, 1")
            more = self.let(f"add {kind} {self.let(f'sub {kind} {half}, 1')}, {odd}")
            made = self.let(f"ashr {kind} {self.let(f'add {kind} {x}, {more}')}, {n}")
            return self.select(self.compare("eq", kind, n, "0"), kind, x, made)
        negative = self.compare("slt", kind, x, "0")
        size = self.select(negative, kind, self.let(f"sub {kind} 0, {x}"), x)
        if mode == "half_away":
            size = self.let(f"add {kind} {size}, {half}")
        size = self.let(f"ashr {kind} {size}, {n}")
        return self.select(negative, kind, self.let(f"sub {kind} 0, {size}"), size)

    def bits(self, node: Call) -> Val:
        operand, low, count = node.arguments
        width = max(operand.width, node.width, low.width, count.width)
        value, start, wanted = self.sized(operand, width), self.sized(low, width), self.sized(count, width)
        shifted = self.shifted(value.code, start.code, width, low, False, operand.signed)
        if isinstance(count, Number):
            ones = number((1 << count.value) - 1, width)
        else:
            power = self.shifted("1", wanted.code, width, count, True, False)
            ones = self.let(f"sub i{width} {power}, 1")
        code = self.resize(self.let(f"and i{width} {shifted}, {ones}"), width, node.width, False)
        fixed = isinstance(low, Number) and isinstance(count, Number)
        if fixed and not low.value % 8 and not count.value % 8 and count.value:  # type: ignore[attr-defined]
            return self.cut(value, low.value // 8, count.value // 8)._replace(code=code)  # type: ignore[attr-defined]
        return self.computed(code, value, start, wanted)

    def concat(self, node: Call) -> Val:
        width, kind = node.width, f"i{node.width}"
        bits, at = "0", 0
        missing: list[str] = []
        lost: list[str] = []
        whole = sum(argument.pattern or 1 for argument in node.arguments)
        for argument in reversed(node.arguments):
            value, size = self.pattern(argument)
            here = self.resize(value.code, size, width, False) if size <= width else value.code
            if at:
                here = self.let(f"or {kind} {bits}, {self.let(f'shl {kind} {here}, {at}')}")
            bits = here
            if value.mask is not None:
                if size % 8 or at % 8:
                    lost.append(self.compare("ne", "i16", value.mask, "0"))
                else:
                    mask = self.filled(value, size // 8)
                    assert mask is not None
                    if at:
                        mask = self.let(f"shl i16 {mask}, {at // 8}")
                    (missing if whole % 8 == 0 else lost).append(
                        mask if whole % 8 == 0 else self.compare("ne", "i16", mask, "0")
                    )
            at += size
        mask = None
        for one in missing:
            mask = self.joined(mask, one)
        if mask is None and not lost:
            return Val(bits)
        mask, length = mask or "0", str(whole // 8)
        if lost:
            test = self.either(lost)
            assert test is not None
            mask, length = self.select(test, "i16", "1", mask), self.select(test, "i8", "0", length)
        return Val(bits, mask, length)

    def reread(self, node: Call) -> Val:
        """unsigned, signed."""
        width = node.pattern or 1
        value = self.sized(node.arguments[0], width)
        code = self.resize(value.code, width, node.width, node.function == "signed")
        if value.mask is None:
            return Val(code)
        if width % 8:
            return self.computed(code, value)
        fits = self.compare("eq", "i8", value.size, str(width // 8))
        test = self.compare("ne", "i16", value.mask, "0")
        mask = self.select(fits, "i16", value.mask, self.select(test, "i16", "1", "0"))
        return Val(code, mask, self.select(fits, "i8", value.size, "0"))

    def as_float(self, node: Call) -> Val:
        value = self.sized(node.arguments[0], 32)
        return Val(value.code, self.filled(value, 4), "4")

    def counted(self, node: Call) -> Val:
        """clz, ctz, popcount."""
        value, width = self.pattern(node.arguments[0])
        name = {"clz": "ctlz", "ctz": "cttz", "popcount": "ctpop"}[node.function]
        more = "" if name == "ctpop" else ", i1 false"
        code = self.let(f"call i{width} @llvm.{name}.i{width}(i{width} {value.code}{more})")
        if width < 8:  # the count of a narrow pattern may not fit it
            wide = self.resize(value.code, width, 32, False)
            if name == "cttz":
                wide = self.let(f"or i32 {wide}, {1 << width}")
            code = self.let(f"call i32 @llvm.{name}.i32(i32 {wide}{more})")
            if name == "ctlz":
                code = self.let(f"sub i32 {code}, {32 - width}")
            width = 32
        return self.computed(self.resize(code, width, node.width, False), value)

    def carryless(self, node: Call) -> Val:
        width, kind = node.width, f"i{node.width}"
        (one, _), (other, bits) = (self.pattern(argument) for argument in node.arguments)
        wide = self.resize(one.code, node.arguments[0].pattern or 1, width, False)
        product = "0"
        for k in range(bits):
            bit = self.let(f"and i{bits} {other.code}, {number(1 << k, bits)}")
            moved = self.let(f"shl {kind} {wide}, {k}") if k else wide
            taken = self.select(self.compare("ne", f"i{bits}", bit, "0"), kind, moved, "0")
            product = self.let(f"xor {kind} {product}, {taken}")
        return self.computed(product, one, other)

    def float_function(self, node: Call) -> Val:
        """sqrt, fma, fmin, fmax, classify."""
        values = [self.value(argument) for argument in node.arguments]
        made = getattr(floating, node.function)(self, *[value.code for value in values])
        return self.computed(made, *values)

    def int_to_float(self, node: Call) -> Val:
        (operand,) = node.arguments
        value = self.value(operand)
        return self.computed(floating.from_int(self, value.code, operand.width, operand.signed), value)

    def float_to_int(self, node: Call) -> Val:
        assert node.to is not None
        value = self.value(node.arguments[0])
        code = floating.to_int(self, value.code, node.to, node.mode)
        return self.computed(self.resize(code, node.to.bits, node.width, node.to.signed), value)


_PLAIN = {"+": "add", "-": "sub", "*": "mul", "&": "and", "|": "or", "^": "xor"}
_SHIFTS = ("<<", ">>")
_COMPARISONS = {"==": "eq", "!=": "ne", "<": "lt", "<=": "le", ">": "gt", ">=": "ge"}
_VALUES: Mapping[type, Callable[..., Val]] = {
    Number: _Meaning.number, Real: _Meaning.real, Input: _Meaning.input, Local: _Meaning.local,
    Unary: _Meaning.unary, Binary: _Meaning.binary, Compare: _Meaning.compared, Logic: _Meaning.logic,
    Choose: _Meaning.choose, Fit: _Meaning.fit, Iterate: _Meaning.iterate, Call: _Meaning.call,
}  # fmt: skip
_CALLS: Mapping[str, Callable[..., Val]] = {
    "abs": _Meaning.absolute, "min": _Meaning.extreme, "max": _Meaning.extreme, "tdiv": _Meaning.truncating,
    "trem": _Meaning.truncating, "round": _Meaning.round, "bits": _Meaning.bits, "concat": _Meaning.concat,
    "unsigned": _Meaning.reread, "signed": _Meaning.reread, "clz": _Meaning.counted, "ctz": _Meaning.counted,
    "popcount": _Meaning.counted, "clmul": _Meaning.carryless, "sqrt": _Meaning.float_function,
    "fma": _Meaning.float_function, "fmin": _Meaning.float_function, "fmax": _Meaning.float_function,
    "int_to_float": _Meaning.int_to_float, "classify": _Meaning.float_function,
    "float_to_int": _Meaning.float_to_int, "as_float": _Meaning.as_float,
}  # fmt: skip
