"""Operation tables: what is loaded, what is refused and where, and that loading is lazy and cheap."""

from __future__ import annotations

import time
import tomllib
from pathlib import Path

import pytest

from vliwsim.description.examples import BadValue, raw_of
from vliwsim.description.language.types import TYPES
from vliwsim.description.manual import manual, syntax
from vliwsim.description.operations import Kind, Role
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations, validate
from vliwsim.problems import OperationError, Problem

FAMILIES = sorted(path.stem for path in (isa_folder() / "operations").glob("*.toml"))

GOOD = """\
class = "multiply"

[mul.half]
code     = 0x341
operands = "d:i32, a:i16.half, b:i16.half"
does     = "d = a * b"
summary  = "16 x 16 bits"
examples = [[[3, -4], [-12]], [[-32768, -32768], [1073741824]]]

[mul.half.add]          # a sub-table of an operation is another operation
code     = 0x342
class    = "arithmetic"
operands = "acc:inout i32, a:i16.half, b:i16.half"
does     = \"\"\"
p = a * b
acc = sat(acc + p)
\"\"\"
summary  = "and added"
examples = [[[2147483647, 1, 1], [2147483647]]]
"""


def row(**changes: str) -> str:
    keys = {
        "code": "0x300",
        "class": '"arithmetic"',
        "operands": '"d:i32, a:i32"',
        "does": '"d = a"',
        "summary": '"a copy"',
    } | {key.rstrip("_"): value for key, value in changes.items()}
    return "[copy]\n" + "".join(f"{key} = {value}\n" for key, value in keys.items() if value)


def refused(tmp_path: Path, text: str | bytes) -> tuple[Problem, ...]:
    path = tmp_path / "mine.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(OperationError) as caught:
        load_operations([str(path)])
    assert str(caught.value)
    for problem in caught.value.problems:
        assert problem.found
        assert problem.allowed
    return caught.value.problems


def test_a_users_file(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(GOOD)
    found = load_operations([str(path)])
    assert list(found.by_name) == ["mul.half", "mul.half.add"]
    assert len(found.by_code) == 2
    half = found.by_name["mul.half"]
    assert half is found.by_code[0x341]
    assert (half.operation_class, half.kind, half.inputs, half.outputs) == (
        "multiply",
        Kind.COMPUTE,
        ("a", "b"),
        ("d",),
    )
    assert [operand.role for operand in half.operands] == [Role.RESULT, Role.SOURCE, Role.SOURCE]
    assert half.examples[0] == ((3, -4), (-12,))
    assert (half.family, half.file) == ("mine", str(path))
    assert half.compiled((1, 0))(0xFFFD0000, 4) == 0xFFFFFFF4
    assert half.evaluate((0xFFFD0000, 4), (1, 0)) == (0xFFFFFFF4,)
    assert found.by_name["mul.half.add"].operation_class == "arithmetic"
    assert found.by_name["mul.half.add"].inputs == ("acc", "a", "b")
    assert validate(found) == []
    assert load_operations([str(path)]).by_name["mul.half"] is half
    assert "nothing" not in found.by_name
    with pytest.raises(KeyError):
        found.by_name["nothing"]


def test_kinds_and_orders_of_inputs_and_outputs() -> None:
    found = load_operations(["integer", "memory", "control"])
    names = {name: (o.kind, o.inputs, o.outputs) for name, o in found.by_name.items()}
    assert names["lw"] == (Kind.LOAD, ("loaded",), ("d",))
    assert names["sw"] == (Kind.STORE, ("a",), ("stored",))
    assert names["jump"] == (Kind.BRANCH, (), ("taken",))
    assert names["call"] == (Kind.BRANCH, ("link",), ("d", "taken"))
    assert names["count"] == (Kind.BRANCH, ("r",), ("r", "taken"))
    assert names["halt"] == (Kind.HALT, (), ())
    assert found.by_name["count"].count
    assert found.by_name["halt"].compiled()() is None
    assert found.by_name["sd"].access is not None
    assert found.by_name["sd"].access.bytes == 8


def test_the_digest_follows_the_contents(tmp_path: Path) -> None:
    one, other = tmp_path / "one.toml", tmp_path / "other.toml"
    one.write_text(row())
    other.write_text(row(code="0x301").replace("[copy]", "[copy2]"))
    both = load_operations([str(one), str(other)]).digest
    assert both == load_operations([str(one), str(other), str(one)]).digest
    assert both != load_operations([str(one)]).digest
    before = load_operations([str(one)]).digest
    one.write_text(row(summary='"another"'))
    assert load_operations([str(one)]).digest != before


BAD = [
    (row(code=""), "missing-key", "copy.code", 1),
    (row(class_=""), "missing-key", "copy.class", 1),
    (row(operands=""), "missing-key", "copy.operands", 1),
    (row(does=""), "missing-key", "copy.does", 1),
    (row(summary=""), "missing-key", "copy.summary", 1),
    (row(code="0"), "bad-value", "copy.code", 2),
    (row(code="1024"), "bad-value", "copy.code", 2),
    (row(code="-1"), "bad-value", "copy.code", 2),
    (row(code="1.5"), "bad-value", "copy.code", 2),
    (row(code="true"), "bad-value", "copy.code", 2),
    (row(code='"5"'), "bad-value", "copy.code", 2),
    (row(code="0x" + "f" * 5000), "bad-value", "copy.code", 2),
    (row(class_='"Shift"'), "bad-value", "copy.class", 3),
    (row(class_='"update"'), "bad-value", "copy.class", 3),
    (row(class_="3"), "bad-value", "copy.class", 3),
    (row(operands="[]"), "bad-value", "copy.operands", 4),
    (row(does="{}"), "bad-value", "copy.does", 5),
    (row(summary='""'), "bad-value", "copy.summary", 6),
    (row(summary='"a\\nb"'), "bad-value", "copy.summary", 6),
    (row(examples="3"), "bad-value", "copy.examples", 7),
    (row(latency="3"), "unknown-key", "copy.latency", 7),
    (row(does='"d = b"'), "unknown-name", "copy.does", 5),
    (row(does='"d = a + 1"'), "may-not-fit", "copy.does", 5),
    (row(operands='"d:i32, a:i31"'), "bad-operand", "copy.operands", 4),
    (row(examples="[[[1], [2]]]"), "example-fails", "copy.examples[0]", 7),
    (row(examples="[[[1], [1]], [[1], [2]]]"), "example-fails", "copy.examples[1]", 7),
    (row(examples="[[[1, 2], [1]]]"), "bad-example", "copy.examples[0]", 7),
    (row(examples="[[[1]]]"), "bad-example", "copy.examples[0]", 7),
    (row(examples="[3]"), "bad-example", "copy.examples[0]", 7),
    (row(examples="[[[4294967296], [1]]]"), "bad-example", "copy.examples[0]", 7),
    (row(examples="[[[1.5], [1]]]"), "bad-example", "copy.examples[0]", 7),
    (row(examples="[[[[1, 2]], [1]]]"), "bad-example", "copy.examples[0]", 7),
    (row(examples='[[["x"], [1]]]'), "bad-example", "copy.examples[0]", 7),
    (row(examples="[[[0x" + "f" * 5000 + "], [1]]]"), "bad-example", "copy.examples[0]", 7),
    (row().replace("[copy]", "[Copy]"), "bad-name", "Copy", 1),
    (row().replace("[copy]", "['a b']"), "bad-name", "a b", 1),
    (row().replace("[copy]", "[a.b.c.d.e.f.g]"), "bad-name", "a.b.c.d.e.f.g", 1),
    ("", "nothing-said", "", 1),
    ('class = "shift"', "nothing-said", "", 1),
    ("class = 3\n" + row(), "bad-value", "class", 1),
    ("speed = 3\n" + row(), "unknown-key", "speed", 1),
    ("[[copy]]\n", "unknown-key", "copy", 1),
    ("[copy\n", "bad-toml", "", 1),
    (row() + row(), "bad-toml", "", 7),
    (b"[copy]\n\xff\xfe", "bad-toml", "", 2),
    ("a = " + "[" * 5000 + "]" * 5000, "bad-toml", "", 1),
    ("a = " + "9" * 5000, "bad-toml", "", 1),
]


@pytest.mark.parametrize(("text", "name", "key", "line"), BAD)
def test_refused(tmp_path: Path, text: str | bytes, name: str, key: str, line: int) -> None:
    problems = refused(tmp_path, text)
    assert [problem.name for problem in problems] == [name], problems
    assert problems[0].key == key
    assert problems[0].place is not None
    assert problems[0].place.line == line


def test_all_mistakes_of_a_file_come_at_once(tmp_path: Path) -> None:
    text = row(code="0", summary='""') + row(does='"d = a + 1; t = c"').replace("[copy]", "[more]")
    problems = refused(tmp_path, text + row().replace("[copy]", "[third]") + row().replace("[copy]", "[fourth]"))
    assert [(problem.name, problem.key) for problem in problems] == [
        ("bad-value", "copy.code"),
        ("bad-value", "copy.summary"),
        ("unknown-name", "more.does"),
        ("code-taken", "third"),
        ("code-taken", "fourth"),
    ]


def test_a_fault_of_the_meaning_points_into_the_file(tmp_path: Path) -> None:
    text = GOOD.replace("acc = sat(acc + p)", "acc = acc + p")
    (problem,) = refused(tmp_path, text)
    assert (problem.place.line, problem.place.column, problem.excerpt) == (16, 7, "acc = acc + p")
    text = GOOD.replace('"d = a * b"', '"d = a * c"')
    (problem,) = refused(tmp_path, text)
    assert (problem.place.line, problem.place.column) == (6, 21)
    assert problem.excerpt[problem.place.column - 1 :] == 'c"'


def test_names_and_codes_are_taken_once_over_all_files(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    add = load_operations(["integer"]).by_name["add"]
    path.write_text(row(code=str(add.code)).replace("[copy]", "[add]"))
    with pytest.raises(OperationError) as caught:
        load_operations(["integer", str(path)])
    assert [problem.name for problem in caught.value.problems] == ["name-taken", "code-taken"]


@pytest.mark.parametrize(
    "name", ["nothing", "Integer", "", "../integer", "integer.tom", "no/such.toml", "a\0.toml", "x" * 5000]
)
def test_no_such_file(name: str) -> None:
    with pytest.raises(OperationError) as caught:
        load_operations([name])
    assert caught.value.problems[0].name in ("no-such-operations", "cannot-read")
    assert len(str(caught.value)) < 1000


def test_hostile_files_are_refused_soon(tmp_path: Path) -> None:
    start = time.process_time()
    slow = row(does='"c = a; d = iterate(60, c, iterate(60, c, wrap(c + 1, 32)))"')
    slow += "examples = [" + "[[1], [3601]]," * 64 + "]\n"
    many = "".join(slow.replace("[copy]", f"[copy{k}]").replace("0x300", str(k + 1)) for k in range(60))
    assert [problem.name for problem in refused(tmp_path, many)] == ["too-long"]
    lots = "".join(row().replace("[copy]", f"[copy{k}]") for k in range(1200))
    assert [problem.name for problem in refused(tmp_path, lots)] == ["too-many"]
    wrong = "".join(row(does='"d = "').replace("[copy]", f"[copy{k}]") for k in range(900))
    assert len(refused(tmp_path, wrong)) == 100
    assert refused(tmp_path, "#" * 600_000)[0].name == "cannot-read"
    assert time.process_time() - start < 30  # against hanging, no benchmark


@pytest.mark.parametrize("family", FAMILIES)
def test_cutting_a_shipped_file_at_its_headers_finds_what_toml_finds(family: str) -> None:
    text = (isa_folder() / "operations" / f"{family}.toml").read_text(encoding="utf-8")
    expected: dict[str, dict[str, object]] = {}

    def collect(table: dict[str, object], path: tuple[str, ...]) -> None:
        if "does" in table:
            expected[".".join(path)] = {key: value for key, value in table.items() if not isinstance(value, dict)}
        for key, value in table.items():
            if isinstance(value, dict):
                collect(value, (*path, key))

    data = tomllib.loads(text)
    collect(data, ())
    found = load_operations([family])
    assert set(found.by_name) == set(expected)
    for name, operation in found.by_name.items():
        keys = expected[name]
        assert operation.code == keys["code"]
        assert operation.operation_class == keys.get("class", data.get("class"))
        assert (operation.does, operation.summary) == (keys["does"], keys["summary"])
        assert [list(map(list, example)) for example in operation.examples] == [
            [[tuple(v) if isinstance(v, list) else v for v in part] for part in example]
            for example in keys.get("examples", [])  # type: ignore[union-attr]
        ]


def test_loading_parses_no_operation_before_it_is_asked_for() -> None:
    found = load_operations(FAMILIES)
    rows = found.by_name.rows  # type: ignore[attr-defined]
    name = next(name for name, row in rows.items() if row.built is None or row.built.meaning)
    assert len(rows) >= 150
    built = found.by_name[name]
    assert found.by_code[built.code] is built


@pytest.mark.parametrize(
    ("value", "kind", "raw"),
    [
        (-1, "i32", 0xFFFFFFFF),
        (0xFFFFFFFF, "i32", 0xFFFFFFFF),
        (-1, "i8", 0xFFFFFFFF),
        (255, "u8", 255),
        (-1, "i64", 2**64 - 1),
        ([1, -1], "i16x2", 0xFFFF0001),
        ([1, 2, 3, -4], "i8x4", 0xFC030201),
        (0xFFFF0001, "i16x2", 0xFFFF0001),
        (1.5, "f32", 0x3FC00000),
        ("-0.0", "f32", 0x80000000),
        ("nan", "f32", 0x7FC00000),
        ("-inf", "f32", 0xFF800000),
        ("0x7f800001", "f32", 0x7F800001),
    ],
)
def test_values_of_examples(value: object, kind: str, raw: int) -> None:
    assert raw_of(value, TYPES[kind]) == raw


@pytest.mark.parametrize(
    ("value", "kind"),
    [
        (2**32, "i32"),
        (-(2**31) - 1, "i32"),
        (None, "i32"),
        ([1], "i16x2"),
        ([40000, 0, 0, 0], "i8x4"),
        ("y", "f32"),
        ([], "f32"),
        ("0x1ffffffff", "f32"),
    ],
)
def test_values_that_no_example_has(value: object, kind: str) -> None:
    with pytest.raises(BadValue):
        raw_of(value, TYPES[kind])


def test_the_manual_page_comes_from_the_row(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(GOOD)
    operation = load_operations([str(path)]).by_name["mul.half.add"]
    assert syntax(operation) == "mul.half.add acc, a.lo|hi, b.lo|hi"
    page = dict(manual(operation))
    assert page["Exactly"] == "p = a * b\nacc = sat(acc + p)"
    assert page["Code"] == "0x342"
    assert page["Examples"] == "acc = 2147483647, a = 1, b = 1 gives acc = 2147483647"


def test_every_shipped_operation_has_a_page() -> None:
    for operation in load_operations(FAMILIES).by_name.values():
        assert all(heading and text for heading, text in manual(operation))
