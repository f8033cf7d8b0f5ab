"""The functions that meanings call."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from vliwsim.description.language.tree import (
    FLOAT,
    Call,
    Node,
    Number,
)
from vliwsim.native import floating
from vliwsim.native.text import number
from vliwsim.native.values import Val, Values, container, signed_bits


class Calls(Values):
    """Calls of the meaning language; :mod:`vliwsim.description.language.evaluate` says what they mean."""

    def call(self, node: Call) -> Val:
        found: Val = _CALLS[node.function](self, node)
        return found

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


_CALLS: Mapping[str, Callable[..., Val]] = {
    "abs": Calls.absolute, "min": Calls.extreme, "max": Calls.extreme, "tdiv": Calls.truncating,
    "trem": Calls.truncating, "round": Calls.round, "bits": Calls.bits, "concat": Calls.concat,
    "unsigned": Calls.reread, "signed": Calls.reread, "clz": Calls.counted, "ctz": Calls.counted,
    "popcount": Calls.counted, "clmul": Calls.carryless, "sqrt": Calls.float_function,
    "fma": Calls.float_function, "fmin": Calls.float_function, "fmax": Calls.float_function,
    "int_to_float": Calls.int_to_float, "classify": Calls.float_function,
    "float_to_int": Calls.float_to_int, "as_float": Calls.as_float,
}  # fmt: skip
