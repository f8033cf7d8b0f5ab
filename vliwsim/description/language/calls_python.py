"""How compiled Python writes the language's built-in functions; the operators are in :mod:`.compile_python`."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING

from vliwsim.description.language.text import Text, literal, mask
from vliwsim.description.language.tree import FLOAT, Call, Fit, Input, Local, Node, Number

if TYPE_CHECKING:
    from vliwsim.description.language.compile_python import Writer


def _patterns(writer: Writer, node: Call) -> list[Text]:
    """The arguments' bits, unsigned."""
    return [writer.raw(argument, argument.pattern or 1) for argument in node.arguments]


def _named(name: str) -> Callable[[Writer, Call, int | None], Text]:
    """A call of a helper with exact arguments."""

    def write(writer: Writer, node: Call, width: int | None) -> Text:
        return Text(f"{name}({', '.join(writer.value(argument).bare for argument in node.arguments)})", True)

    return write


def _clz(writer: Writer, node: Call, width: int | None) -> Text:
    (bits,) = _patterns(writer, node)
    return Text(f"{node.arguments[0].pattern or 1} - ({bits.code}).bit_length()")


def _ctz(writer: Writer, node: Call, width: int | None) -> Text:
    (bits,) = _patterns(writer, node)
    name = writer.temporary()
    return Text(f"({name} & -{name}).bit_length() - 1 if ({name} := {bits.code}) else {node.arguments[0].pattern or 1}")


def _popcount(writer: Writer, node: Call, width: int | None) -> Text:
    (bits,) = _patterns(writer, node)
    return Text(f"({bits.code}).bit_count()", True)


def _clmul(writer: Writer, node: Call, width: int | None) -> Text:
    return Text(f"_clmul({', '.join(bits.code for bits in _patterns(writer, node))})", True)


def _cheap(node: Node) -> bool:
    return isinstance(node, (Input, Local, Number))


def _extreme(writer: Writer, node: Call, width: int | None) -> Text:
    """min, max."""
    return _extreme_of(writer, node, lambda arm: writer.modulo(arm, width).settled())


def _raw_extreme(writer: Writer, node: Call, width: int) -> Text | None:
    if not all(_cheap(argument) for argument in node.arguments):
        return None
    return _extreme_of(writer, node, lambda arm: writer.raw(arm, width))


def _extreme_of(writer: Writer, node: Call, write: Callable[[Node], Text]) -> Text:
    from vliwsim.description.language.tree import Compare

    symbol = "<=" if node.function == "min" else ">="
    left, right = node.arguments
    if _cheap(left) and _cheap(right):
        test = writer.comparison(Compare(symbol, left, right))
        one, other = write(left), write(right)
        return Text(f"{one.inner} if {test.code} else {other.inner}")  # the test has refused undefined values
    if isinstance(left, Number):
        left, right = right, left
    one_name = writer.temporary()
    one, other = writer.value(left), writer.value(right)
    if isinstance(right, Number):
        return Text(f"{one_name} if ({one_name} := {one.bare}) {symbol} {other.code} else {other.code}")
    other_name = writer.temporary()
    return Text(f"{one_name} if ({one_name} := {one.bare}) {symbol} ({other_name} := {other.bare}) else {other_name}")


def _abs(writer: Writer, node: Call, width: int | None) -> Text:
    made = writer.value(node.arguments[0])
    if node.kind == FLOAT:
        return Text(f"_absolute({made.bare})", True)
    name = writer.temporary()
    return Text(f"{name} if ({name} := {made.bare}) >= 0 else -{name}")


def _divide(writer: Writer, node: Call, width: int | None) -> Text:
    """tdiv, trem."""
    symbol = "//" if node.function == "tdiv" else "%"
    left, right = (writer.value(argument) for argument in node.arguments)
    low, divisor_low = node.arguments[0].interval.low, node.arguments[1].interval.low
    if low >= 0 and divisor_low >= 0:
        return Text(f"{left.closed} {symbol} {right.closed}")
    one, other = writer.temporary(), writer.temporary()
    signs = f"(({one} := {left.bare}) < 0) == (({other} := {right.bare}) < 0)"
    return Text(f"{one} {symbol} {other} if {signs} else -(-{one} {symbol} {other})")


def _round(writer: Writer, node: Call, width: int | None) -> Text:
    value, count = node.arguments
    made = writer.value(value)
    if not isinstance(count, Number):
        return _round_by(made, writer.value(count), node.mode, writer)
    n = count.value
    if n == 0:
        return made.computed()
    half = 1 << n - 1
    if node.mode == "half_up":
        return Text(f"{made.plus(half).closed} >> {n}")
    if node.mode == "floor":
        return Text(f"{made.closed} >> {n}")
    if node.mode == "ceiling":
        return Text(f"{made.plus((1 << n) - 1).closed} >> {n}")
    name = writer.temporary()
    first = f"({name} := {made.bare})"
    if node.mode == "half_even":
        return Text(
            f"({first} + ({name} >> {n} & 1) + {literal(half - 1)}) >> {n}"
            if half > 1
            else f"({first} + ({name} >> {n} & 1)) >> {n}"
        )
    if value.interval.low >= 0:
        return Text(f"{made.plus(half if node.mode == 'half_away' else 0).closed} >> {n}")
    if node.mode == "half_away":
        return Text(f"({name} + {literal(half)}) >> {n} if {first} >= 0 else -(({literal(half)} - {name}) >> {n})")
    return Text(f"{name} >> {n} if {first} >= 0 else -(-{name} >> {n})")


def _round_by(made: Text, count: Text, mode: str, writer: Writer) -> Text:
    """Rounding by a count known only when it runs."""
    if mode == "floor":
        return Text(f"{made.closed} >> {count.closed}")
    if mode == "half_up":
        name = writer.temporary()
        return Text(f"({made.closed} + (1 << ({name} := {count.bare}) >> 1)) >> {name}")
    return Text(f'_rounded({made.bare}, {count.bare}, "{mode}")', True)


def _bits(writer: Writer, node: Call, width: int | None) -> Text:
    value, low, count = node.arguments
    if not (isinstance(low, Number) and isinstance(count, Number)):
        made = writer.value(value)
        return Text(f"{made.closed} >> {writer.value(low).closed} & {_ones(writer, count)}")
    top = low.value + count.value
    if count.value == 0:
        return Text(f"{writer.value(value).closed} & 0")
    plain = value.kind == "integer"
    if plain and value.interval.within(0, (1 << top) - 1):
        made = writer.value(value)
        return Text(f"{made.closed} >> {low.value}") if low.value else made.settled().copied(count.value)
    if low.value == 0:
        return writer.raw(value, top).copied(top) if plain or top >= 32 else _masked(writer.value(value), 0, top)
    return _masked(writer.modulo(value, top) if plain else writer.value(value), low.value, count.value)


def _masked(made: Text, low: int, count: int) -> Text:
    return Text(f"{made.closed} >> {low} & {mask(count)}" if low else f"{made.closed} & {mask(count)}")


def _ones(writer: Writer, count: Node) -> str:
    if isinstance(count, Number):
        return mask(count.value)
    return f"(1 << {writer.value(count).closed}) - 1"


def _concat(writer: Writer, node: Call, width: int | None) -> Text:
    terms, at = [], 0
    for argument in reversed(node.arguments):
        size = argument.pattern or 1
        if not _zero(argument):
            made = writer.raw(argument, size)
            terms.append(Text(f"{made.inner} << {at}") if at else made)
        at += size
    if not terms:
        return Text("0", True)
    if len(terms) == 1:
        return terms[0].computed()
    return Text(" | ".join(term.inner for term in reversed(terms)))


def _zero(node: Node) -> bool:
    """Is it the literal 0, with a width or without?"""
    return (isinstance(node, Number) and node.value == 0) or (isinstance(node, Fit) and _zero(node.operand))


def _reread(writer: Writer, node: Call, width: int | None) -> Text:
    """unsigned, signed."""
    return writer.reread(node.arguments[0], node.pattern or 1, node.signed, width)


def _raw_reread(writer: Writer, node: Call, width: int) -> Text | None:
    bits = node.pattern or 1
    if width > bits and node.signed:
        return None
    return writer.raw(node.arguments[0], min(bits, width)).copied(min(bits, width))


def _float_to_int(writer: Writer, node: Call, width: int | None) -> Text:
    made, to = writer.value(node.arguments[0]), node.to
    assert to is not None
    return Text(f'_to_int({made.bare}, {literal(to.low)}, {literal(to.high)}, "{node.mode}")', True)


def _as_float(writer: Writer, node: Call, width: int | None) -> Text:
    return writer.raw(node.arguments[0], 32)


CALLS: Mapping[str, Callable[[Writer, Call, int | None], Text]] = {
    "abs": _abs, "min": _extreme, "max": _extreme, "tdiv": _divide, "trem": _divide, "round": _round, "bits": _bits,
    "concat": _concat, "unsigned": _reread, "signed": _reread, "clz": _clz, "ctz": _ctz, "popcount": _popcount,
    "clmul": _clmul, "sqrt": _named("_sqrt"), "fma": _named("_fma"), "fmin": _named("_fmin"),
    "fmax": _named("_fmax"), "int_to_float": _named("_from_int"), "classify": _named("_classify"),
    "float_to_int": _float_to_int, "as_float": _as_float,
}  # fmt: skip
RAW_CALLS: Mapping[str, Callable[[Writer, Call, int], Text | None]] = {
    "min": _raw_extreme, "max": _raw_extreme, "unsigned": _raw_reread, "signed": _raw_reread,
}  # fmt: skip
