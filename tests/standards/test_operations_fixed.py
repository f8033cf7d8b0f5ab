"""Fixed-point operations against exact integers and fractions, and against ITU-T G.191's basic operators."""

from __future__ import annotations

import random

import pytest

from vliwsim.description.language.types import type_named

from .exact import down, even, fold, limit, nearest, over, spare
from .shipped import Model, by_value, check, covered, extremes

TOP, BOTTOM = 2**31 - 1, -(2**31)


def flagged(bits: int, exact: int) -> tuple[int, int]:
    """A saturated result and whether it was."""
    return limit(exact, bits), int(exact != limit(exact, bits))


def shifted(a: int, b: int) -> int:
    """a × 2**b: up saturating, down to the floor."""
    return limit(a * 2 ** min(b, 64), 32) if b >= 0 else down(over(a, min(-b, 64)))


def shifted_rounded(a: int, b: int) -> int:
    return limit(a * 2 ** min(b, 64), 32) if b >= 0 else nearest(over(a, min(-b, 64)))


def fraction(a: int, b: int, bits: int) -> int:
    """a / b as a fraction of ``bits`` bits, rounded towards zero."""
    if b == 0:
        return limit(2**40 if a >= 0 else -(2**40), bits)
    size = abs(a) * 2 ** (bits - 1) // abs(b)
    return limit(size if (a < 0) == (b < 0) else -size, bits)


MODELS: dict[str, Model] = {
    "add.sat": lambda a, b: limit(a + b, 32),
    "add.sat.flag": lambda a, b: flagged(32, a + b),
    "add.halved": lambda a, b: down(over(a + b, 1)),
    "add.halved.rnd": lambda a, b: nearest(over(a + b, 1)),
    "sub.sat": lambda a, b: limit(a - b, 32),
    "sub.sat.flag": lambda a, b: flagged(32, a - b),
    "sub.halved": lambda a, b: down(over(a - b, 1)),
    "neg.sat": lambda a: limit(-a, 32),
    "abs": lambda a: fold(abs(a), 32),
    "abs.sat": lambda a: limit(abs(a), 32),
    "absdiff": lambda a, b: max(a, b) - min(a, b),
    "clamp": lambda a, low, high: high if low > high else sorted((low, a, high))[1],
    "clip": lambda a, b: limit(a, b % 32 + 1),
    "clipu": lambda a, b: sorted((0, a, 2 ** (b % 32) - 1))[1],
    "sll.sat": lambda a, b: limit(a * 2 ** (b % 32), 32),
    "sll.sat.flag": lambda a, b: flagged(32, a * 2 ** (b % 32)),
    "sra.rnd": lambda a, b: nearest(over(a, b % 32)),
    "sra.even": lambda a, b: even(over(a, b % 32)),
    "srl.rnd": lambda a, b: nearest(over(a, b % 32)),
    "shift.sat": shifted,
    "shift.rnd.sat": shifted_rounded,
    "headroom": lambda a: spare(a, 32),
    "norm": lambda a: a * 2 ** spare(a, 32),
    "mul.half": lambda a, b: a * b,
    "mulu.half": lambda a, b: a * b,
    "mulsu.half": lambda a, b: a * b,
    "mul.half.acc": lambda acc, a, b: fold(acc + a * b, 32),
    "mul.half.acc.sat": lambda acc, a, b: limit(acc + a * b, 32),
    "mul.half.acc.sat.flag": lambda acc, a, b: flagged(32, acc + a * b),
    "mul.half.less": lambda acc, a, b: fold(acc - a * b, 32),
    "mul.half.less.sat": lambda acc, a, b: limit(acc - a * b, 32),
    "mul.pair.half.acc": lambda acc, a, b: fold(acc + a * b, 64),
    "mul.q15": lambda a, b: down(over(a * b, 15)),
    "mul.q15.sat": lambda a, b: limit(down(over(a * b, 15)), 16),
    "mul.q15.rnd": lambda a, b: nearest(over(a * b, 15)),
    "mul.q15.rnd.sat": lambda a, b: limit(nearest(over(a * b, 15)), 16),
    "mul.q15.rnd.sat.flag": lambda a, b: flagged(16, nearest(over(a * b, 15))),
    "mul.q15.even": lambda a, b: even(over(a * b, 15)),
    "mul.q15.wide": lambda a, b: fold(2 * a * b, 32),
    "mul.q15.wide.sat": lambda a, b: limit(2 * a * b, 32),
    "mul.q15.wide.acc.sat": lambda acc, a, b: limit(acc + limit(2 * a * b, 32), 32),
    "mul.q15.wide.less.sat": lambda acc, a, b: limit(acc - limit(2 * a * b, 32), 32),
    "mul.q31": lambda a, b: fold(down(over(a * b, 31)), 32),
    "mul.q31.sat": lambda a, b: limit(down(over(a * b, 31)), 32),
    "mul.q31.rnd": lambda a, b: fold(nearest(over(a * b, 31)), 32),
    "mul.q31.rnd.sat": lambda a, b: limit(nearest(over(a * b, 31)), 32),
    "mul.q31.acc.sat": lambda acc, a, b: limit(acc + down(over(a * b, 31)), 32),
    "mul.q31.less.sat": lambda acc, a, b: limit(acc - down(over(a * b, 31)), 32),
    "mul.q31.q15": lambda a, b: fold(down(over(a * b, 15)), 32),
    "mul.q31.q15.rnd.sat": lambda a, b: limit(nearest(over(a * b, 15)), 32),
    "mul.q31.q15.acc.sat": lambda acc, a, b: limit(acc + down(over(a * b, 15)), 32),
    "mulh.rnd": lambda a, b: nearest(over(a * b, 32)),
    "mul.pair": lambda a, b: a * b,
    "mulu.pair": lambda a, b: a * b,
    "mul.pair.acc": lambda acc, a, b: fold(acc + a * b, 64),
    "mul.pair.acc.sat": lambda acc, a, b: limit(acc + a * b, 64),
    "mul.pair.less": lambda acc, a, b: fold(acc - a * b, 64),
    "mv.pair": lambda a: a,
    "add.pair": lambda a, b: fold(a + b, 64),
    "add.pair.sat": lambda a, b: limit(a + b, 64),
    "add.pair.acc": lambda acc, a: fold(acc + a, 64),
    "sub.pair": lambda a, b: fold(a - b, 64),
    "sub.pair.sat": lambda a, b: limit(a - b, 64),
    "sll.pair": lambda a, b: fold(a * 2 ** (b % 64), 64),
    "srl.pair": lambda a, b: a // 2 ** (b % 64),
    "sra.pair": lambda a, b: a // 2 ** (b % 64),
    "headroom.pair": lambda a: spare(a, 64),
    "narrow.pair": lambda a, b: fold(down(over(a, b % 64)), 32),
    "narrow.pair.sat": lambda a, b: limit(down(over(a, b % 64)), 32),
    "narrow.pair.rnd.sat": lambda a, b: limit(nearest(over(a, b % 64)), 32),
    "narrow.q15.rnd.sat": lambda a: limit(nearest(over(a, 16)), 16),
    "narrow.q15.rnd.sat.flag": lambda a: flagged(16, nearest(over(a, 16))),
    "widen.q31": lambda a: a * 65536,
    "widen.pair": lambda a: a,
    "widenu.pair": lambda a: a,
    "mv.half": lambda a: a,
    "mvu.half": lambda a: a,
    "div.q15.sat": lambda a, b: fraction(a, b, 16),
    "div.q31.sat": lambda a, b: fraction(a, b, 32),
}


def test_every_operation_has_a_model() -> None:
    covered(MODELS, "fixed")


@pytest.mark.parametrize("name", MODELS)
def test_model(name: str) -> None:
    check(name, MODELS[name])


# ITU-T G.191 (2022), Software Tools Library, basic operators: definitions from memory of basop32's text.


def saturate(x: int) -> int:
    return max(BOTTOM, min(TOP, x))


def mult(a: int, b: int) -> int:
    product = (a * b & ~0x7FFF) >> 15
    return 32767 if product > 32767 else product


def mult_r(a: int, b: int) -> int:
    product = (a * b + 0x4000 & ~0x7FFF) >> 15
    return 32767 if product > 32767 else product


def l_mult(a: int, b: int) -> int:
    return TOP if a * b == 0x40000000 else a * b * 2


def l_mac(acc: int, a: int, b: int) -> int:
    return saturate(acc + l_mult(a, b))


def l_msu(acc: int, a: int, b: int) -> int:
    return saturate(acc - l_mult(a, b))


def to_half(x: int) -> int:
    return saturate(x + 0x8000) >> 16


G191 = {
    "mul.q15.sat": mult,
    "mul.q15.rnd.sat": mult_r,
    "mul.q15.wide.sat": l_mult,
    "mul.q15.wide.acc.sat": l_mac,
    "mul.q15.wide.less.sat": l_msu,
    "narrow.q15.rnd.sat": to_half,
    "add.sat": lambda a, b: saturate(a + b),
    "sub.sat": lambda a, b: saturate(a - b),
    "neg.sat": lambda a: TOP if a == BOTTOM else -a,
    "abs.sat": lambda a: TOP if a == BOTTOM else abs(a),
}


@pytest.mark.parametrize("name", G191)
def test_basic_operators_of_the_speech_coders(name: str) -> None:
    check(name, G191[name], count=1500)


def norm_l(x: int) -> int:
    if x in (0, -1):
        return 0 if x == 0 else 31
    size, n = ~x if x < 0 else x, 0
    while size < 0x40000000:
        size, n = size * 2, n + 1
    return n


def test_headroom_is_norm_l() -> None:
    """ITU-T G.191, norm_l; only for 0 it gives 0, where every shift does and we say 31."""
    chance = random.Random(1)
    sizes = [chance.randint(0, TOP) >> chance.randrange(31) for _ in range(500)]
    for x in [*extremes(type_named("i32")), *sizes, *(-size for size in sizes)]:
        assert by_value("headroom")(x) == (norm_l(x) if x else 31)
