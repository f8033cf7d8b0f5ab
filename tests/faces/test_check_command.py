"""``vliwsim check``: what it prints, as JSON and SARIF too, for one kernel and for several, good and bad."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from tests.kernel.sources import SUM, write
from vliwsim.faces.main import status_of

Captured = pytest.CaptureFixture[str]
SCHEMA = Path(__file__).resolve().parents[1] / "check" / "sarif-2.1.0-rtm.5.json"
"""The published schema of SARIF 2.1.0 (OASIS), as the npm package @microsoft/jest-sarif 1.0.0-beta.0 carries it."""

TWICE = """kernel twice
core pair7
given x : i32[n] at g1
returns y : i32 in g2
needs n >= 1
start:
@0 lw g2, [g1]
@1 mul g2, g1, g1
@4 halt
"""


@pytest.fixture
def twice(tmp_path: Path) -> Path:
    path = tmp_path / "twice.vliw"
    path.write_text(TWICE)
    return path


def test_a_legal_kernel(capsys: Captured) -> None:
    assert status_of(["check", "straight"]) == 0
    out, err = capsys.readouterr()
    lines = out.splitlines()
    assert lines[0].startswith("weighted_sum on pair7: legal on every path")
    assert any(line.startswith("  proved       lands-twice, write-ports") for line in lines)
    assert any(line.startswith("  early        94 reads with a result in flight: 94 not said") for line in lines)
    assert any(line.startswith("  interrupts   safe at 4 of 24 bundles") for line in lines)
    assert max(map(len, lines)) <= 80
    assert err == ""


def test_an_illegal_kernel_and_the_path_there(twice: Path, capsys: Captured) -> None:
    assert status_of(["check", str(twice)]) == 1
    out = capsys.readouterr().out
    assert out.splitlines()[0] == "twice on pair7: illegal: lands-twice."
    assert (
        f"{twice}:7:4  lands-twice  (illegal)\n"
        "    @0 lw g2, [g1]\n"
        "       ^\n"
        "  found    two results reach g2 at start@4: lw (line 7, start@0); mul (line 8, start@1)\n"
        "  allowed  one result a register a beat\n"
        "  try      line 8 at @2\n"
        "\n"
        "           start\n"
        "    beat   @0          @1          @2          @3          @4\n"
        "    g.mem  lw━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━g2\n"
        "    g.mul              mul━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━━g2\n"
        "                                                           ▲ lands-twice\n"
    ) in out


def test_every_core_that_is_named(capsys: Captured) -> None:
    assert status_of(["check", "calibrate"]) == 0
    out = capsys.readouterr().out
    assert "calibrate on pair7: legal" in out
    assert "calibrate on lone4: legal" in out
    assert status_of(["check", "calibrate", "--core", "lone4"]) == 0
    assert "pair7" not in capsys.readouterr().out


def test_a_core_that_is_changed(capsys: Captured) -> None:
    assert status_of(["check", "energy", "--set", "issue.early=reject"]) == 1
    assert "illegal: early-read" in capsys.readouterr().out


def test_several_files_of_which_some_are_bad(twice: Path, tmp_path: Path, capsys: Captured) -> None:
    broken = tmp_path / "broken.vliw"
    broken.write_text("kernel broken\ncore pair7\nstart:\n@0 nonsense g1\n")
    gone = tmp_path / "gone.vliw"
    assert status_of(["check", "energy", str(broken), str(twice)]) == 1
    out, err = capsys.readouterr()
    assert "energy on pair7: legal" in out
    assert "twice on pair7: illegal" in out
    assert "unknown-operation" in err
    assert status_of(["check", "energy", str(gone), str(twice)]) == 2
    out, err = capsys.readouterr()
    assert "twice on pair7: illegal" in out
    assert "no-such-file" in err


def test_a_file_that_vanishes_while_others_are_checked(
    tmp_path: Path, capsys: Captured, monkeypatch: pytest.MonkeyPatch
) -> None:
    from vliwsim.check import judge

    path = write(tmp_path, SUM)
    original = judge.check_kernel

    def remove(*arguments: Any, **more: Any) -> Any:
        path.unlink(missing_ok=True)
        return original(*arguments, **more)

    monkeypatch.setattr(judge, "check_kernel", remove)
    assert status_of(["check", "energy", str(path)]) == 2
    out, err = capsys.readouterr()
    assert "energy on pair7: legal" in out
    assert "no-such-file" in err
    assert "Traceback" not in err


@pytest.mark.parametrize(
    ("arguments", "name"),
    [
        ([], "missing-argument"),
        (["energy", "--cap", "0"], "bad-option"),
        (["energy", "--core", "nothing7"], "unknown-core"),
        (["energy", "--set", "latency.load=x"], ""),
        (["energy", "--sarif", "no/such/folder/log.sarif"], "output-file"),
        (["energy", "--sarif", ""], "output-file"),
        (["energy", "--replace"], "bad-option"),
        (["energy", "--nonsense"], "no-such-option"),
        (["."], "which-source"),
        (["/dev/null"], ""),
        (["a\0b"], ""),
    ],
)
def test_bad_requests(
    arguments: list[str], name: str, capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    assert status_of(["check", *arguments]) in (1, 2)
    err = capsys.readouterr().err
    assert name in err
    assert "found" in err
    assert "Traceback" not in err


def test_a_file_that_cannot_be_read(tmp_path: Path, capsys: Captured) -> None:
    path = tmp_path / "binary.vliw"
    path.write_bytes(b"\xff\xfe\x00kernel")
    assert status_of(["check", str(path)]) == 2
    assert "not-text" in capsys.readouterr().err


def test_beyond_the_cap(capsys: Captured) -> None:
    assert status_of(["check", "lowpass", "--cap", "30"]) == 1
    out = capsys.readouterr().out
    assert "not decided" in out.splitlines()[0]
    assert "more than" in out
    assert "not all there are" in out


def test_json(twice: Path, capsys: Captured) -> None:
    assert status_of(["check", "energy", str(twice), "nowhere.vliw", "--json"]) == 2
    out, err = capsys.readouterr()
    energy, illegal, missing = json.loads(out)["kernels"]
    assert energy["kernel"] == "energy"
    assert energy["legal"] is True
    assert {rule["outcome"] for rule in energy["rules"]} == {"proved", "needs input"}
    assert all(read["meant"] for read in energy["early_reads"])
    assert energy["interrupts"]["longest_without"] is None
    assert energy["complete"]
    (rule,) = [rule for rule in illegal["rules"] if rule["outcome"] == "violated"]
    assert rule["rule"] == "lands-twice"
    assert rule["incidents"][0]["path"] == [f"start@{k}" for k in range(5)]
    assert [each["line"] for each in rule["incidents"][0]["operations"]] == [7, 8]
    assert illegal["diagnostics"][0]["name"] == "lands-twice"
    assert missing["diagnostics"][0]["name"] == "no-such-file"
    assert "no-such-file" in err


def sarif_of(arguments: list[str], log: Path) -> Any:
    import jsonschema

    status_of(["check", *arguments, "--sarif", str(log)])
    data = json.loads(log.read_text(encoding="utf-8"))
    schema = json.loads(SCHEMA.read_text(encoding="utf-8"))
    jsonschema.Draft4Validator(schema, format_checker=jsonschema.FormatChecker()).validate(data)
    return data


def test_sarif_is_valid_by_the_published_schema(twice: Path, tmp_path: Path, capsys: Captured) -> None:
    data = sarif_of(["energy", "weighted_sum", "unrolled", str(twice), "nowhere.vliw"], tmp_path / "log.sarif")
    assert data["version"] == "2.1.0"
    (run,) = data["runs"]
    rules = [rule["id"] for rule in run["tool"]["driver"]["rules"]]
    assert len(rules) == len(set(rules))
    for result in run["results"]:
        assert rules[result["ruleIndex"]] == result["ruleId"]
    (error, missing) = [result for result in run["results"] if result["level"] == "error"]
    place = error["locations"][0]["physicalLocation"]
    assert place["region"] == {"startLine": 7, "startColumn": 4, "endColumn": 6}
    assert place["artifactLocation"]["uri"] == twice.as_uri()
    steps = error["codeFlows"][0]["threadFlows"][0]["locations"]
    assert [step["location"]["message"]["text"] for step in steps] == ["start@0", "start@1", "start@4"]
    assert missing["ruleId"] == "no-such-file"
    assert "item-not-said" in {result["ruleId"] for result in run["results"]}  # of unrolled


def test_the_schema_would_notice(twice: Path, tmp_path: Path) -> None:
    import jsonschema

    data = sarif_of([str(twice)], tmp_path / "log.sarif")
    data["runs"][0]["results"][0]["locations"][0]["physicalLocation"]["region"]["startLine"] = 0
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.Draft4Validator(json.loads(SCHEMA.read_text())).validate(data)


def test_sarif_is_never_written_over_a_file_unasked(twice: Path, tmp_path: Path, capsys: Captured) -> None:
    log = tmp_path / "log.sarif"
    log.write_text("mine")
    assert status_of(["check", str(twice), "--sarif", str(log)]) == 2
    assert log.read_text() == "mine"
    assert "file-exists" in capsys.readouterr().err
    assert status_of(["check", str(twice), "--sarif", str(log), "--replace"]) == 1
    assert json.loads(log.read_text())["version"] == "2.1.0"
    assert [path.name for path in sorted(tmp_path.iterdir())] == ["log.sarif", "twice.vliw"]


def test_the_same_bytes_every_time(twice: Path, tmp_path: Path) -> None:
    logs = [tmp_path / f"{k}.sarif" for k in range(2)]
    for log in logs:
        status_of(["check", "energy", str(twice), "--sarif", str(log)])
    assert logs[0].read_bytes() == logs[1].read_bytes()


def test_uris() -> None:
    from vliwsim.faces.check_sarif import uri

    assert uri("a folder/x#1.vliw") == "a%20folder/x%231.vliw"
    assert uri("/tmp/x y.vliw") == "file:///tmp/x%20y.vliw"


class TestRun:
    """`run` judges before it simulates."""

    def test_an_illegal_kernel_is_not_simulated(self, twice: Path, capsys: Captured) -> None:
        assert status_of(["run", str(twice), "--give", "x=1", "--no-reference"]) == 1
        out = capsys.readouterr().out
        assert out.startswith("twice on pair7: illegal: lands-twice.\n")
        assert "cycles" not in out
        assert "--anyway" in out

    def test_unless_told_to(self, twice: Path, capsys: Captured) -> None:
        assert status_of(["run", str(twice), "--give", "x=1", "--no-reference", "--anyway"]) == 1
        assert "illegal after 4 cycles" in capsys.readouterr().out

    def test_as_json(self, twice: Path, capsys: Captured) -> None:
        assert status_of(["run", str(twice), "--give", "x=1", "--no-reference", "--json"]) == 1
        data = json.loads(capsys.readouterr().out)
        assert data["cycles"] is None
        assert [d["name"] for d in data["diagnostics"]] == ["lands-twice"]

    def test_a_legal_one_runs_as_ever(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM)
        assert status_of(["run", str(path), "--give", "x=1,2,3"]) == 0
        assert "right, legal, on budget" in capsys.readouterr().out
