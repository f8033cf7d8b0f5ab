"""How undefined bytes go through a meaning: kept by copies, spread over the lane by computing, dropped by a choice."""

from __future__ import annotations

import pytest

from tests.description.language_help import meaning
from vliwsim.description.values import Undefined, UndefinedOperand, Value, same

ALL = Undefined(0, 0b1111)
LOW = Undefined(0x11223300, 0b0001)  # lowest byte undefined
HIGH = Undefined(0x00223344, 0b1000)
WHOLE64 = Undefined(0, 0xFF, 8)

CASES: list[tuple[str, str, list[Value], list[Value]]] = [
    # Copies keep bytes where they are.
    ("d:i32, a:i32", "d = a", [LOW], [LOW]),
    ("d:f32, a:f32", "d = a", [HIGH], [HIGH]),
    ("d:i16x2, a:i16x2", "d = a", [HIGH], [HIGH]),
    ("d:i64, a:i64", "d = a", [Undefined(7, 0x80, 8)], [Undefined(7, 0x80, 8)]),
    ("d:i32, a:u32", "d = wrap(a)", [LOW], [LOW]),
    ("d:u32, a:i32", "t = unsigned(a); d = t", [LOW], [LOW]),
    ("d:u32, a:u32", "d = concat(bits(a, 0, 8), bits(a, 8, 8), bits(a, 16, 8), bits(a, 24, 8))",
     [LOW], [Undefined(0x00332211, 0b1000)]),
    ("d:u32, a:u32, b:u32", "d = concat(bits(a, 0, 16), bits(b, 0, 16))", [LOW, HIGH], [Undefined(0x33003344, 0b0100)]),
    ("d:u32, a:u32, b:u32", "d = concat(bits(a, 16, 16), bits(b, 0, 16))", [LOW, HIGH], [0x11223344]),
    ("d:u32, a:u32", "d = concat(uwrap(0, 24), bits(a, 0, 8))", [LOW], [Undefined(0, 0b0001)]),
    ("d:i16x2, a:i16x2", "d[k] = a[1 - k]", [LOW], [Undefined(0x33001122, 0b0100)]),
    ("d:f32, a:u32", "d = as_float(a)", [LOW], [LOW]),
    ("d:i32, at:address", "d = mem[at, i32]", [LOW], [LOW]),
    ("a:i32, at:address", "mem[at, i32] = a", [LOW], [LOW]),
    ("a:u32, at:address", "mem[at, u16] = uwrap(a, 16)", [LOW], [Undefined(0x3300, 0b01, 2)]),
    ("a:u32, at:address", "mem[at, u16] = uwrap(a, 16)", [HIGH], [0x3344]),
    ("a:u32, at:address", "mem[at, u8] = uwrap(a, 8)", [LOW], [Undefined(0, 1, 1)]),
    ("a:u64, at:address", "mem[at, u64] = a", [WHOLE64], [WHOLE64]),
    # Computing makes the whole result undefined, lane by lane.
    ("d:i32, a:i32, b:i32", "d = wrap(a + b)", [LOW, 1], [ALL]),
    ("d:u32, a:u32", "d = a & 0xFF000000", [LOW], [ALL]),
    ("d:i32, a:i32", "d = a * 0", [LOW], [ALL]),
    ("d:i32, a:i32", "d = sat(a)", [LOW], [ALL]),
    ("d:i32, a:i32, b:i32", "d = a < b", [HIGH, 1], [ALL]),
    ("d:u32, a:u32", "d = popcount(a)", [LOW], [ALL]),
    ("d:f32, a:f32, b:f32", "d = a + b", [1, HIGH], [ALL]),
    ("d:i16x2, a:i16x2, b:i16x2", "d[k] = sat(a[k] + b[k])", [LOW, 0x00010001], [Undefined(0x11230000, 0b0011)]),
    ("d:i8x4, a:i8x4", "d[k] = wrap(a[k] + 1)", [LOW], [Undefined(0x12233400, 0b0001)]),
    ("d:i32, a:i16x2, b:i16x2", "d = sat(sum(a[k] * b[k] for k))", [LOW, 0], [ALL]),
    # Sign and zero extension compute.
    ("d:i32, at:address", "d = mem[at, i16]", [Undefined(0x1100, 0b01, 2)], [ALL]),
    ("d:u32, at:address", "d = mem[at, u8]", [Undefined(0, 1, 1)], [ALL]),
    ("d:u32, a:u32", "d = bits(a, 0, 8)", [LOW], [ALL]),
    ("d:u32, a:u32", "d = bits(a, 8, 8)", [LOW], [0x33]),
    ("d:i64, a:i32", "d = a", [LOW], [WHOLE64]),
    ("d:u64, a:u32", "d = a", [LOW], [WHOLE64]),
    # A select passes only the operand chosen; an undefined selector gives undefined.
    ("d:i32, c:i32, a:i32, b:i32", "d = a if c != 0 else b", [1, LOW, 5], [LOW]),
    ("d:i32, c:i32, a:i32, b:i32", "d = a if c != 0 else b", [0, LOW, 5], [5]),
    ("d:i32, c:i32, a:i32, b:i32", "d = a if c != 0 else b", [LOW, 5, 5], [ALL]),
    ("d:i32, c:i32, a:i32, b:i32", "d = a + 1 if c > a else wrap(b + a)", [LOW, 5, 5], [ALL]),
    ("d:i32, c:i32, a:i32", "t = wrap(a + 1, 32); d = t if c else 7", [0, ALL], [7]),
    ("d:i32, c:i32, a:i32", "d = 3 if c == 0 or a == 0 else 4", [0, ALL], [3]),
    ("d:i32, c:i32, a:i32", "d = 3 if c != 0 and a != 0 else 4", [0, ALL], [4]),
    ("d:i32, c:i32, a:i32", "d = 3 if c != 0 and a != 0 else 4", [1, ALL], [ALL]),
    ("d:i32, a:i32, b:i32", "d = min(a, b)", [LOW, 5], [ALL]),
    # Several results, each its own.
    ("d:i32, e:i32, a:i32, b:i32", "d = a; e = wrap(a + b)", [1, LOW], [1, ALL]),
    ("acc:inout i32, d:i32, a:i32", "d = acc; acc = a", [HIGH, LOW], [LOW, HIGH]),
    ("r:inout u32, to:target", "taken = r != 0; r = wrap(r - 1)", [LOW], [ALL, ALL]),
    ("d:u32, a:u32", "d = iterate(3, a, a >> 1)", [LOW], [ALL]),
]  # fmt: skip


@pytest.mark.parametrize(("operands", "does", "inputs", "outputs"), CASES)
def test_rules(operands: str, does: str, inputs: list[Value], outputs: list[Value]) -> None:
    made = meaning(operands, does)
    found = made.evaluate(inputs)
    assert len(found) == len(outputs)
    assert all(same(one, other) for one, other in zip(found, outputs, strict=True)), found
    try:
        fast = made.compiled()(*inputs)
    except UndefinedOperand:
        return
    fast = fast if isinstance(fast, tuple) else (fast,)
    assert all(same(one, other) for one, other in zip(fast, outputs, strict=True)), fast


@pytest.mark.parametrize(
    ("operands", "does", "inputs"),
    [
        ("d:i32, a:i32", "d = a", [LOW]),
        ("d:i32, c:i32, a:i32, b:i32", "d = a if c != 0 else b", [1, LOW, 5]),
        ("d:i32, at:address", "d = mem[at, i32]", [LOW]),
        ("a:u64, at:address", "mem[at, u64] = a", [WHOLE64]),
        ("d:i16x2, a:i16x2", "d = a", [HIGH]),
    ],
)
def test_moves_need_no_slow_way(operands: str, does: str, inputs: list[Value]) -> None:
    """The fast function itself hands the very object on."""
    assert any(meaning(operands, does).compiled()(*inputs) is value for value in inputs)


def test_halves() -> None:
    made = meaning("d:i32, a:i16.half, b:i16.half", "d = a * b")
    assert same(made.evaluate([LOW, 3], (1, 0))[0], 0x1122 * 3)
    assert same(made.evaluate([LOW, 3], (0, 0))[0], ALL)
    assert made.compiled((1, 0))(0xFFFE0000, 3) == 0xFFFFFFFA
    assert made.compiled((None, 0))(0xFFFE, 3) == 0xFFFFFFFA
    made = meaning("a:u16.half, at:address", "mem[at, u16] = a")
    assert same(made.evaluate([HIGH], (1,))[0], Undefined(0x22, 0b10, 2))
