"""The expression language: values, names, places of what is refused, bounds."""

from __future__ import annotations

import math
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from vliwsim.problems import Place, SourceError
from vliwsim.program.source.expressions import formula
from vliwsim.program.source.pieces import expression_end


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("7 // 2", 3),
        ("-7 // 2", -4),
        ("-7 % 4", 1),
        ("7 / 2", 3.5),
        ("2 ** 10 - 1", 1023),
        ("0x1f + 0b101 + 1_000", 1036),
        ("~0 & 0xff | 1 << 8", 0x1FF),
        ("6 ^ 3", 5),
        ("min(3, n, 9) + max(1, 2)", 5),
        ("abs(-n)", 3),
        ("n % 4 == 3 and n >= 2", True),
        ("n == 4 or not n", False),
        ("1 < n <= 3", True),
        ("5 if n > 9 else 6", 6),
        ("ceil(log2(n * 2))", 3),
        ("floor(2.9)", 2),
        ("sin(pi / 2)", 1.0),
        ("sqrt(n + 1) * exp(0) + cos(0)", 3.0),
        ("addr(x) + 4", 68),
        ("len(x) * 2", 6),
        ("len(y)", 2),
        ("y[1] - y[0]", 5),
        ("latency(mul.half)", 2),
        (" n ", 3),
    ],
)
def test_values(text: str, value: object) -> None:
    names = {"n": 3, "addr(x)": 64, "len(x)": 3, "y": [10, 15], "latency(mul.half)": 2}
    assert formula(text).value(names) == value


def test_names_are_the_free_ones() -> None:
    parsed = formula("n + load + addr(x) + min(m, pi)", bound={"load": 4})
    assert parsed.names == {"n", "m"}
    assert parsed.references == {"addr(x)"}
    assert parsed.value({"n": 1, "m": 2, "addr(x)": 8}) == 15


@pytest.mark.parametrize(
    ("text", "name", "column"),
    [
        ("", "bad-expression", 0),
        ("1 +", "bad-expression", 2),
        ("  1 +", "bad-expression", 4),
        ("(1", "bad-expression", 0),
        ("x.y", "bad-expression", 0),
        ("'a'", "bad-expression", 0),
        ("1if 2 else 3", "bad-expression", 0),
        ("2 + 0x1for 3", "bad-expression", 4),
        ("1e", "bad-expression", 0),
        ("[1]", "bad-expression", 0),
        ("1j", "bad-expression", 0),
        ("True", "bad-expression", 0),
        ("lambda: 1", "bad-expression", 0),
        ("3 + __import__('os')", "unknown-function", 4),
        ("x.__class__", "bad-expression", 0),
        ("[k for k in x]", "bad-expression", 0),
        ("f'{x}'", "bad-expression", 0),
        ("x @ y", "bad-expression", 0),
        ("x in y", "bad-expression", 0),
        ("min(1)", "bad-expression", 0),
        ("min(a=1)", "unknown-function", 0),
        ("sin", "bad-expression", 0),
        ("addr(3)", "bad-expression", 0),
        ("addr(a.b)", "bad-expression", 0),
        ("x\ny", "bad-expression", 0),
        ("1e999", "number-too-big", 0),
        ("9" * 90, "number-too-big", 0),
        ("1" * 3000, "too-long", 0),
        ("-" * 1500 + "1", "too-deep", 61),
        ("(" * 900 + "1" + ")" * 900, "too-deep", 0),
        ("+".join("1" * 200), "too-deep", 0),
    ],
)
def test_refused(text: str, name: str, column: int) -> None:
    with pytest.raises(SourceError) as caught:
        formula(text, Place("sensor.vliw", 3, 11))
    (problem,) = caught.value.problems
    assert problem.name == name
    assert problem.place
    assert (problem.place.line, problem.place.column) == (3, 11 + column)


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("1 // n", "no-value"),
        ("1 % n", "no-value"),
        ("1 / n", "no-value"),
        ("n ** -1", "no-value"),
        ("log2(n)", "no-value"),
        ("sqrt(n - 1)", "no-value"),
        ("exp(99999)", "no-value"),
        ("1e300 * 1e300", "no-value"),
        ("(n - 8) ** 0.5", "no-value"),
        ("1 << (n - 1)", "no-value"),
        ("1.5 & 1", "no-value"),
        ("y[2]", "no-value"),
        ("n[0]", "no-value"),
        ("m", "unknown-name"),
        ("addr(q)", "unknown-name"),
        ("10 ** 10 ** 10", "number-too-big"),
        ("2 ** 300", "number-too-big"),
        ("1 << 1000000", "number-too-big"),
        ("(2 ** 200) * (2 ** 200)", "number-too-big"),
    ],
)
def test_without_a_value(text: str, name: str) -> None:
    with pytest.raises(SourceError) as caught:
        formula(text).value({"n": 0, "y": [1, 2]})
    assert [problem.name for problem in caught.value.problems] == [name]


@given(st.text(max_size=40))
def test_no_text_does_harm(text: str) -> None:
    try:
        value = formula(text).value({"n": 3})
    except SourceError:
        return
    assert isinstance(value, int | float)
    assert math.isfinite(value)


@given(st.text("0123456789.+-*/%()<>=!&|^~ nxyeandorminif,[]", max_size=30))
def test_no_near_miss_does_harm(text: str) -> None:
    test_no_text_does_harm.hypothesis.inner_test(text)  # type: ignore[attr-defined]


def test_a_formula_survives_pickling() -> None:
    again = pickle.loads(pickle.dumps(formula("n + load", Place("a", 2, 3), {"load": 4})))
    assert again.value({"n": 1}) == 5
    assert again.names == {"n"}


@pytest.mark.parametrize(
    ("text", "stamp"),
    [
        ("4 lw g1", "4"),
        ("4+i lw g1", "4+i"),
        ("load + multiply add", "load + multiply"),
        ("load - 1", "load - 1"),
        ("max(load, 3) + 1 min g1", "max(load, 3) + 1"),
        ("(i if k else 2) and g1", "(i if k else 2)"),
        ("2*i and g1", "2*i"),
        ("i//2 or g1", "i//2"),
        ("-1 add", "-1"),
        ("2 ** 3 x", "2 ** 3"),
        ("0x10 add", "0x10"),
        ("1.5 add", "1.5"),
        ("", ""),
        ("+ ", ""),
    ],
)
def test_where_a_stamp_ends(text: str, stamp: str) -> None:
    assert text[: expression_end(text, 0)] == stamp
