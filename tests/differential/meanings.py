"""The few operations the test model knows: which operands are written and read, and what is computed.

Written from the published definitions (RISC-V unprivileged ISA for the scalar names) and the design text, not from
the package's tables. A function takes one :class:`Value` for each source, in the order of ``sources``, and returns one
for each of ``results`` and then one for ``sticky``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from .plain import UNDEFINED, Value

WORD = 0xFFFFFFFF


@dataclass(frozen=True)
class Meaning:
    """``kind``: compute, load, store, branch, count, call or halt. ``bytes``: of the memory access."""

    kind: str
    results: tuple[str, ...] = ()
    sources: tuple[str, ...] = ()
    pairs: tuple[str, ...] = ()
    sticky: str | None = None
    bytes: int = 0
    does: Callable[..., tuple[Value, ...]] | None = None
    taken: Callable[[int, int], bool] | None = None


def signed(bits: int, width: int = 32) -> int:
    return bits - (1 << width) if bits >> (width - 1) else bits


def scalar(f: Callable[..., int]) -> Callable[..., tuple[Value, ...]]:
    """One 32-bit result, undefined as a whole if any byte computed with is undefined."""

    def does(*values: Value) -> tuple[Value, ...]:
        if any(v.unknown for v in values):
            return (UNDEFINED,)
        return (Value(f(*(v.bits for v in values)) & WORD),)

    return does


def lanes(f: Callable[[int, int], int], width: int) -> Callable[..., tuple[Value, ...]]:
    """Lane by lane: "results inherit it lane by lane". ``f`` takes the lanes signed."""

    def does(a: Value, b: Value) -> tuple[Value, ...]:
        bits = unknown = 0
        mask, bytes_ = (1 << width) - 1, (1 << width // 8) - 1
        for k in range(32 // width):
            if (a.unknown | b.unknown) >> (k * width // 8) & bytes_:
                unknown |= bytes_ << (k * width // 8)
            else:
                x, y = signed(a.bits >> k * width & mask, width), signed(b.bits >> k * width & mask, width)
                bits |= (f(x, y) & mask) << k * width
        return (Value(bits, unknown),)

    return does


def divide(a: int, b: int) -> int:
    """RISC-V div: rounds towards zero; by zero gives -1; the overflow gives the dividend."""
    a, b = signed(a), signed(b)
    if b == 0:
        return -1
    quotient = abs(a) // abs(b)
    return -quotient if (a < 0) != (b < 0) else quotient


def remainder(a: int, b: int) -> int:
    """RISC-V rem: the sign of the dividend; by zero gives the dividend."""
    return a if b == 0 else signed(a) - signed(b) * signed(divide(a, b) & WORD)


def division(f: Callable[[int, int], int], by_zero: Callable[[Value], Value]) -> Callable[..., tuple[Value, ...]]:
    """A division chooses by its divisor: by a defined 0 it gives ``by_zero`` of the dividend and computes nothing."""

    def does(a: Value, b: Value) -> tuple[Value, ...]:
        if b == Value(0):
            return (by_zero(a),)
        return scalar(f)(a, b)

    return does


def select(a: Value, b: Value, c: Value) -> tuple[Value, ...]:
    """A select passes only the chosen operand (an undefined selector gives undefined)."""
    if c.unknown:
        return (UNDEFINED,)
    return (a if c.bits else b,)


def pack(a: Value, b: Value) -> tuple[Value, ...]:
    """Two halves side by side, ``a`` low: "bytes keep it through load, store and pack"."""
    return (Value(a.bits | b.bits << 16, a.unknown | b.unknown << 2),)


def wide(f: Callable[..., int]) -> Callable[..., tuple[Value, ...]]:
    """One 64-bit result in a pair, one lane: undefined as a whole if any byte computed with is undefined."""

    def does(*values: Value) -> tuple[Value, ...]:
        if any(v.unknown for v in values):
            return (Value(0, 0b11111111),)
        return (Value(f(*(v.bits for v in values)) & 0xFFFFFFFFFFFFFFFF),)

    return does


def add_flag(a: Value, b: Value) -> tuple[Value, ...]:
    """Saturating addition, and 1 if it saturated."""
    if a.unknown or b.unknown:
        return (UNDEFINED, UNDEFINED)
    exact = signed(a.bits) + signed(b.bits)
    held = max(-(1 << 31), min((1 << 31) - 1, exact))
    return (Value(held & WORD), Value(int(held != exact)))


def saturated16(x: int) -> int:
    return max(-(1 << 15), min((1 << 15) - 1, x))


def two(f: Callable[[int, int], int]) -> Meaning:
    return Meaning("compute", ("d",), ("a", "b"), does=scalar(f))


def packed(f: Callable[[int, int], int], width: int) -> Meaning:
    return Meaning("compute", ("d",), ("a", "b"), does=lanes(f, width))


def branch(taken: Callable[[int, int], bool]) -> Meaning:
    return Meaning("branch", sources=("a", "b", "to"), taken=taken)


def copied(value: Value) -> tuple[Value, ...]:
    return (value,)


def extended(width: int, sign: bool) -> Callable[..., tuple[Value, ...]]:
    """A narrow load widens its value: undefined as a whole if any byte of it is."""
    return scalar(lambda x: signed(x, width) if sign else x)


def load(size: int, does: Callable[..., tuple[Value, ...]], pair: bool = False) -> Meaning:
    return Meaning("load", ("d",), pairs=("d",) if pair else (), bytes=size, does=does)


def store(size: int, pair: bool = False) -> Meaning:
    return Meaning("store", sources=("a",), pairs=("a",) if pair else (), bytes=size)


MEANINGS: dict[str, Meaning] = {
    "add": two(lambda a, b: a + b),
    "sub": two(lambda a, b: a - b),
    "and": two(lambda a, b: a & b),
    "or": two(lambda a, b: a | b),
    "xor": two(lambda a, b: a ^ b),
    "sll": two(lambda a, b: a << (b & 31)),
    "srl": two(lambda a, b: a >> (b & 31)),
    "sra": two(lambda a, b: signed(a) >> (b & 31)),
    "slt": two(lambda a, b: int(signed(a) < signed(b))),
    "sltu": two(lambda a, b: int(a < b)),
    "min": two(lambda a, b: min(signed(a), signed(b))),
    "max": two(lambda a, b: max(signed(a), signed(b))),
    "mul": two(lambda a, b: a * b),
    "div": Meaning("compute", ("d",), ("a", "b"), does=division(divide, lambda _: Value(WORD))),
    "rem": Meaning("compute", ("d",), ("a", "b"), does=division(remainder, lambda a: a)),
    "mul.half": two(lambda a, b: signed(a, 16) * signed(b, 16)),
    "add.h2": packed(lambda a, b: a + b, 16),
    "sub.h2": packed(lambda a, b: a - b, 16),
    "add.h2.sat": packed(lambda a, b: saturated16(a + b), 16),
    "add.b4": packed(lambda a, b: a + b, 8),
    "mv": Meaning("compute", ("d",), ("a",), does=copied),
    "li": Meaning("compute", ("d",), ("n",), does=copied),
    "select": Meaning("compute", ("d",), ("a", "b", "c"), does=select),
    "pack.h2": Meaning("compute", ("d",), ("a", "b"), does=pack),
    "add.pair": Meaning("compute", ("d",), ("a", "b"), ("d", "a", "b"), does=wide(lambda a, b: a + b)),
    "mul.pair": Meaning("compute", ("d",), ("a", "b"), ("d",), does=wide(lambda a, b: signed(a) * signed(b))),
    "mul.pair.acc": Meaning(
        "compute", ("acc",), ("acc", "a", "b"), ("acc",), does=wide(lambda acc, a, b: acc + signed(a) * signed(b))
    ),
    "mul.half.acc": Meaning(
        "compute",
        ("acc",),
        ("acc", "a", "b"),
        does=scalar(lambda acc, a, b: acc + signed(a, 16) * signed(b, 16)),
    ),
    "add.sat.flag": Meaning("compute", ("d",), ("a", "b"), sticky="f", does=add_flag),
    "lb": load(1, extended(8, True)),
    "lbu": load(1, extended(8, False)),
    "lh": load(2, extended(16, True)),
    "lhu": load(2, extended(16, False)),
    "lw": load(4, copied),
    "ld": load(8, copied, pair=True),
    "sb": store(1),
    "sh": store(2),
    "sw": store(4),
    "sd": store(8, pair=True),
    "jump": Meaning("branch", sources=("to",), taken=lambda a, b: True),
    "call": Meaning("call", ("d",), ("to",), taken=lambda a, b: True),
    "count": Meaning("count", sources=("r", "to")),
    "beq": branch(lambda a, b: a == b),
    "bne": branch(lambda a, b: a != b),
    "blt": branch(lambda a, b: signed(a) < signed(b)),
    "bge": branch(lambda a, b: signed(a) >= signed(b)),
    "bltu": branch(lambda a, b: a < b),
    "bgeu": branch(lambda a, b: a >= b),
    "halt": Meaning("halt"),
}
