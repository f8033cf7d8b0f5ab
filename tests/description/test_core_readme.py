"""What ``isa/README.md`` shows about cores works as shown."""

from __future__ import annotations

import re
import textwrap
from pathlib import Path

import pytest

from vliwsim.description import corebuild, corelayers, coreparts, toml_places
from vliwsim.description.corefile import load_core
from vliwsim.description.places import isa_folder
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
