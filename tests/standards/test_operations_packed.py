"""Packed halves and bytes, lane by lane, against exact models, NumPy's integers and complex numbers."""

from __future__ import annotations

import numpy as np
import pytest

from .exact import dot, down, fold, lanes, limit, limitu, nearest, over, spare
from .shipped import Model, by_value, check, covered, operation

Pair = tuple[int, int]


def product(a: Pair, b: Pair) -> Pair:
    """Of two complex numbers."""
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def conjugate(a: Pair) -> Pair:
    return a[0], -a[1]


def rotated(a: Pair) -> Pair:
    """j times a."""
    return -a[1], a[0]


def plus(a: Pair, b: Pair) -> Pair:
    return a[0] + b[0], a[1] + b[1]


def minus(a: Pair, b: Pair) -> Pair:
    return a[0] - b[0], a[1] - b[1]


def each(function: Model, *more: int) -> Model:
    """A function of one number, for both parts."""
    return lambda a: tuple(function(x, *more) for x in a)


def q15(a: Pair, function: Model) -> Pair:
    """Both parts of a product of Q15 fractions rounded to Q15, then made to fit."""
    return function(nearest(over(a[0], 15)), 16), function(nearest(over(a[1], 15)), 16)


def in_pair(low: int, high: int) -> int:
    """Two words as the value of a pair of registers."""
    return high * 2**32 + low % 2**32


def out_of_pair(x: int) -> Pair:
    return fold(x, 32), x // 2**32


def common(name: str, bits: int) -> dict[str, Model]:
    """What both widths have in the same form."""
    return {
        f"add.{name}": lanes(lambda a, b: fold(a + b, bits)),
        f"add.{name}.sat": lanes(lambda a, b: limit(a + b, bits)),
        f"addu.{name}.sat": lanes(lambda a, b: limitu(a + b, bits)),
        f"sub.{name}": lanes(lambda a, b: fold(a - b, bits)),
        f"sub.{name}.sat": lanes(lambda a, b: limit(a - b, bits)),
        f"subu.{name}.sat": lanes(lambda a, b: limitu(a - b, bits)),
        f"abs.{name}.sat": lanes(lambda a: limit(abs(a), bits)),
        f"min.{name}": lanes(min),
        f"max.{name}": lanes(max),
        f"minu.{name}": lanes(min),
        f"maxu.{name}": lanes(max),
        f"seq.{name}": lanes(lambda a, b: -(a == b)),
        f"slt.{name}": lanes(lambda a, b: -(a < b)),
        f"sltu.{name}": lanes(lambda a, b: -(a < b)),
        f"select.{name}": lanes(lambda c, a, b: a if c else b),
        f"sll.{name}": lanes(lambda a, b: fold(a * 2 ** (b % bits), bits)),
        f"srl.{name}": lanes(lambda a, b: a // 2 ** (b % bits)),
        f"sra.{name}": lanes(lambda a, b: a // 2 ** (b % bits)),
    }


HALVES: dict[str, Model] = common("h2", 16) | {
    "add.h2.sat.flag": lambda a, b: (
        lanes(lambda x, y: limit(x + y, 16))(a, b),
        int(any(not -32768 <= x + y <= 32767 for x, y in zip(a, b, strict=True))),
    ),
    "add.h2.halved": lanes(lambda a, b: down(over(a + b, 1))),
    "add.h2.halved.rnd": lanes(lambda a, b: nearest(over(a + b, 1))),
    "sub.h2.halved": lanes(lambda a, b: down(over(a - b, 1))),
    "neg.h2.sat": lanes(lambda a: limit(-a, 16)),
    "abs.h2": lanes(lambda a: fold(abs(a), 16)),
    "absdiff.h2": lanes(lambda a, b: max(a, b) - min(a, b)),
    "sll.h2.sat": lanes(lambda a, b: limit(a * 2 ** (b % 16), 16)),
    "sra.h2.rnd": lanes(lambda a, b: nearest(over(a, b % 16))),
    "headroom.h2": lambda a: min(spare(a[0], 16), spare(a[1], 16)),
    "mul.h2": lanes(lambda a, b: fold(a * b, 16)),
    "mul.pair.h2": lambda a, b: in_pair(a[0] * b[0], a[1] * b[1]),
    "mul.h2.q15": lanes(lambda a, b: fold(down(over(a * b, 15)), 16)),
    "mul.h2.q15.sat": lanes(lambda a, b: limit(down(over(a * b, 15)), 16)),
    "mul.h2.q15.rnd": lanes(lambda a, b: fold(nearest(over(a * b, 15)), 16)),
    "mul.h2.q15.rnd.sat": lanes(lambda a, b: limit(nearest(over(a * b, 15)), 16)),
    "dot.h2": lambda a, b: fold(dot(a, b), 32),
    "dot.h2.sat": lambda a, b: limit(dot(a, b), 32),
    "dot.h2.acc": lambda acc, a, b: fold(acc + dot(a, b), 32),
    "dot.h2.acc.sat": lambda acc, a, b: limit(acc + dot(a, b), 32),
    "dot.h2.less": lambda acc, a, b: fold(acc - dot(a, b), 32),
    "dot.pair.h2.acc": lambda acc, a, b: fold(acc + dot(a, b), 64),
    "pack.h2": lambda a, b: (a, b),
    "pack.h2.sat": lambda a, b: (limit(a, 16), limit(b, 16)),
    "pack.h2.q15.rnd.sat": lambda a, b: (limit(nearest(over(a, 16)), 16), limit(nearest(over(b, 16)), 16)),
    "swap.h2": lambda a: a[::-1],
    "splat.h2": lambda a: (a, a),
    "sum.h2": sum,
    "sum.h2.acc": lambda acc, a: fold(acc + sum(a), 32),
}

COMPLEX: dict[str, Model] = {
    "cmul.h2.re": lambda a, b: product(a, b)[0],
    "cmul.h2.im": lambda a, b: fold(product(a, b)[1], 32),
    "cmul.h2.im.sat": lambda a, b: limit(product(a, b)[1], 32),
    "cmulconj.h2.im": lambda a, b: product(a, conjugate(b))[1],
    "cmul.pair.h2.sat": lambda a, b: in_pair(*each(limit, 32)(product(a, b))),
    "cmul.pair.h2.acc.sat": lambda acc, a, b: in_pair(*each(limit, 32)(plus(out_of_pair(acc), product(a, b)))),
    "cmul.h2.q15.rnd": lambda a, b: q15(product(a, b), fold),
    "cmul.h2.q15.rnd.sat": lambda a, b: q15(product(a, b), limit),
    "cmulconj.h2.q15.rnd": lambda a, b: q15(product(a, conjugate(b)), fold),
    "cmulconj.h2.q15.rnd.sat": lambda a, b: q15(product(a, conjugate(b)), limit),
    "conj.h2.sat": lambda a: each(limit, 16)(conjugate(a)),
    "timesj.h2.sat": lambda a: each(limit, 16)(rotated(a)),
    "addj.h2.sat": lambda a, b: each(limit, 16)(plus(a, rotated(b))),
    "subj.h2.sat": lambda a, b: each(limit, 16)(minus(a, rotated(b))),
    "addj.h2.halved": lambda a, b: each(lambda x: down(over(x, 1)))(plus(a, rotated(b))),
    "subj.h2.halved": lambda a, b: each(lambda x: down(over(x, 1)))(minus(a, rotated(b))),
}

BYTES: dict[str, Model] = common("b4", 8) | {
    "addu.b4.halved": lanes(lambda a, b: down(over(a + b, 1))),
    "addu.b4.halved.rnd": lanes(lambda a, b: nearest(over(a + b, 1))),
    "absdiffu.b4": lanes(lambda a, b: max(a, b) - min(a, b)),
    "sad.b4": lambda a, b: sum(max(x, y) - min(x, y) for x, y in zip(a, b, strict=True)),
    "sad.b4.acc": lambda acc, a, b: (acc + sum(max(x, y) - min(x, y) for x, y in zip(a, b, strict=True))) % 2**32,
    "dot.b4": dot,
    "dot.b4.acc": lambda acc, a, b: fold(acc + dot(a, b), 32),
    "dotu.b4": dot,
    "dotu.b4.acc": lambda acc, a, b: (acc + dot(a, b)) % 2**32,
    "dotsu.b4": dot,
    "dotsu.b4.acc": lambda acc, a, b: fold(acc + dot(a, b), 32),
    "pack.b4": lambda a, b: tuple(fold(x, 8) for x in a + b),
    "pack.b4.sat": lambda a, b: tuple(limit(x, 8) for x in a + b),
    "packu.b4.sat": lambda a, b: tuple(limitu(x, 8) for x in a + b),
    "widen.b4.low": lambda a: a[:2],
    "widen.b4.high": lambda a: a[2:],
    "widenu.b4.low": lambda a: a[:2],
    "widenu.b4.high": lambda a: a[2:],
    "swap.b4": lambda a: (a[1], a[0], a[3], a[2]),
    "splat.b4": lambda a: (a % 256,) * 4,
    "sum.b4": sum,
    "sumu.b4": sum,
}

MODELS = HALVES | COMPLEX | BYTES


def test_every_operation_has_a_model() -> None:
    covered(MODELS, "packed")


@pytest.mark.parametrize("name", MODELS)
def test_model(name: str) -> None:
    check(name, MODELS[name])


NUMPY = {
    "add.h2": (np.int16, np.add),
    "sub.h2": (np.int16, np.subtract),
    "mul.h2": (np.int16, np.multiply),
    "min.h2": (np.int16, np.minimum),
    "max.h2": (np.int16, np.maximum),
    "minu.h2": (np.uint16, np.minimum),
    "maxu.h2": (np.uint16, np.maximum),
    "abs.h2": (np.int16, np.abs),
    "add.b4": (np.int8, np.add),
    "sub.b4": (np.int8, np.subtract),
    "min.b4": (np.int8, np.minimum),
    "max.b4": (np.int8, np.maximum),
    "minu.b4": (np.uint8, np.minimum),
    "maxu.b4": (np.uint8, np.maximum),
}


@pytest.mark.parametrize("name", NUMPY)
def test_lanes_against_numpy_on_the_same_bytes(name: str) -> None:
    """NumPy's fixed-width integers, on 20,000 random words seen as little-endian lanes."""
    kind, operate = NUMPY[name]
    words = np.random.default_rng(7).integers(0, 2**32, (2, 20_000), dtype=np.uint32)
    given = words[: len(operation(name).inputs)]
    want = operate(*(row.view(kind) for row in given)).view(np.uint32)
    run = operation(name).compiled()
    assert [run(*row) for row in zip(*given.tolist(), strict=True)] == want.tolist()


def test_complex_product_against_numpy() -> None:
    """NumPy's complex128 holds every product of two complex Q15 numbers exactly."""
    chance = np.random.default_rng(8)
    parts = chance.integers(-32768, 32768, (4, 5000))
    parts[:, :16] = np.array(np.meshgrid(*[[-32768, 32767]] * 4)).reshape(4, 16)
    a, b = parts[0] + 1j * parts[1], parts[2] + 1j * parts[3]
    for name, exact in (("cmul.h2.q15.rnd.sat", a * b), ("cmulconj.h2.q15.rnd.sat", a * np.conj(b))):
        rounded = np.floor(np.array([exact.real, exact.imag]) / 32768 + 0.5).clip(-32768, 32767).astype(int)
        run = by_value(name)
        got = [run((ar, ai), (br, bi)) for ar, ai, br, bi in parts.T.tolist()]
        assert got == [tuple(row) for row in rounded.T.tolist()]
