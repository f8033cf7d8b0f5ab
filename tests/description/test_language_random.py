"""Random meanings: what the check accepts, both engines compute alike, in range, and undefined bytes are followed."""

from __future__ import annotations

import os
import random
from collections.abc import Sequence

import pytest

from tests.description.language_help import agree, meaning, raw_inputs
from vliwsim.description.language import evaluate
from vliwsim.description.language.meaning import Meaning
from vliwsim.description.language.tree import Assign, Node
from vliwsim.description.values import Value
from vliwsim.problems import OperationError

SEEDS = int(os.environ.get("VLIWSIM_MEANINGS", "400"))
"""How many random meanings to try."""

OPERANDS = (
    "d:{}, a:i32, b:u32, c:i16.half, p:i16x2, q:u8x4, w:i64, n:const u5",
    "d:{}, a:i8, b:u16, c:u16.half, p:u16x2, q:i8x4, w:u64, n:const u4",
    "d:{}, a:i16, b:u8, c:i16.half, p:i16x2, q:u8x4, w:const i9, n:const u1",
    "d:{}, a:inout u32, b:i32, c:i16.half, p:i16x2, q:u8x4, w:u64, n:const u5",
)
RESULTS = ("i32", "u32", "i64", "u64", "i16", "u8")
LEAVES = ("a", "b", "c", "p[0]", "p[1]", "p.im", "q[0]", "q[3]", "w", "n", "t", "0", "1", "-1", "255", "32767",
          "(1 << 31)", "unsigned(p)", "unsigned(a)", "signed(b)")  # fmt: skip
BITS = (1, 3, 5, 8, 15, 16, 24, 31, 32, 33, 40, 64)
MODES = ("half_up", "half_even", "half_away", "floor", "ceiling", "truncate")
FORMS = (
    "({x} {arithmetic} {y})", "({x} {arithmetic} {y})", "({x} {arithmetic} {y})", "{fit}({x}, {width})",
    "{fit}({x}, {width})", "(-{x})", "(~{x})", "({x} {shift} {count})", "({x} // {y} if {y} != 0 else -1)",
    "({x} % (({y} & 255) + 1))", "(tdiv({x}, {name}) if {name} != 0 else 7)",
    "(trem({x}, {name}) if {name} != 0 else 7)",
    "({x} if {y} {compare} {z} else {y})", "({x} if {y} {compare} {z} and not {x} < {z} else {z})",
    "({x} if {name} {compare} {z} or {y} > 0 else {z})", "({y} if {name} else {z})", "min({x}, {y})", "max({x}, {y})",
    "min({name}, b)", "max(a, {name})", "abs({x})", "({x} {compare} {y})", "round({x}, {count}, {mode})",
    "bits({x}, {low}, {width})", "bits({x}, {count}, (n & 7) + 1)", "bits({name}, {byte}, {byte})",
    "clz(uwrap({x}, {width}))", "ctz(wrap({x}, {width}))", "popcount({name})", "clz({name})",
    "concat(wrap({x}, 16), uwrap({y}, 8), c, bits(a, 8, 8))", "concat(bits(p, 16, 16), c)",
    "concat(bits(b, 8, 8), bits(q, 16, 8), bits(b, 0, 16))", "clmul(wrap({x}, 32), uwrap({y}, 17))",
    "iterate(5, t, wrap(t * 3 ^ {x}, 32))", "wrap({name}, 32)", "unsigned(wrap({x}, {width}))", "unsigned({name})",
)  # fmt: skip


def an_expression(draw: random.Random, depth: int) -> str:
    if depth <= 0 or draw.random() < 0.15:
        return draw.choice(LEAVES)
    return draw.choice(FORMS).format(
        x=an_expression(draw, depth - 1),
        y=an_expression(draw, depth - 1 - draw.randrange(2)),
        z=an_expression(draw, depth - 2),
        name=draw.choice(("a", "b", "c", "w", "t")),
        arithmetic=draw.choice("+-*&|^"),
        shift=draw.choice(("<<", ">>")),
        count=draw.choice(("n", "0", "1", "8", "16", "31", "(b & 15)")),
        compare=draw.choice(("==", "!=", "<", "<=", ">", ">=")),
        fit=draw.choice(("wrap", "uwrap", "sat", "usat")),
        width=draw.choice(BITS),
        low=draw.choice((0, 1, 7, 8, 16, 31, 40)),
        byte=draw.choice((8, 16)),
        mode=draw.choice(MODES),
    )


@pytest.mark.parametrize("block", range(8))
def test_compiled_and_evaluated_agree(block: int) -> None:
    accepted = 0
    for seed in range(block, SEEDS, 8):
        draw = random.Random(seed)
        operands = draw.choice(OPERANDS).format(draw.choice(RESULTS))
        depth = draw.randrange(1, 5)
        texts = [an_expression(draw, depth) for _ in range(2)]
        does = f"t = a; t = {texts[0]}; u = b + c + p[0] + q[0] + w + n; d = {draw.choice(('wrap', 'sat'))}({texts[1]})"
        does += "; a = wrap(t + u)" if "inout" in operands else ""
        try:
            made = meaning(operands, does)
            statements = made.statements
        except OperationError:
            continue
        accepted += 1
        for chosen in [tuple(half if name == "c" else None for name in made.inputs) for half in (None, 0, 1)]:
            agree(made, draw, 10, chosen)
            intervals_hold(made, statements, draw, chosen)
    assert accepted >= SEEDS / 8 / 4


def intervals_hold(
    made: Meaning, statements: Sequence[Assign], draw: random.Random, halves: tuple[int | None, ...]
) -> None:
    """Every value computed on the way lies in the interval, and the machine word, of its node."""
    machine = evaluate._Evaluator(
        dict(zip(made.inputs, raw_inputs(made, draw, halves), strict=True)), dict(zip(made.inputs, halves, strict=True))
    )
    plain = machine.visit

    def visit(node: Node) -> Value:
        value = plain(node)
        assert isinstance(value, int)
        if node.kind in ("integer", "truth"):
            assert node.interval.within(-(2**127), 2**128 - 1)
            assert node.interval.low <= value <= node.interval.high, (made.does, node, value)
            assert value or not node.interval.nonzero, (made.does, node)
            assert -(2 ** (node.width - 1)) * node.signed <= value < 2 ** (node.width - node.signed)
            if node.pattern is not None:
                assert -(2**node.pattern) <= value < 2**node.pattern
        return value

    machine.visit = visit  # type: ignore[method-assign]
    for assign in statements:
        machine.variables[assign.variable] = machine.visit(assign.value)
