"""Key paths to lines and columns, against ``tomllib`` itself: every path of the data has a place that shows its key."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vliwsim.description.places import isa_folder
from vliwsim.description.toml_places import KeyPath, key_text, nearest, parse_toml, shown
from vliwsim.problems import CoreError

TEXT = '''\
a = 1
b.c = [1, [2, 3], {x=4, y.z = [5]}]  # = "hi" [no.table]
"q.r" = """multi
 [line] ""quoted"""
s = "a # [b" # a comment
[t.'u v']
k = [
  "g1",   # c
  "g2", [[7]],
]
d = 1979-05-27 07:32:00
[[arr]]
v = 1
[[arr]]
v = 1.5
[arr.sub]
w = 3
["add.h2"]
examples = [[[3, -4], [-12]]]
does = """
x = [1,2]
"""
e = \'\'\'it's\'\'\'
'''


def paths(value: object, path: KeyPath = ()) -> Iterator[KeyPath]:
    """Every table, key and element below ``value``."""
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield (*path, key)
        yield from paths(inner, (*path, key))


def test_every_kind_of_place() -> None:
    file = parse_toml("some.toml", TEXT, CoreError)
    assert set(file.places) == set(paths(tomllib.loads(TEXT)))
    expected = {
        ("a",): (1, 1, "a"),
        ("b", "c"): (2, 3, "c"),
        ("b", "c", 1, 0): (2, 12, "2"),
        ("b", "c", 2, "y", "z", 0): (2, 32, "5"),
        ("q.r",): (3, 1, '"q.r"'),
        ("s",): (5, 1, "s"),
        ("t", "u v", "k", 1): (9, 3, '"g2"'),
        ("t", "u v", "k", 2, 0, 0): (9, 11, "7"),
        ("t", "u v", "d"): (11, 1, "d"),
        ("arr", 0, "v"): (13, 1, "v"),
        ("arr", 1, "sub", "w"): (17, 1, "w"),
        ("add.h2", "examples", 0, 0, 1): (19, 18, "-4"),
        ("add.h2", "e"): (23, 1, "e"),
    }
    for path, (line, column, text) in expected.items():
        place = file.place(path)
        assert (place.line, place.column) == (line, column), path
        assert file.line(line)[column - 1 : column - 1 + place.length] == text, path


def test_a_missing_key_has_the_place_of_its_table() -> None:
    file = parse_toml("some.toml", TEXT, CoreError)
    assert file.place(("t", "u v", "absent", 3)).line == 6
    assert str(file.place(("absent",))) == "some.toml:1:1"


@pytest.mark.parametrize("path", sorted(isa_folder().rglob("*.toml")), ids=lambda path: path.stem)
def test_every_key_of_the_shipped_files(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    file = parse_toml(str(path), text, CoreError)
    assert set(file.places) == set(paths(tomllib.loads(text)))
    for found, place in file.places.items():
        if isinstance(found[-1], str):
            shown_there = text.split("\n")[place.line - 1][place.column - 1 :]
            assert shown_there.lstrip("\"'").startswith(found[-1])


KEYS = st.sampled_from(["a", "b", "c.d", "e f", ""])
VALUES = st.recursive(
    st.sampled_from(["1", "-2.5", '"s"', "'#'", '"]"', '"""x\n"y"""', "'''\n'''", "true", "1979-05-27"]),
    lambda inner: (
        st.lists(inner, max_size=3).map(lambda v: "[" + ",\n".join(v) + "]")
        | st.dictionaries(KEYS, inner, max_size=3).map(
            lambda t: "{" + ", ".join(f"{shown(k)} = {v}" for k, v in t.items()) + "}"
        )
    ),
    max_leaves=6,
)
LINES = st.one_of(
    st.tuples(st.lists(KEYS, min_size=1, max_size=3), VALUES).map(
        lambda kv: ".".join(map(shown, kv[0])) + " = " + kv[1]
    ),
    st.lists(KEYS, min_size=1, max_size=3).map(lambda k: "[" + " . ".join(map(shown, k)) + "]"),
    st.lists(KEYS, min_size=1, max_size=2).map(lambda k: "[[" + ".".join(map(shown, k)) + "]]"),
    st.just("# a = 1 [x]"),
)


@settings(deadline=None, max_examples=300)
@given(st.lists(LINES, max_size=6))
def test_any_toml_that_tomllib_takes(lines: list[str]) -> None:
    text = "\n".join(lines)
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        with pytest.raises(CoreError):
            parse_toml("any.toml", text, CoreError)
        return
    assert set(parse_toml("any.toml", text, CoreError).places) == set(paths(data))


@settings(deadline=None, max_examples=300)
@given(st.text(alphabet="a.\"'[]{}=,# \n\\1", max_size=40))
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        file = parse_toml("any.toml", text, CoreError)
    except CoreError as why:
        names = [problem.name for problem in why.problems]
    else:
        names = []
    if names:
        assert names == ["not-toml"]  # and nothing but a CoreError
        return
    assert set(file.places) == set(paths(file.data))


def test_the_place_of_a_syntax_error() -> None:
    with pytest.raises(CoreError) as caught:
        parse_toml("bad.toml", "a = 1\nb = ]\n", CoreError)
    assert str(caught.value) == (
        "bad.toml:2:5  not-toml  (error)\n"
        "    b = ]\n"
        "        ^\n"
        "  found    invalid value\n"
        "  allowed  TOML (https://toml.io)"
    )


def test_key_texts() -> None:
    assert key_text(("latency", "operations", "mul.half")) == 'latency.operations."mul.half"'
    assert key_text(("guards", "registers", 2)) == "guards.registers[2]"
    assert key_text(()) == ""


def test_shown_values_are_short() -> None:
    assert shown(True) == "true"
    assert shown(1 << 40_000) == "an integer of 40001 bits"
    assert shown("x" * 1000).endswith('…"')
    assert shown([1, "a", False]) == '[1, "a", false]'
    assert shown([0] * 1000) == "an array of 1000"
    assert shown({"a": 1}) == "a table with the keys a"


def test_nearest() -> None:
    assert nearest("laod", ["load", "store"]) == "load"
    assert nearest("zzz", ["load", "store"]) == ""
