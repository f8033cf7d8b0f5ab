"""What the meaning language refuses: a text on the left, the name of the problem on the right."""

from __future__ import annotations

import time

import pytest

from tests.description.language_help import checked, fault_names, meaning
from vliwsim.problems import OperationError

ABC = "d:i32, a:i32, b:i32"
UNSIGNED = "d:u32, a:u32, b:u32"
FLOATS = "d:f32, a:f32, b:f32"

SYNTAX = [
    (ABC, "", "nothing-said"),
    (ABC, "   \n ", "nothing-said"),
    (ABC, "d = a +", "bad-syntax"),
    (ABC, "d = a + b)", "bad-syntax"),
    (ABC, "d = a ? b", "bad-syntax"),
    (ABC, "d a", "bad-syntax"),
    (ABC, "a + b", "bad-statement"),
    (ABC, "d = e = a + b", "bad-statement"),
    (ABC, "d += a", "bad-statement"),
    (ABC, "d: int = a", "bad-statement"),
    (ABC, "import os", "bad-statement"),
    (ABC, "for k in a: d = k", "bad-statement"),
    (ABC, "while a: d = b", "bad-statement"),
    (ABC, "if a: d = b", "bad-statement"),
    (ABC, "def f(): pass", "bad-statement"),
    (ABC, "del a", "bad-statement"),
    (ABC, "d, e = a, b", "bad-statement"),
    (ABC, "halt", "bad-operand"),
    (ABC, "d = halt", "unknown-name"),
    (ABC, "d = c", "unknown-name"),
    (ABC, "d = k", "unknown-name"),
    (ABC, "d = t; t = a", "unknown-name"),
    (ABC, "d = a.real", "not-in-language"),
    (ABC, "d = a.__class__", "not-in-language"),
    (ABC, "d = (lambda: a)()", "unknown-function"),
    (ABC, "d = [a, b]", "not-in-language"),
    (ABC, "d = {a: b}", "not-in-language"),
    (ABC, "d = (a, b)", "not-in-language"),
    (ABC, "d = 'text'", "not-in-language"),
    (ABC, "d = None", "not-in-language"),
    (ABC, "d = 1j", "not-in-language"),
    (ABC, "d = f'{a}'", "not-in-language"),
    (ABC, "d = [x for x in a]", "not-in-language"),
    (ABC, "d = (e := a)", "not-in-language"),
    (ABC, "d = +a", "not-in-language"),
    (ABC, "d = a @ b", "not-in-language"),
    (ABC, "d = a ** b", "not-in-language"),
    (ABC, "d = 3**2", "not-in-language"),
    (ABC, "d = 2**200", "not-in-language"),
    (ABC, "d = 2**-1", "not-in-language"),
    (ABC, "d = a is b", "not-in-language"),
    (ABC, "d = a in b", "not-in-language"),
    (ABC, "d = open(a)", "unknown-function"),
    (ABC, "d = __import__(a)", "unknown-function"),
    (ABC, "d = a.bit_length()", "unknown-function"),
    (ABC, "d = eval('1')", "unknown-function"),
    (ABC, "d = wrap()", "bad-arguments"),
    (ABC, "d = wrap(a, b)", "bad-arguments"),
    (ABC, "d = wrap(a, 0)", "bad-arguments"),
    (ABC, "d = wrap(a, 129)", "bad-arguments"),
    (ABC, "d = wrap(a, True)", "bad-arguments"),
    (ABC, "d = uwrap(a)", "bad-arguments"),
    (ABC, "d = wrap(a, bits=8)", "bad-arguments"),
    (ABC, "d = wrap(*a)", "bad-arguments"),
    (ABC, "t = wrap(a + b); d = 0", "bad-arguments"),
    (ABC, "d = bits(a, 0)", "bad-arguments"),
    (ABC, "d = clz(a, b)", "bad-arguments"),
    (ABC, "d = min(a)", "bad-arguments"),
    (ABC, "d = sum(a)", "bad-arguments"),
    (ABC, "d = round(a, 1)", "bad-arguments"),
    (ABC, "d = round(a, 1, nearest)", "bad-arguments"),
    (ABC, "d = round(a, 1, 'floor')", "bad-arguments"),
    (ABC, "d = iterate(65, a, a)", "bad-arguments"),
    (ABC, "d = iterate(0, a, a)", "bad-arguments"),
    (ABC, "d = iterate(b, a, a)", "bad-arguments"),
    (ABC, "d = iterate(4, a + b, a)", "bad-arguments"),
    (ABC, "d = concat(a)", "bad-arguments"),
    (ABC, "min = a; d = b", "bad-name"),
    (ABC, "T = a; d = b", "bad-name"),
    (ABC, "_t = a; d = b", "bad-name"),
    (ABC, "d = a; d = b", "assigned-twice"),
    (ABC, "b = a", "not-used"),
    (ABC, "t = b; b = a; d = t", "bad-statement"),
    (ABC, "d = a", "not-used"),
    ("d:i32, f:sticky i32, a:i32", "d = a", "not-assigned"),
    ("d:i32, f:sticky i32, a:i32", "d = a; f = f | 1", "unknown-name"),
    ("acc:inout i32, d:i32, a:i32", "d = wrap(acc + a)", "not-assigned"),
    ("d:i32, n:const u5", "d = n; n = 1", "bad-statement"),
    ("d:i32, a:i16.half", "d = a; a = 1", "bad-statement"),
    ("d:i16x2, a:i16x2", "d[0] = a[1]", "lanes-left-out"),
    ("d:i16x2, a:i16x2", "d[k] = a[2]", "no-such-lane"),
    ("d:i16x2, a:i16x2", "d[k] = a[k + 1]", "no-such-lane"),
    ("d:i16x2, a:i16x2", "d[2] = a[0]", "no-such-lane"),
    ("d:i16x2, a:i16x2", "d[k] = a[k * 99999999999]", "no-such-lane"),
    ("d:i16x2, a:i16x2", "d[k] = a[b]", "no-such-lane"),
    ("d:i16x2, a:i16x2", "d[k] = a[k]; d[0] = a[1]", "assigned-twice"),
    ("d:i16x2, a:i32", "d[k] = wrap(a[k])", "no-such-lane"),
    ("d:i32, a:i16x2", "d[k] = a[k]", "no-such-lane"),
    ("d:i32, a:i16x2", "d = a[0:1]", "no-such-lane"),
    ("d:i32, a:i16x2, b:i8x4", "d = sum(a[k] * b[k] for k)", "no-such-lane"),
    ("d:i32, a:i32, b:i32", "d = sum(a * b for k)", "no-such-lane"),
    ("d:i32, a:i16x2", "d = sum(a[i] for i)", "bad-syntax"),
    ("d:i32, a:i16x2", "d = sum(a[k] for k if k)", "not-in-language"),
    ("d:i32, a:i16x2", "d = sum(a[k] for k in a)", "not-in-language"),
    ("d:i8x4, a:i8x4", "d.re = a[0]", "no-such-lane"),
    ("d:i32, a:i8x4", "d = a.im", "no-such-lane"),
    ("d:i32, a:i32", "t = a; d = t[0]", "no-such-lane"),
    ("d:i32, at:address", "d = 1", "not-used"),
    ("d:i32, at:address", "d = at", "unknown-name"),
    ("d:i32, at:address", "d = mem[at]", "bad-access"),
    ("d:i32, at:address", "d = mem[at, i33]", "bad-access"),
    ("d:i32, at:address", "d = mem[at + 1, i32]", "bad-access"),
    ("d:i32, at:address", "d = wrap(mem[at, i32] + mem[at, i16])", "bad-access"),
    ("a:i32, at:address", "mem[at, i32] = a; mem[at, i32] = a", "bad-access"),
    ("d:i32, a:i32, at:address", "mem[at, i32] = a; d = mem[at, i32]", "bad-access"),
    ("d:i32, a:i32", "d = mem[a, i32]", "bad-access"),
    ("a:i32, to:target", "t = a", "not-assigned"),
    ("d:i32, to:target", "d = to; taken = 1", "unknown-name"),
    ("a:i32, to:target", "taken = a == 0; taken = a == 1", "assigned-twice"),
    (ABC, "taken = a == b; d = 0", "bad-statement"),
    (ABC, "d = é", "bad-character"),
    (ABC, "d = a\0", "bad-character"),
    (ABC, "d = 340282366920938463463374607431768211456", "too-big"),
    (ABC, "d = 1e99", "too-big"),
    (ABC, "d = " + "a + " * 2000 + "b", "too-long"),
    (ABC, "d = " + "-" * 3000 + "a", "too-deep"),
    (ABC, "d = " + "(" * 150 + "a" + ")" * 150 + " + b", "may-not-fit"),  # parentheses alone are no depth
    (ABC, "d = " + "not " * 900 + "a", "too-deep"),
    (ABC, "d = " + "min(" * 90 + "a" + ", b)" * 90, "too-long"),
    (ABC, "d = a" + " + b" * 500, "too-deep"),
    (ABC, "d = iterate(64, a, iterate(64, b, iterate(64, a, wrap(a + b, 32))))", "too-long"),
]  # fmt: skip

TYPES = [
    (ABC, "d = a / b", "wrong-type"),
    (ABC, "d = sqrt(a) + b", "wrong-type"),
    (FLOATS, "d = a // b", "wrong-type"),
    (FLOATS, "d = a % b", "wrong-type"),
    (FLOATS, "d = min(a, b)", "wrong-type"),
    (FLOATS, "d = wrap(a + b, 32)", "wrong-type"),
    (FLOATS, "d = a < b", "wrong-type"),
    (FLOATS, "d = 1 if a else b", "wrong-type"),
    ("d:f32, a:f32, b:i32", "d = a + b", "wrong-type"),
    ("d:f32, a:f32, b:i32", "d = a if b != 0 else b", "wrong-type"),
    ("d:f32, a:i32", "d = a", "wrong-type"),
    ("d:i32, a:f32", "d = a", "wrong-type"),
    ("d:f32, a:f32", "d = float_to_int(a, f32, floor)", "bad-arguments"),
    ("d:i32, a:f32", "d = float_to_int(a, i32, half_up)", "bad-arguments"),
    ("d:i32, a:i16x2, b:i16x2", "d = a + b", "wrong-type"),
    ("d:i16x2, a:i32", "d = a", "wrong-type"),
    ("d:i16x2, a:i8x4", "d = a", "wrong-type"),
    ("a:i32, to:target", "taken = a", "wrong-type"),
    (ABC, "d = concat(a + b, bits(a, 0, 8))", "unknown-width"),
    (ABC, "d = clz(a + b)", "unknown-width"),
    (ABC, "d = unsigned(a + b)", "unknown-width"),
    ("d:u64, a:i64, b:i64", "d = wrap(concat(a, b, wrap(a, 32)))", "too-big"),
    ("d:u64, a:i64, b:u64", "d = uwrap(clmul(concat(a, b), b), 64)", "too-big"),
]

INTERVALS = [
    # A result that need not fit.
    (ABC, "d = a + b", "may-not-fit"),
    (ABC, "d = -a - b", "may-not-fit"),
    (ABC, "d = abs(a) + b * 0", "may-not-fit"),
    (ABC, "d = a << (b & 1)", "may-not-fit"),
    (UNSIGNED, "d = a - b", "may-not-fit"),
    (UNSIGNED, "d = ~a & ~b", "may-not-fit"),
    ("d:i32, a:u32", "d = a", "may-not-fit"),
    ("d:i16x2, a:i16x2, b:i16x2", "d[k] = a[k] + b[k]", "may-not-fit"),
    ("d:i32, a:i16x2, b:i16x2", "d = sum(a[k] * b[k] for k)", "may-not-fit"),
    ("a:i32, at:address", "mem[at, i16] = a", "may-not-fit"),
    ("d:i32, a:i32, b:i32", "d = tdiv(a, b) if b != 0 else -1", "may-not-fit"),
    ("d:i32, a:i32, b:i32", "d = a + 1 if a < 2147483647 and b > 0 or b < 0 else a", "may-not-fit"),
    # Divisors.
    (ABC, "d = wrap(a // b)", "may-divide-by-zero"),
    (ABC, "d = wrap(a % b)", "may-divide-by-zero"),
    (ABC, "d = wrap(tdiv(a, b))", "may-divide-by-zero"),
    (ABC, "d = wrap(trem(a, b)) if a != 0 else 0", "may-divide-by-zero"),
    (ABC, "d = wrap(a // b) if b == 0 else 1", "may-divide-by-zero"),
    (ABC, "d = wrap(a // b) if b != 0 or a != 0 else 1", "may-divide-by-zero"),
    (ABC, "d = wrap(a // b) if b > -1 else 1", "may-divide-by-zero"),
    (ABC, "d = wrap(a // 0) + b * 0", "may-divide-by-zero"),
    # Shifts.
    (ABC, "d = wrap(a << b)", "bad-shift"),
    (ABC, "d = a >> b", "bad-shift"),
    (UNSIGNED, "d = a >> b", "bad-shift"),
    (UNSIGNED, "d = uwrap(a << b, 32) if b < 129 else 0", "bad-shift"),
    (UNSIGNED, "d = a >> (b & 31) - 1", "bad-shift"),
    (ABC, "d = wrap(1 << 99999999999) + a * b", "bad-shift"),
    (ABC, "d = wrap(round(a, b, floor))", "bad-shift"),
    (UNSIGNED, "d = uwrap(bits(a, b, 4), 32)", "bad-shift"),
    # 128 bits.
    (UNSIGNED, "d = uwrap(a << 127, 32) + b", "too-big"),
    ("d:u64, a:u64, b:u64", "d = uwrap(a * b * a, 64)", "too-big"),
    ("d:u64, a:u64, b:i64", "d = uwrap(a * a + b, 64)", "too-big"),
    ("d:u32, a:u32", "d = uwrap(iterate(9, a, a * a), 32)", "too-big"),
]

ACCEPTED = [
    ("d:i64, a:i32, b:i32", "d = a * b"),
    ("d:u64, a:u32, b:u32", "d = a * b"),
    ("d:u32, a:u64, b:u64", "d = a * b >> 96"),
    ("d:i32, a:i16.half, b:i16.half", "d = a * b"),
    (ABC, "d = wrap(tdiv(a, b)) if b != 0 else -1"),
    (ABC, "d = trem(a, b) if b != 0 else a"),
    (UNSIGNED, "d = a // b if b != 0 else 2**32 - 1"),
    (UNSIGNED, "d = a // b if b > 0 else 1"),
    (UNSIGNED, "d = a // b if not b == 0 else 1"),
    (UNSIGNED, "d = 1 if b == 0 else a // b"),
    (UNSIGNED, "d = 1 if b == 0 or a == 0 else a // b"),
    (UNSIGNED, "d = a // b if b else 1"),
    (UNSIGNED, "d = a // b if 0 < b < 10 else 1"),
    (UNSIGNED, "d = a // (b | 1)"),
    (UNSIGNED, "d = 1 if b != 0 and a // b > 3 else 0"),
    (ABC, "d = a // b if b > 0 else 1"),
    (ABC, "d = a >> (b & 31)"),
    (UNSIGNED, "d = a >> b if b < 32 else 0"),
    (ABC, "d = a + 1 if a < b else a"),
    (ABC, "d = a - 1 if b < a else 0"),
    (ABC, "d = -a if a >= -2147483647 and b != 3 else 0"),
    (ABC, "d = a if a < b else b"),
    (ABC, "d = (a + b) >> 1"),
    (ABC, "d = a % 7 + trem(b, 9)"),
    (ABC, "d = a < b"),
    (ABC, "d = -(a < b)"),
    (ABC, "t = a; t = t >> 1; d = t + (b >> 1)"),
    ("d:i32, a:i16x2, b:i16x2", "d = sat(sum(a[k] * b[k] for k))"),
    ("d:i32, a:i8x4", "d = max(abs(a[k]) for k)"),
    ("d:i16x2, a:i16x2", "p[k] = a[k] >> 1; d[k] = p[1 - k]"),
    ("d:i16x2, a:i16x2", "d.re = a.im; d.im = a.re"),
    ("d:i16x2, a:i16x2", "d = a"),
    ("d:u32, a:u32, b:u32", "d = clmul(a, b) >> 31"),
    ("d:u32, c:u32", "d = iterate(8, c, c >> 1 ^ 0xEDB88320 * (c & 1))"),
    ("d:i64, a:i64", "d = round(a, 63, half_even)"),
    ("d:f32, a:f32", "d = a * 2 + 1.5"),
    ("d:f32, a:u32", "d = as_float(a)"),
    ("d:f32, a:i32, b:f32", "d = concat(bits(a, 31, 1), bits(b, 0, 31))"),
    ("to:target", "taken = True"),
    ("to:target", "taken = 1"),
    ("", "halt"),
    ("d:i32, at:address", "d = mem[at, i16] * mem[at, i16]"),
]


@pytest.mark.parametrize(("operands", "does", "name"), SYNTAX + TYPES + INTERVALS)
def test_refused(operands: str, does: str, name: str) -> None:
    start = time.process_time()
    assert fault_names(operands, does) == [name]
    assert time.process_time() - start < 20  # against hanging, no benchmark


@pytest.mark.parametrize(("operands", "does"), ACCEPTED)
def test_accepted(operands: str, does: str) -> None:
    assert fault_names(operands, does) == []


@pytest.mark.parametrize(
    "operands",
    [
        "d", "d:", "d:i31", "d:i32,", "d:i32, d:i32", "D:i32", "1:i32", "min:i32", "k:i32", "if:i32", "i32:i32",
        "d:i32.half",
        "d:i16.hal", "d:pair i32", "d:inout const i32", "n:const u0", "n:const u33", "n:const f32",
        "n:const u5.half", "a:inout i16.half", "f:sticky i64", "d:address i32", "a:address, b:address",
        "t:target, u:target",
        "d:i32 a:i32", "a:i32, b:i32, c:i32, d:i32, e:i32, f:i32, g:i32, h:i32, i:i32", "d:i32, " * 200,
        "a:u\u0661", "\u00e9:i32",
    ],
)  # fmt: skip
def test_bad_operands(operands: str) -> None:
    assert fault_names(operands, "d = 1") == ["bad-operand"]


def test_every_statement_tells_its_fault_and_none_is_told_twice() -> None:
    assert fault_names(ABC, "t = foo(a); d = t + b\nu = t * 2; v = c") == ["unknown-function", "unknown-name"]
    assert fault_names(ABC, "t = a // b; d = wrap(t); u = a >> b") == ["may-divide-by-zero", "bad-shift"]
    assert fault_names("d:i8x4, a:i8x4", "d[k] = a[k] * 2") == ["may-not-fit"]


def test_faults_have_their_place_in_the_text() -> None:
    with pytest.raises(OperationError) as caught:
        meaning("d:i32, a:i16x2", "t = sum(a[k] for k); u = 3\n   d = t + foo(u)")
    place = caught.value.problems[0].place
    assert place is not None
    assert (place.line, place.column) == (2, 12)
    with pytest.raises(OperationError) as caught:
        meaning("d:i32, a:i16x2", "d = sum(a[k] for k) + foo(1)")
    place = caught.value.problems[0].place
    assert place is not None
    assert place.column == 23


def test_the_tree_keeps_intervals_and_machine_widths() -> None:
    made = checked("d:i32, a:i32, b:i32", "d = wrap(round(a * b, 31, half_up))")
    (assign,) = made.statements
    (rounded,) = assign.value.children()
    product = rounded.children()[0]
    assert (product.interval.low, product.interval.high) == (-(2**31) * (2**31 - 1), 2**62)
    assert (product.width, product.signed) == (64, True)
    assert (assign.value.width, assign.value.pattern) == (32, 32)
    wide = checked("d:u64, a:u64, b:u64", "d = uwrap(a * b, 64)").statements[0].value.children()[0]
    assert (wide.width, wide.signed) == (128, False)
