"""Goldens: recorded from right runs only, the same bytes each time, and nothing of a damaged file is trusted."""

from __future__ import annotations

import io
import random
import zipfile
from pathlib import Path

import attrs
import numpy as np
import pytest
from click.testing import CliRunner, Result

import vliwsim
from tests.kernel.sources import DOUBLE, SUM, write
from vliwsim.faces.main import cli
from vliwsim.kernel.goldens import (
    Golden,
    differences,
    golden_path,
    read_golden,
    record,
    source_digest,
    to_bytes,
    write_golden,
)
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import GoldenError, InterfaceError
from vliwsim.regression.claims import Options
from vliwsim.regression.judge import Judge
from vliwsim.regression.sources import targets

DAY = "2030-01-31"


def command(*arguments: object) -> Result:
    return CliRunner().invoke(cli, [str(a) for a in arguments], standalone_mode=False)


@pytest.fixture
def double(tmp_path: Path) -> Path:
    return write(tmp_path, DOUBLE)


def a_run(source: Path, values: list[int]) -> KernelRun:
    return vliwsim.load_kernel(str(source)).run(x=values)


def a_golden(source: Path, *values: list[int]) -> Golden:
    runs = [attrs.evolve(a_run(source, v), case=f"case {k}") for k, v in enumerate(values)]
    return record(runs, DAY, "vliwsim 0 0123", "def double")


def test_what_is_recorded_comes_back(double: Path) -> None:
    golden = a_golden(double, [1, 2, -3], [5])
    path = golden_path(double, "pair7")
    assert path == double.parent / "golden" / "double.pair7.npz"
    write_golden(path, golden)
    back = read_golden(path)
    assert back is not None
    assert (back.kernel, back.core, back.date, back.tool) == ("double", "pair7", DAY, "vliwsim 0 0123")
    assert back.code_bytes == golden.code_bytes
    assert [case.name for case in back.cases] == ["case 0", "case 1"]
    first = back.cases[0]
    assert first.outputs["y"].tolist() == [2, 4, -6]
    assert first.inputs["x"].tolist() == [1, 2, -3]
    assert (first.cycles, first.bundles, first.drain) == (20, 20, 0)
    assert first.sections == {"start": 1, "loop": 18, "finish": 1}
    assert differences(golden, back) == []


def test_the_same_run_gives_the_same_bytes_and_numpy_opens_them(double: Path) -> None:
    one, other = (to_bytes(a_golden(double, [1, 2], [7])) for _ in range(2))
    assert one == other
    with np.load(io.BytesIO(one), allow_pickle=False) as archive:
        assert archive["0/returns/y"].tolist() == [2, 4]


@pytest.mark.parametrize("date", ["", "today", "31.1.2030", "2030-01-31 "])
def test_the_day_is_the_callers_and_a_day(double: Path, date: str) -> None:
    with pytest.raises(GoldenError, match="YYYY-MM-DD"):
        record([a_run(double, [1])], date, "", "")


def test_only_a_run_that_matched_its_reference_is_recorded(tmp_path: Path) -> None:
    source = write(tmp_path, DOUBLE, "def double(x):\n    return x * 2 + 3\n")
    with pytest.raises(GoldenError, match="matched its reference"):
        record([a_run(source, [1])], DAY, "", "")
    unreferenced = vliwsim.load_kernel(str(source)).run(x=[1], reference=False)
    with pytest.raises(GoldenError, match="matched its reference"):
        record([unreferenced], DAY, "", "")
    assert command("golden", source, "--date", DAY).exception.problems[0].name == "golden-not-right"
    assert not (tmp_path / "golden").exists()


def test_never_over_an_existing_one_unasked(double: Path) -> None:
    assert command("golden", double, "--date", DAY, "--case", "smallest").return_value == 0
    path = golden_path(double, "pair7")
    before = path.read_bytes()
    assert isinstance(command("golden", double, "--date", "2031-01-01", "--case", "zeros").exception, InterfaceError)
    assert path.read_bytes() == before
    shown = command("golden", double, "--date", "2031-01-01", "--case", "zeros", "--show")
    assert path.read_bytes() == before
    replaced = command("golden", double, "--date", "2031-01-01", "--case", "zeros", "--replace")
    assert "smallest: no longer there" in shown.output
    assert "zeros: added" in replaced.output
    assert read_golden(path).date == "2031-01-01"  # type: ignore[union-attr]
    assert not list(path.parent.glob(".*"))


def test_differences_are_said(double: Path) -> None:
    old, new = a_golden(double, [1, 2, 3], [5]), a_golden(double, [1, 2, 4], [5])
    assert differences(old, new) == ["case 0: given x[2]: 3 → 4", "case 0: returns y[2]: 6 → 8"]
    slower = attrs.evolve(old, cases=(attrs.evolve(old.cases[0], cycles=25), old.cases[1]), code_bytes=8)
    assert differences(old, slower) == [f"code: {old.code_bytes} → 8 bytes", "case 0: 20 → 25 cycles"]


def test_format_one_is_what_savez_writes(double: Path) -> None:
    path = golden_path(double, "pair7")
    path.parent.mkdir()
    given = {"given.x": np.array([3, 4], "i2"), "returns.y": np.array([6, 8], "i2"), "cycles": np.array(14)}
    np.savez(path, **given, **{"stalls.bank": np.array(0)}, case=np.array("frame"))
    golden = read_golden(path)
    assert golden is not None
    assert (golden.format, golden.cases[0].name, golden.cases[0].cycles) == (1, "frame", 14)
    claims = {claim.title: claim for claim in Judge(str(double), None, Options()).verdict().claims}
    assert claims["golden frame"].held
    np.savez(path, **{**given, "returns.y": np.array([6, 11], "i2")})
    claims = {claim.title: claim for claim in Judge(str(double), None, Options()).verdict().claims}
    assert claims["golden recorded"].says == "not as recorded: y[1] is 8, recorded 11; 1 of 2 elements differ"


def test_a_later_format_is_refused(double: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = golden_path(double, "pair7")
    monkeypatch.setattr("vliwsim.kernel.goldens.FORMAT", 3)
    write_golden(path, a_golden(double, [1]))
    monkeypatch.undo()
    with pytest.raises(GoldenError, match="formats 1 to 2"):
        read_golden(path)


def read_or_name(path: Path) -> Golden | str:
    """The golden, or the name of the problem."""
    try:
        back = read_golden(path)
    except GoldenError as error:
        return error.problems[0].name
    assert back is not None
    return back


def test_no_damage_is_trusted(double: Path, long: bool) -> None:
    """Every byte changed (a sample of them by default), and every length: named as damaged, or exactly as it was."""
    path = golden_path(double, "pair7")
    golden = a_golden(double, [1, 2, 3])
    write_golden(path, golden)
    whole = path.read_bytes()
    chosen = range(len(whole)) if long else random.Random(1).sample(range(len(whole)), 250)
    named = 0
    for at in chosen:
        path.write_bytes(whole[:at] + bytes([whole[at] ^ 0x41]) + whole[at + 1 :])
        back = read_or_name(path)
        if isinstance(back, str):
            assert back in ("damaged-golden", "golden-format")
            named += 1
        else:
            assert (
                differences(golden, back) == []
            )  # a byte that means nothing, such as a time in the archive's directory
            assert back.cases[0].cycles == golden.cases[0].cycles
    assert named > len(chosen) // 2
    for length in random.Random(2).sample(range(len(whole)), 60):
        path.write_bytes(whole[:length])
        with pytest.raises(GoldenError, match="damaged-golden"):
            read_golden(path)


def test_a_damaged_golden_is_a_claim_that_does_not_hold(double: Path) -> None:
    path = golden_path(double, "pair7")
    write_golden(path, a_golden(double, [1]))
    path.write_bytes(path.read_bytes()[:-40])
    claim = next(c for c in Judge(str(double), None, Options()).verdict().claims if c.kind == "golden")
    assert claim.held is False
    assert "damaged-golden" in claim.says
    assert str(path) in claim.says


def test_pickled_objects_are_not_loaded(double: Path, tmp_path: Path) -> None:
    path = golden_path(double, "pair7")
    path.parent.mkdir()
    np.savez(path, **{"returns.y": np.array([open], object), "cycles": np.array(3)})  # type: ignore[list-item]
    with pytest.raises(GoldenError, match="damaged-golden"):
        read_golden(path)
    with zipfile.ZipFile(path, "w") as archive:
        archive.writestr("../outside.npy", b"x")
    with pytest.raises(GoldenError):
        read_golden(path)
    assert not (tmp_path / "outside.npy").exists()


def test_a_bomb_is_refused_before_it_goes_off(double: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("vliwsim.kernel.goldens.LARGEST", 1 << 20)
    path = golden_path(double, "pair7")
    path.parent.mkdir()
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("returns.y.npy", bytes(2 << 20))
    assert path.stat().st_size < 1 << 14
    with pytest.raises(GoldenError, match="more data than a golden has"):
        read_golden(path)


class TestAgainstAGolden:
    """What a golden's claims say when kernel, core or outputs move."""

    def test_slower_does_not_hold_and_says_where(self, tmp_path: Path) -> None:
        source = write(tmp_path, SUM.replace("budget  5 * n + 2", ""))
        assert command("golden", source, "--date", DAY, "--case", "smallest", "--case", "small-3").return_value == 0
        text = source.read_text()
        source.write_text(text.replace("@1 count", "@2 count").replace("@4 add", "@5 add"))
        verdict = Judge(str(source), None, Options()).verdict()
        claim = next(c for c in verdict.broken if c.kind == "golden")
        assert "17 → 20 cycles" in "".join(c.says for c in verdict.broken)
        assert "section" in claim.detail
        assert "loop (was" in claim.detail
        assert {change.why for change in verdict.changes} == {"source"}

    def test_faster_holds_and_is_told(self, tmp_path: Path) -> None:
        slow = SUM.replace("@1 count", "@2 count").replace("@4 add", "@5 add").replace("5 * n + 2", "6 * n + 2")
        source = write(tmp_path, slow)
        assert command("golden", source, "--date", DAY).return_value == 0
        source.write_text(SUM)
        result = command("regress", source, "--no-cache")
        assert result.return_value == 0
        assert "Since the goldens:" in result.output
        assert "[another source]" in result.output

    def test_on_a_core_that_moved_cycles_are_told_but_outputs_count(self, tmp_path: Path) -> None:
        core = tmp_path / "later.toml"
        core.write_text('name = "later"\nsummary = "a later pair7"\nbase = "pair7"\n[interrupt]\nservice = 3\n')
        text = SUM.replace("core    pair7", "core    later.toml")
        text = text.replace("@4 add", "@load add").replace("@1 count", "@load + 1 - branch count")
        source = write(tmp_path, text.replace("budget  5 * n + 2", ""))
        assert command("golden", source, "--date", DAY).return_value == 0
        core.write_text(core.read_text() + "[latency]\nload = 6\n")
        verdict = Judge(str(source), str(core), Options()).verdict()
        assert verdict.held
        assert {change.why for change in verdict.changes} == {"core"}
        assert any("another core" in claim.says for claim in verdict.claims)


SHIPPED = sorted((Path(__file__).resolve().parents[2] / "programs").glob("*/golden/*.npz"))


@pytest.mark.parametrize("path", SHIPPED, ids=lambda path: path.stem)
def test_shipped_kernels_still_give_what_was_recorded(path: Path) -> None:
    stem, _, core = path.stem.partition(".")
    source = path.parent.parent / f"{stem}.vliw"
    judge = Judge(str(source), core, Options())
    assert judge.kernel.core.name == core
    claims = list(judge.goldens())
    assert claims
    assert [claim.detail for claim in claims if claim.held is not True] == []
    golden = judge.golden
    assert golden is not None
    assert golden.date
    assert golden.reference_digest == source_digest((source.parent / "reference.py").read_text())


def test_every_shipped_kernel_has_one() -> None:
    programs = Path(__file__).resolve().parents[2] / "programs"
    wanted = {golden_path(t.source, str(t.core)) for t in targets([str(programs)])}
    assert wanted == set(SHIPPED)
