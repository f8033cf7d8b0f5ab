"""What ``isa/README.md`` shows about cores works as shown."""

from __future__ import annotations

import re
import textwrap
from pathlib import Path

import pytest

from vliwsim.description import corebuild, corelayers, coreparts, toml_places
from vliwsim.description.corefile import load_core
from vliwsim.description.operation_names import shipped_operations
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations, validate
from vliwsim.problems import CoreError

TEXT = (isa_folder() / "README.md").read_text(encoding="utf-8")
BLOCKS = [textwrap.dedent(block) for block in re.findall(r"(?:^ {4}.*\n|^\n(?= {4}))+", TEXT, re.MULTILINE)]


def block(beginning: str) -> str:
    (found,) = [text.strip() + "\n" for text in BLOCKS if text.strip().startswith(beginning)]
    return found


def test_the_small_core(tmp_path: Path) -> None:
    (tmp_path / "small.toml").write_text(block("name       ="))
    core = load_core(str(tmp_path / "small.toml"))
    assert [slot.name for slot in core.slots] == ["g.work", "g.mem"]


def test_the_delta(tmp_path: Path) -> None:
    (tmp_path / "wide.toml").write_text(block("base   ="))
    core = load_core(str(tmp_path / "wide.toml"))
    assert (len(core.slots), core.clusters[0].registers, core.latency.operations) == (6, 32, {"mul.half": 2})


def test_the_changes() -> None:
    changes = re.findall(r"--set ('[^']*'|\S+)", block("vliwsim run energy --set"))
    assert len(changes) == 4
    for change in changes:
        load_core("pair7", [change.strip("'")])


def test_the_python_lines() -> None:
    names: dict[str, object] = {}
    exec(block("from vliwsim.description"), names)
    assert names["slower"].latency.classes == {"load": 5, "multiply": 4}  # type: ignore[attr-defined]


def test_the_operation(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text(block("[peak.fade]"))
    (tmp_path / "my_core.toml").write_text(block('base       = "pair7"'))
    core = load_core(str(tmp_path / "my_core.toml"))
    operations = load_operations(core.operations)
    assert not validate(load_operations(core.operations[-1:]))
    assert operations.by_name["peak.fade"].compiled()(100, 64) == 100
    assert operations.by_code[0x300].name == "peak.fade"


@pytest.mark.parametrize(
    ("operands", "does", "given", "expected"),
    [
        ("d:i16x2, a:i16x2, b:i16x2", "d[k] = sat(a[k] + b[k])", "[[1, 32767], [2, 1]]", "[[3, 32767]]"),
        ("d:i64, a:i16x2, b:i16x2", "d = sum(a[k] * b[k] for k)", "[[1, -2], [3, 4]]", "[-5]"),
        ("d:i32, a:i16x2", "d = a.re - a.im", "[[1, -2]]", "[3]"),
        ("d:i16, a:i32", "d = sat(a, i16)", "[70000]", "[32767]"),
        ("d:u8, a:i32", "d = usat(a, 8)", "[-5]", "[0]"),
        ("d:i32, a:i32", "d = round(a, 1, half_even)", "[5]", "[2]"),
        ("d:u32, a:u32, n:const u5", "d = bits(a, n, 4)", "[255, 6]", "[3]"),
        ("d:i32, a:i32, b:i32", "d = trem(a, b) if b != 0 else a", "[-7, 2]", "[-1]"),
        ("d:i32, a:i16.half, b:i16.half", "d = a * b", "[-3, 5]", "[-15]"),
        ("d:i32, acc:inout i32, a:i32", "d = acc; acc = wrap(acc + a)", "[1, 2]", "[1, 3]"),
        ("d:i32, f:sticky i32, a:i32", "d = sat(a + 1); f = 1 if a > 99 else 0", "[2147483647]", "[2147483647, 1]"),
        ("d:f32, a:f32, b:f32", "d = fma(a, b, sqrt(a)) / b", "[4, 2]", "[5]"),
        ("d:i32, a:f32", "d = float_to_int(a, i32, floor)", "[-1.5]", "[-2]"),
        ("d:i32, at:address", "d = mem[at, i16]", "[65535]", "[-1]"),
        ("a:i32, at:address", "mem[at, i16] = wrap(a, 16)", "[65537]", "[1]"),
        ("a:i32, b:i32, to:target", "taken = a < b", "[1, 2]", "[1]"),
        ("d:u32, to:target", "d = link; taken = 1 == 1", "[64]", "[64, 1]"),
        ("d:u32, a:u32", "x = a & 255; d = iterate(3, x, (x << 1) & 255)", "[200]", "[64]"),
    ],
)  # fmt: skip
def test_the_forms_of_the_tables(tmp_path: Path, operands: str, does: str, given: str, expected: str) -> None:
    file = tmp_path / "mine.toml"
    lines = [f"operands = '{operands}'", f"does = '{does}'", f"examples = [[{given}, {expected}]]"]
    file.write_text("[own]\ncode = 0x301\nclass = 'own'\nsummary = 'x'\n" + "\n".join(lines))
    assert not validate(load_operations([str(file)]))


def test_codes_left_to_users_are_free() -> None:
    for family in shipped_operations():
        assert max(load_operations([family]).by_code) < 0x300


def test_the_mistake(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("wide.toml").write_text("base = 'pair7'\n\n\n\n\n\n\n[latency]\nlaod = 5\n")
    with pytest.raises(CoreError) as caught:
        load_core("wide.toml")
    assert str(caught.value) + "\n" == block("wide.toml:")


def test_every_name_of_a_problem_is_explained() -> None:
    names: set[str] = set()
    for module in (corebuild, coreparts, corelayers, toml_places):
        source = Path(str(module.__file__)).read_text(encoding="utf-8")
        names |= set(re.findall(r'(?:add|Finding|refuse|Problem)\(\s*"([a-z-]+)"', source))
    assert len(names) > 20
    assert {name for name in names if f"`{name}`" not in TEXT} == set()
