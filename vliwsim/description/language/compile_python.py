"""From a checked tree to a fast Python function over raw register values.

Two ways to compute a node: *exact* code gives its mathematical value; code *modulo* 2**w gives any number with the same
low w bits. A result is masked to its width at the end, so sums, products and bitwise operators of which only low bits
are asked work on the registers' raw bits, and no sign is ever converted for them. Where a sign matters,
``(a ^ 0x80000000) - 0x80000000`` is used with the subtraction held back (:attr:`Text.offset`): comparisons and sums
often need it no more.

The text is made from the tree alone, of numbers and names of our own making: nothing of the user's text is in it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import NamedTuple

from vliwsim.description.language import calls_python as calls
from vliwsim.description.language import floats, helpers
from vliwsim.description.language.text import NOTHING, SOME, Text, literal, mask
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
    Iterate,
    Local,
    Logic,
    Node,
    Number,
    Real,
    Unary,
    Variable,
    walk,
)
from vliwsim.description.language.types import ValueType

HELPERS: Mapping[str, object] = {
    "_add": floats.add, "_subtract": floats.subtract, "_multiply": floats.multiply, "_divide": floats.divide,
    "_sqrt": floats.sqrt, "_fma": floats.fma, "_fmin": floats.fmin, "_fmax": floats.fmax, "_to_int": floats.to_int,
    "_from_int": floats.from_int, "_classify": floats.classify, "_negate": floats.negate,
    "_absolute": floats.absolute, "_float": floats.to_float, "_clmul": helpers.clmul, "_rounded": helpers.rounded,
    "_range": range,
}  # fmt: skip
"""Names the functions may use; they see no other."""

_FLOAT_NAMES = {"+": "_add", "-": "_subtract", "*": "_multiply", "/": "_divide"}


class Held(NamedTuple):
    """Where in the raw value given for an input its bits are: ``bits`` from bit ``low``, of ``whole`` given."""

    low: int
    bits: int
    whole: int


def function(text: str, name: str) -> Callable[..., object]:
    """Compiles ``text`` (made by :func:`source`) under a stable file name, so that a debugger shows it.

    The name depends on the text too: two cores of one session may mean different things by one operation.
    """
    import linecache
    import zlib

    file = f"<operation {name} {zlib.crc32(text.encode()):08x}>"
    namespace: dict[str, object] = {"__builtins__": {}, **HELPERS}
    exec(compile(text, file, "exec"), namespace)
    linecache.cache[file] = (len(text), None, text.splitlines(keepends=True), file)
    made = namespace["operation"]
    assert callable(made)
    return made


def source(statements: Sequence[Assign], inputs: Mapping[str, Held], outputs: Mapping[str, ValueType]) -> str:
    """The text of a function ``operation(inputs…)``: raw values in, raw values out (bare, tuple, or None)."""
    return Writer(inputs).write(statements, outputs)


def storage(output: str, kind: ValueType, lane: int | None) -> int:
    """Bits of the place an output's (or lane's) raw value goes to: its lane, its register or its bytes of memory."""
    if lane is not None:
        return kind.bits
    return kind.width if output == "stored" else max(32, kind.width)


class Writer:
    """Writes one function. ``lines``: the statements so far. ``inside``: within a part that may not be computed."""

    def __init__(self, inputs: Mapping[str, Held]) -> None:
        self.inputs = inputs
        self.lines: list[str] = []
        self.temporaries = 0
        self.inside = 0
        self.stored: dict[Variable, int] = {}
        """Variables that hold raw bits, and how many; all others hold exact values."""
        self.passes: dict[Variable, frozenset[int]] = {}

    def write(self, statements: Sequence[Assign], outputs: Mapping[str, ValueType]) -> str:
        nodes = [node for assign in statements for node in walk(assign.value)]
        read = {node.variable for node in nodes if isinstance(node, Local)}
        results: dict[tuple[str, int | None], str] = {}
        for assign in statements:
            if assign.output:
                results[assign.output, assign.lane] = self.result(assign, assign.variable in read)
            elif assign.variable in read:
                made = self.value(assign.value)
                self.passes[assign.variable] = made.passes
                self.lines.append(f"{assign.variable.identifier} = {made.bare}")
        given = [_joined(name, kind, results) for name, kind in outputs.items()]
        body = "\n".join(f"    {line}" for line in [*self.lines, f"return {', '.join(given) or 'None'}"])
        return f"def operation({', '.join(self.inputs)}):\n{body}\n"

    def result(self, assign: Assign, read: bool) -> str:
        """Writes the assignment of an output (or lane); gives the code of its raw value."""
        variable, kind = assign.variable, assign.variable.type
        assert kind is not None
        if kind.name == "truth":
            made = self.value(assign.value)
        else:
            width = storage(assign.output, kind, assign.lane)
            made = self.raw(assign.value, width).copied(width)
            if made.passes == SOME:
                made = Text(f"{made.inner} + 0")
            self.stored[variable], self.passes[variable] = width, made.passes
        if read or (self.lines and assign.lane is None):
            self.lines.append(f"{variable.identifier} = {made.code}")
            return variable.identifier
        return made.code if assign.lane is None else made.inner

    # Ways to compute a node

    def value(self, node: Node) -> Text:
        """Exact code (bits of floats and packed lanes)."""
        return self.modulo(node, None)

    def modulo(self, node: Node, width: int | None) -> Text:
        """Code for the value modulo 2**width, or exact where ``width`` is None."""
        made: Text = _MODULO[type(node)](self, node, width)
        return made

    def raw(self, node: Node, width: int) -> Text:
        """Code for the low ``width`` bits as an unsigned number."""
        if node.kind in (FLOAT, PACKED):
            whole = self.value(node)
            return whole if width >= (node.pattern or 32) else Text(f"{whole.inner} & {mask(width)}")
        special = _RAW.get(type(node))
        found = special(self, node, width) if special else None
        if found is not None:
            return found
        if node.interval.within(0, (1 << width) - 1):
            return self.value(node).settled()
        made = self.modulo(node, width)
        offset = made.offset & (1 << width) - 1
        code = f"({made.inner} + {literal(offset)})" if offset else made.inner
        return Text(f"{code} & {mask(width)}")

    def test(self, node: Node) -> Text:
        """Code that Python takes as true or false."""
        if isinstance(node, Compare):
            return self.comparison(node)
        if isinstance(node, Logic):
            return self.logic(node)
        if isinstance(node, Unary) and node.operator == "not":
            return Text(f"not {self.test(node.operand).inner}")
        if isinstance(node, Input):
            return self.raw_input(node)
        return self.value(node).settled()

    def truth(self, node: Node, width: int | None) -> Text:
        return Text(f"1 if {self.test(node).code} else 0")

    def temporary(self) -> str:
        self.temporaries += 1
        return f"_t{self.temporaries}"

    # Leaves

    def number(self, node: Number, width: int | None) -> Text:
        return Text(literal(node.value), True)

    def raw_number(self, node: Number, width: int) -> Text:
        return Text(literal(node.value & (1 << width) - 1), True)

    def real(self, node: Real, width: int | None) -> Text:
        return Text(literal(node.bits), True)

    def held(self, node: Input) -> Held:
        held = self.inputs[node.name]
        return held if node.lane is None else Held(node.lane * node.type.bits, node.type.bits, held.whole)

    def input(self, node: Input, width: int | None) -> Text:
        held = self.held(node)
        if width is not None and width <= held.bits and held.low + held.bits != held.whole:
            return Text(f"{node.name} >> {held.low}") if held.low else self.name(node.name, held.whole)
        raw = self.raw_input(node)
        if node.kind in (FLOAT, PACKED) or node.interval.low >= 0 or (width is not None and width <= held.bits):
            return raw
        return _signed(raw, held.bits)

    def raw_input(self, node: Input) -> Text:
        """Code for the bits of an operand or lane, unsigned."""
        held = self.held(node)
        if held.bits == held.whole:
            return self.name(node.name, held.whole)
        shifted = Text(f"{node.name} >> {held.low}") if held.low else Text(node.name, True)
        return shifted if held.low + held.bits == held.whole else Text(f"{shifted.code} & {mask(held.bits)}")

    def exactly_raw(self, node: Input, width: int) -> Text | None:
        bits = self.held(node).bits
        return self.raw_input(node) if bits == width or (node.interval.low >= 0 and bits < width) else None

    def name(self, name: str, bits: int) -> Text:
        return Text(name, True, passes=frozenset({bits // 8}))

    def local(self, node: Local, width: int | None) -> Text:
        variable = node.variable
        bits = self.stored.get(variable)
        made = Text(variable.identifier, True, passes=self.passes.get(variable, NOTHING))
        if bits is None or node.kind in (FLOAT, PACKED) or (width is not None and width <= bits):
            return made
        return made if node.interval.low >= 0 else _signed(made, bits)

    def raw_local(self, node: Local, width: int) -> Text | None:
        return self.local(node, width) if self.stored.get(node.variable) == width else None

    # Operators

    def unary(self, node: Unary, width: int | None) -> Text:
        if node.operator == "not":
            return self.truth(node, width)
        if node.kind == FLOAT:
            return Text(f"_negate({self.value(node.operand).bare})", True)
        made = self.modulo(node.operand, width)
        if node.operator == "~":
            return Text(f"~{made.closed}")
        return Text(f"-{made.inner}", offset=-made.offset)

    def raw_unary(self, node: Unary, width: int) -> Text | None:
        return Text(f"{self.raw(node.operand, width).inner} ^ {mask(width)}") if node.operator == "~" else None

    def binary(self, node: Binary, width: int | None) -> Text:
        symbol = node.operator
        if node.kind == FLOAT:
            return Text(f"{_FLOAT_NAMES[symbol]}({self.value(node.left).bare}, {self.value(node.right).bare})", True)
        if symbol in ("+", "-"):
            return self.sum(node, width)
        if symbol in ("//", "%", ">>"):
            return Text(f"{self.value(node.left).closed} {symbol} {self.value(node.right).closed}")
        if symbol == "<<":
            return Text(f"{self.modulo(node.left, width).closed} << {self.value(node.right).closed}")
        left_width = right_width = width
        if symbol == "&" and width is None:
            if node.right.interval.low >= 0:
                left_width = node.right.interval.high.bit_length()
            elif node.left.interval.low >= 0:
                right_width = node.left.interval.high.bit_length()
        return Text(
            f"{self.modulo(node.left, left_width).closed} {symbol} {self.modulo(node.right, right_width).closed}"
        )

    def sum(self, node: Binary, width: int | None) -> Text:
        sign = 1 if node.operator == "+" else -1
        if isinstance(node.right, Number):
            return self.modulo(node.left, width).plus(sign * node.right.value)
        left, right = self.modulo(node.left, width), self.modulo(node.right, width)
        return Text(f"{left.inner} {node.operator} {right.inner}", offset=left.offset + sign * right.offset)

    def comparison(self, node: Compare) -> Text:
        left, right, symbol = node.left, node.right, node.operator
        if left.kind == FLOAT:
            return Text(f"_float({self.value(left).bare}) {symbol} _float({self.value(right).bare})")
        if left.kind == PACKED:
            return Text(f"{self.value(left).closed} {symbol} {self.value(right).closed}")
        if symbol in ("==", "!=") and (width := self.common_width(left, right)):
            one, other = self.raw(left, width), self.raw(right, width)
            return Text(f"{one.inner} {symbol} {other.inner}")
        one, other = self.value(left), self.value(right)
        if isinstance(right, Number):
            return Text(f"{one.inner} {symbol} {literal(right.value - one.offset)}")
        if isinstance(left, Number):
            return Text(f"{literal(left.value - other.offset)} {symbol} {other.inner}")
        gap = Text(other.code, other.atom, other.offset - one.offset)
        return Text(f"{one.inner} {symbol} {gap.closed}")

    def common_width(self, left: Node, right: Node) -> int | None:
        """A width in which equal bits mean equal values and that costs no conversion; None if there is none."""
        for node in (left, right):
            if isinstance(node, Input):
                width = self.held(node).bits
                for low, high in ((-(1 << width - 1), (1 << width - 1) - 1), (0, (1 << width) - 1)):
                    if left.interval.within(low, high) and right.interval.within(low, high):
                        return width
        return None

    def logic(self, node: Logic) -> Text:
        parts = [self.test(node.parts[0]).inner]
        self.inside += 1
        parts += [self.test(part).inner for part in node.parts[1:]]
        self.inside -= 1
        return Text(f" {node.operator} ".join(parts))

    def choose(self, node: Choose, width: int | None) -> Text:
        return self.chosen(node, lambda arm: self.modulo(arm, width).settled())

    def raw_choose(self, node: Choose, width: int) -> Text:
        return self.chosen(node, lambda arm: self.raw(arm, width))

    def chosen(self, node: Choose, write: Callable[[Node], Text]) -> Text:
        test = self.test(node.test).inner
        self.inside += 1
        yes, no = write(node.yes), write(node.no)
        self.inside -= 1
        return Text(f"{yes.inner} if {test} else {no.inner}", passes=yes.passes | no.passes)

    # Fitting

    def fit(self, node: Fit, width: int | None) -> Text:
        if node.operand.interval.within(node.low, node.high):
            made = self.modulo(node.operand, width)
            return made.copied(node.bits) if node.how == "wrap" else made.computed()
        if node.how == "sat":
            return self.saturated(node, None)
        return self.reread(node.operand, node.bits, node.to_signed and node.signed, width)

    def raw_fit(self, node: Fit, width: int) -> Text | None:
        if node.operand.interval.within(node.low, node.high):
            made = self.raw(node.operand, width)
            return made.copied(node.bits) if node.how == "wrap" else made.computed()
        if node.how == "sat":
            return self.saturated(node, width)
        if width <= node.bits:
            return self.raw(node.operand, width).copied(width)
        return None if node.to_signed else self.raw(node.operand, node.bits).copied(node.bits)

    def reread(self, operand: Node, bits: int, signed: bool, width: int | None) -> Text:
        """The low ``bits`` of a value as a number."""
        if width is not None and width <= bits:
            return self.modulo(operand, width).copied(bits)
        made = self.raw(operand, bits).copied(bits)
        return _signed(made, bits) if signed else made

    def saturated(self, node: Fit, width: int | None) -> Text:
        """Exact, or with ``width`` raw."""
        inside, made, name = node.operand.interval, self.value(node.operand), self.temporary()

        def limit(value: int) -> str:
            return literal(value if width is None else value & (1 << width) - 1)

        tests = []
        if inside.low < node.low:
            tests.append((limit(node.low), "<", node.low - made.offset))
        if inside.high > node.high:
            tests.append((limit(node.high), ">", node.high - made.offset))
        code, first = "", f"({name} := {made.code})"
        for shown, symbol, bound in tests:
            code += f"{shown} if {first} {symbol} {literal(bound)} else "
            first = name
        rest = Text(name, True, made.offset)
        if width is None:
            return Text(code + rest.bare)
        in_range = max(inside.low, node.low) >= 0 and min(inside.high, node.high) >> width == 0
        offset = made.offset & (1 << width) - 1
        shown = f"({name} + {literal(offset)})" if offset else name
        return Text(code + (rest.bare if in_range else f"{shown} & {mask(width)}"))

    # Iteration and calls

    def iterate(self, node: Iterate, width: int | None) -> Text:
        name = node.variable.identifier
        start = self.value(node.start)
        self.passes[node.variable] = SOME
        if self.inside:
            step = self.value(node.step)
            return Text(f"(({name} := {start.bare}), [({name} := {step.bare}) for _k in _range({node.count})])[1][-1]",
                        True, passes=SOME)  # fmt: skip
        self.lines.append(f"{name} = {start.bare}")
        outer, self.lines = self.lines, []
        step = self.value(node.step)
        body = [*self.lines, f"{name} = {step.bare}"]
        self.lines = [*outer, f"for _k in _range({node.count}):", *(f"    {line}" for line in body)]
        return Text(name, True, passes=SOME)

    def call(self, node: Call, width: int | None) -> Text:
        made: Text = calls.CALLS[node.function](self, node, width)
        return made

    def raw_call(self, node: Call, width: int) -> Text | None:
        special = calls.RAW_CALLS.get(node.function)
        made: Text | None = special(self, node, width) if special else None
        return made


def _signed(raw: Text, bits: int) -> Text:
    """Bits read as a signed number."""
    sign = 1 << bits - 1
    return Text(f"{raw.inner} ^ {literal(sign)}", offset=-sign)


def _joined(name: str, kind: ValueType, results: Mapping[tuple[str, int | None], str]) -> str:
    """The code of a whole output: lanes side by side."""
    if (name, None) in results:
        return results[name, None]
    lanes = [f"{results[name, lane]} << {lane * kind.bits}" if lane else results[name, 0] for lane in range(kind.lanes)]
    return " | ".join(lanes)


_MODULO: Mapping[type, Callable[..., Text]] = {
    Number: Writer.number, Real: Writer.real, Input: Writer.input, Local: Writer.local, Unary: Writer.unary,
    Binary: Writer.binary, Compare: Writer.truth, Logic: Writer.truth, Choose: Writer.choose, Fit: Writer.fit,
    Iterate: Writer.iterate, Call: Writer.call,
}  # fmt: skip
_RAW: Mapping[type, Callable[..., Text | None]] = {
    Number: Writer.raw_number, Input: Writer.exactly_raw, Local: Writer.raw_local, Unary: Writer.raw_unary,
    Choose: Writer.raw_choose, Fit: Writer.raw_fit, Call: Writer.raw_call,
}  # fmt: skip
