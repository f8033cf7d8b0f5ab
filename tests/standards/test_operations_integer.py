"""Integer, memory and control operations against the RISC-V unprivileged ISA specification (version 20240411)."""

from __future__ import annotations

import pytest

from .exact import binary, down, fold, limit, limitu, nearest, over
from .shipped import Model, by_value, check, covered

WORDS = 2**32
LOWEST = -(2**31)


def quotient(a: int, b: int) -> int:
    """Rounded towards zero, b not 0."""
    return abs(a) // abs(b) * (1 if (a < 0) == (b < 0) else -1)


def turned_left(a: int, b: int) -> int:
    text = binary(a)
    return int(text[b % 32 :] + text[: b % 32], 2)


def bitwise(table: str) -> Model:
    """A function of bits, by its results for 00, 01, 10, 11."""
    return lambda a, b: fold(
        int("".join(table[int(x + y, 2)] for x, y in zip(binary(a), binary(b), strict=True)), 2), 32
    )


INTEGER: dict[str, Model] = {
    "add": lambda a, b: fold(a + b, 32),
    "sub": lambda a, b: fold(a - b, 32),
    "and": bitwise("0001"),
    "or": bitwise("0111"),
    "xor": bitwise("0110"),
    "sll": lambda a, b: fold(a * 2 ** (b % 32), 32),
    "srl": lambda a, b: a // 2 ** (b % 32),
    "sra": lambda a, b: a // 2 ** (b % 32),
    "slt": lambda a, b: int(a < b),
    "sltu": lambda a, b: int(a < b),
    "mul": lambda a, b: fold(a * b, 32),
    "mulh": lambda a, b: a * b // WORDS,
    "mulhsu": lambda a, b: a * b // WORDS,
    "mulhu": lambda a, b: a * b // WORDS,
    "div": lambda a, b: -1 if b == 0 else fold(quotient(a, b), 32),
    "divu": lambda a, b: WORDS - 1 if b == 0 else a // b,
    "rem": lambda a, b: a if b == 0 else a - quotient(a, b) * b,
    "remu": lambda a, b: a if b == 0 else a % b,
    "andn": bitwise("0010"),
    "orn": bitwise("1011"),
    "xnor": bitwise("1001"),
    "clz": lambda a: 32 - a.bit_length(),
    "ctz": lambda a: 32 if a == 0 else len(binary(a)) - len(binary(a).rstrip("0")),
    "cpop": lambda a: binary(a).count("1"),
    "max": max,
    "maxu": max,
    "min": min,
    "minu": min,
    "sext.b": lambda a: fold(a, 8),
    "sext.h": lambda a: fold(a, 16),
    "zext.b": lambda a: a % 256,
    "zext.h": lambda a: a % 65536,
    "rol": turned_left,
    "ror": lambda a, b: turned_left(a, -b),
    "orc.b": lambda a: tuple(255 if x else 0 for x in a),
    "rev8": lambda a: a[::-1],
    "li": lambda n: n,
    "mv": lambda a: a,
    "not": lambda a: -1 - a,
    "neg": lambda a: fold(-a, 32),
    "seqz": lambda a: int(a == 0),
    "snez": lambda a: int(a != 0),
    "sltz": lambda a: int(a < 0),
    "sgtz": lambda a: int(a > 0),
    "seq": lambda a, b: int(a == b),
    "sne": lambda a, b: int(a != b),
    "sge": lambda a, b: int(a >= b),
    "sgeu": lambda a, b: int(a >= b),
    "czero.eqz": lambda a, b: a if b else 0,
    "czero.nez": lambda a, b: 0 if b else a,
    "select": lambda c, a, b: a if c else b,
    "sh1add": lambda a, b: fold(a * 2 + b, 32),
    "sh2add": lambda a, b: fold(a * 4 + b, 32),
    "sh3add": lambda a, b: fold(a * 8 + b, 32),
}

MEMORY: dict[str, Model] = {
    **{name: lambda loaded: loaded for name in ("lb", "lbu", "lh", "lhu", "lw", "ld")},
    "lb.h2": lambda loaded: (fold(loaded, 8), fold(down(over(loaded, 8)), 8)),
    "lbu.h2": lambda loaded: (loaded % 256, loaded // 256),
    "lh.q31": lambda loaded: loaded * 65536,
    "lh.h2": lambda loaded: (loaded, loaded),
    "sb": lambda a: a % 256,
    "sh": lambda a: a % 65536,
    "sw": lambda a: a,
    "sd": lambda a: a,
    "sh.half": lambda a: a,
    "sb.h2.sat": lambda a: sum(limit(x, 8) % 256 * 256**k for k, x in enumerate(a)),
    "sbu.h2.sat": lambda a: sum(limitu(x, 8) * 256**k for k, x in enumerate(a)),
    "sh.q31.rnd.sat": lambda a: limit(nearest(over(a, 16)), 16),
}

CONTROL: dict[str, Model] = {
    "jump": lambda: 1,
    "call": lambda link: (link, 1),
    "count": lambda r: (r - 1, 1) if r else (0, 0),
    "beq": lambda a, b: int(a == b),
    "bne": lambda a, b: int(a != b),
    "blt": lambda a, b: int(a < b),
    "bge": lambda a, b: int(a >= b),
    "bltu": lambda a, b: int(a < b),
    "bgeu": lambda a, b: int(a >= b),
    "beqz": lambda a: int(a == 0),
    "bnez": lambda a: int(a != 0),
    "bltz": lambda a: int(a < 0),
    "bgez": lambda a: int(a >= 0),
    "bgtz": lambda a: int(a > 0),
    "blez": lambda a: int(a <= 0),
}

MODELS = INTEGER | MEMORY | CONTROL


def test_every_operation_has_a_model() -> None:
    covered({**MODELS, "halt": lambda: ()}, "integer", "memory", "control")


@pytest.mark.parametrize("name", MODELS)
def test_model(name: str) -> None:
    check(name, MODELS[name])


def test_division_by_zero_and_overflow() -> None:
    """RISC-V unprivileged ISA, chapter "M", table "Semantics for division by zero and division overflow"."""
    for x in (0, 1, -1, 2**31 - 1, LOWEST):
        assert by_value("div")(x, 0) == -1
        assert by_value("rem")(x, 0) == x
        assert by_value("divu")(x % WORDS, 0) == 2**32 - 1
        assert by_value("remu")(x % WORDS, 0) == x % WORDS
    assert by_value("div")(LOWEST, -1) == LOWEST
    assert by_value("rem")(LOWEST, -1) == 0


def test_dividend_is_quotient_times_divisor_plus_remainder() -> None:
    """RISC-V unprivileged ISA, chapter "M": dividend = divisor × quotient + remainder, with the dividend's sign."""
    for a in (7, -7, 0, 2**31 - 1, LOWEST, LOWEST + 1):
        for b in (1, 2, -2, 3, -3, 2**31 - 1, LOWEST):
            q, r = by_value("div")(a, b), by_value("rem")(a, b)
            assert isinstance(q, int)
            assert isinstance(r, int)
            assert q * b + r == a
            assert abs(r) < abs(b)
            assert r == 0 or (r < 0) == (a < 0)


@pytest.mark.parametrize("name", ["sll", "srl", "sra", "rol", "ror"])
def test_only_the_low_five_bits_of_a_shift_count_matter(name: str) -> None:
    """RISC-V unprivileged ISA, chapters "RV32I" (shifts) and "B" (rotations)."""
    shift = by_value(name)
    for b in range(32):
        for above in (32, 64, 2**31, 2**32 - 32):
            assert shift(0x40000001, b + above) == shift(0x40000001, b)


def test_counting_zeros_of_zero_gives_the_width() -> None:
    """RISC-V unprivileged ISA, extension Zbb, clz and ctz: "if the input is 0, the output is XLEN"."""
    assert by_value("clz")(0) == by_value("ctz")(0) == 32


def test_the_specifications_product_of_halves() -> None:
    """RISC-V unprivileged ISA, chapter "M": MULH[[S]U] and MUL together are the 64-bit product, by Python's own."""
    for a in (LOWEST, -1, 0, 1, 2**31 - 1, 0x12345678):
        for b in (LOWEST, -1, 0, 1, 2**31 - 1, -0x76543210):
            low = by_value("mul")(a, b)
            assert isinstance(low, int)
            for name, x, y in (("mulh", a, b), ("mulhu", a % WORDS, b % WORDS), ("mulhsu", a, b % WORDS)):
                high = by_value(name)(x, y)
                assert isinstance(high, int)
                assert high * WORDS + low % WORDS == x * y
