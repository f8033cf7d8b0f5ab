"""Faults planted into copies of the shipped kernels: each is found, and the message leads to its line."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

from tests.regression.faults import FAULTS, UNSAFE, Fault
from vliwsim.faces.main import cli
from vliwsim.kernel.cases import Case
from vliwsim.regression.claims import Claim, Options, Verdict
from vliwsim.regression.judge import Judge

PROGRAMS = Path(__file__).resolve().parents[2] / "programs"
SHOWN = 3
"""Claims that a report shows of one kernel."""


def planted(folder: Path, fault: Fault) -> tuple[Path, int]:
    """The faulty source in a copy of its folder, and the first line that is not as it was."""
    source = folder / fault.file
    shutil.copytree(PROGRAMS / source.parent.name, source.parent, ignore=shutil.ignore_patterns("golden"))
    text = source.read_text()
    assert fault.old in text, "the shipped kernel is no longer what this fault is made for"
    new = text.replace(fault.old, fault.new, 1)
    source.write_text(new)
    pairs = zip(text.splitlines(), new.splitlines())
    return source, next(number for number, (one, other) in enumerate(pairs, 1) if one != other)


def size_of(case: Case) -> int:
    return sum(len(value) for value in case.inputs.values() if hasattr(value, "__len__"))


def broken_claims(source: Path, fault: Fault, most: int | None) -> list[Claim]:
    """What does not hold, in the order of a report; judged on the smallest cases only, for speed."""
    options = Options(interrupts=fault.kind == "interrupts", limit=100_000)
    judge = Judge(str(source), fault.core, options)
    if most is not None and judge.legal().held is not False:
        vars(judge)["cases"] = sorted(judge.cases, key=size_of)[:most]
    elif most is not None:
        return [judge.legal(), *_first_cases(judge)]
    return judge.verdict().broken


def _first_cases(judge: Judge) -> list[Claim]:
    if "kernel" not in vars(judge):
        return []
    claims = [judge.case(case) for case in sorted(judge.cases, key=size_of)[:2]]
    return [claim for claim in claims if claim.held is False]


@pytest.mark.parametrize("fault", [*FAULTS, *UNSAFE], ids=lambda fault: fault.name)
def test_a_planted_fault_is_found_and_the_message_leads_to_the_line(fault: Fault, tmp_path: Path, long: bool) -> None:
    source, line = planted(tmp_path, fault)
    broken = broken_claims(source, fault, None if long else fault.cases)
    assert broken
    assert broken[0].kind == fault.kind
    leading = [claim for claim in broken[:SHOWN] if line in claim.lines]
    assert leading, f"line {line} is not among {[claim.lines for claim in broken[:SHOWN]]}"
    for claim in leading:
        told = f"{claim.says}\n{claim.detail}"
        names = (f"line {line}", f"lines {line}", f", {line}", f".vliw:{line}:")
        assert any(name in told for name in names)


def test_there_are_thirty_of_different_kinds() -> None:
    assert len({fault.name for fault in [*FAULTS, *UNSAFE]}) >= 30
    assert {fault.kind for fault in [*FAULTS, *UNSAFE]} == {"legal", "case", "budget", "interrupts"}


def test_the_report_of_a_faulty_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One fault in each of four kernels, found in one go, each with a command that goes there."""
    monkeypatch.setenv("VLIWSIM_CACHE", str(tmp_path / "cache"))
    chosen = ("wrong half", "wrong start value", "remainder forgotten", "declared bytes too few")
    places = [planted(tmp_path / "copy", fault) for fault in FAULTS if fault.name in chosen]
    result = CliRunner().invoke(cli, ["regress", str(tmp_path / "copy")], standalone_mode=False)
    assert result.return_value == 1
    for source, line in places:
        assert f"vliwsim debug {source}" in result.output
        assert f"line {line} " in result.output or f":{line}:" in result.output
    assert "do not hold" in result.output.splitlines()[-1]


def test_where_a_wrong_element_came_from(tmp_path: Path) -> None:
    """The whole message: the element, the store that made it, its cycle, what is behind it, and where to look."""
    fault = next(fault for fault in FAULTS if fault.name == "wrong half")
    source, line = planted(tmp_path, fault)
    judge = Judge(str(source), None, Options())
    case = next(case for case in judge.cases if case.name == "smallest")
    claim = judge.case(case)
    first, made, behind, look = claim.detail.splitlines()
    assert first.startswith("  y[0] is ")
    assert made == "  made     stored by line 57, sd at loop@1, cycle 9" or made.startswith("  made     stored by line")
    assert behind.startswith("  behind   line ")
    assert f"line {line} splat.h2" in behind
    assert look == f"  look     vliwsim debug {source} --case smallest   (then: at wrong y)"


def test_verdicts_survive_json(tmp_path: Path) -> None:
    from vliwsim.regression.claims import verdict_from_json

    source, _ = planted(tmp_path, FAULTS[0])
    verdict: Verdict = Judge(str(source), None, Options()).verdict()
    assert verdict_from_json(verdict.as_json()) == verdict
