"""Values of meanings in LLVM's text: their bits, and which of their bytes are undefined."""

from __future__ import annotations

from typing import NamedTuple

from vliwsim.description.language.tree import (
    Interval,
    Node,
    Variable,
)
from vliwsim.description.operations import Operation
from vliwsim.native.text import Text, number

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


def container(bits: int) -> int:
    return next(w for w in (32, 64, 128, 256) if bits <= w)


def signed_bits(interval: Interval) -> int:
    return 1 + max(interval.high.bit_length(), (~interval.low).bit_length() if interval.low < 0 else 0)


class Values(Text):
    """What every node of a meaning needs."""

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

    def common(self, *nodes: Node) -> tuple[int, bool]:
        """A width that holds all these values exactly, and whether as signed numbers."""
        if all(node.interval.low >= 0 for node in nodes):
            return container(max(node.interval.high.bit_length() for node in nodes)), False
        return container(max(signed_bits(node.interval) for node in nodes)), True

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

    def value(self, node: Node) -> Val:
        """Code for a node's value in its own width."""
        raise NotImplementedError
