"""Whole regressions: what is judged again, what an odd reference leads to, and what is written."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
import xml.etree.ElementTree as Tree
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner, Result

from tests.kernel.sources import DOUBLE, SUM, write
from vliwsim.faces.main import cli, status_of
from vliwsim.kernel.goldens import read_golden
from vliwsim.regression.claims import Options
from vliwsim.regression.fit import fit
from vliwsim.regression.keep import Keep
from vliwsim.regression.sources import Target, targets
from vliwsim.regression.watch import Watch
from vliwsim.regression.workers import judge_all


@pytest.fixture(autouse=True)
def cache(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("VLIWSIM_CACHE", str(tmp_path / "cache"))
    return tmp_path / "cache"


@pytest.fixture
def shelf(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder with two kernels, the working folder above it."""
    folder = tmp_path / "shelf"
    for name, text in (("total", SUM), ("double", DOUBLE)):
        (folder / name).mkdir(parents=True)
        write(folder / name, text)
    monkeypatch.chdir(tmp_path)
    return folder


def regress(*arguments: object) -> Result:
    return CliRunner().invoke(cli, ["regress", *map(str, arguments)], standalone_mode=False)


class TestWhole:
    def test_the_report(self, shelf: Path) -> None:
        result = regress("shelf")
        assert result.return_value == 0
        assert result.output.splitlines() == [
            "  · double on pair7  holds, 12 cases, 64 bytes of code",
            "  · total on pair7   holds, 12 cases, 48 bytes of code",
            "",
            "2 kernels, 27 claims: all hold.",
        ]
        again = regress("shelf")
        assert again.output.splitlines()[-1] == (
            "2 kernels, 27 claims: all hold (2 unchanged since they were last judged)."
        )

    def test_exit_statuses(self, shelf: Path) -> None:
        assert status_of(["regress", "shelf"]) == 0
        assert status_of(["regress", "nowhere"]) == 2
        assert status_of(["regress", "shelf", "--junit", "no/such/folder.xml"]) == 2
        (shelf / "total" / "total.vliw").write_text(SUM.replace("li g4, 0", "li g4, 1"))
        assert status_of(["regress", "shelf"]) == 1

    def test_json_and_junit(self, shelf: Path) -> None:
        (shelf / "total" / "total.vliw").write_text(SUM.replace("li g4, 0", "li g4, 1"))
        result = regress("shelf", "--json", "--junit", "claims.xml")
        data = json.loads(result.output)
        assert data["held"] is False
        assert data["claims"] == 27
        by_name = {kernel["kernel"]: kernel for kernel in data["kernels"]}
        assert by_name["double"]["held"] is True
        bad = [claim for claim in by_name["total"]["claims"] if claim["held"] is False]
        assert len(bad) == data["failed"] >= 10
        traced = [claim["lines"] for claim in bad if "lines" in claim]
        assert len(traced) == 3  # the shortest ones
        assert all(10 in lines for lines in traced)
        root = Tree.parse("claims.xml").getroot()
        assert root.get("tests") == "27"
        assert int(root.get("failures") or 0) == data["failed"]
        assert {case.get("classname") for case in root.iter("testcase")} == {"double on pair7", "total on pair7"}
        failure = root.find(".//failure")
        assert failure is not None
        assert "expected" in (failure.text or "")

    def test_every_core_that_is_named(self, shelf: Path) -> None:
        source = shelf / "total" / "total.vliw"
        text = SUM.replace("core    pair7", "core    pair7, lone4").replace("@1 count", "@load + 1 - branch count")
        source.write_text(text.replace("@4 add", "@load add").replace("budget  5 * n + 2\n", ""))
        assert targets([str(source)]) == [Target(str(source), "pair7"), Target(str(source), "lone4")]
        assert "total on lone4" in regress(source).output
        assert "lone4" not in regress(source, "--core", "pair7").output

    def test_a_source_that_does_not_assemble(self, shelf: Path) -> None:
        source = shelf / "total" / "total.vliw"
        source.write_text(SUM.replace("lh g2", "lhh g2").replace("halt", "hallt"))
        result = regress(source)
        assert result.return_value == 1
        assert "unknown-operation" in result.output
        assert f"{source}:12:4" in result.output
        assert f"{source}:16:4" in result.output


class TestKept:
    """What is judged again: exactly what something it was judged by has changed of."""

    def kept(self, shelf: Path) -> int:
        last = regress("shelf").output.splitlines()[-1]
        return int(last.partition("(")[2].split()[0]) if "(" in last else 0

    def test_everything_that_was_read_counts(self, shelf: Path) -> None:
        folder = shelf / "double"
        data = folder / "factor.npy"
        np.save(data, np.array([2]))
        (folder / "helper.py").write_text(
            "from pathlib import Path\nimport numpy as np\nfactor = np.load(Path(__file__).parent / 'factor.npy')[0]\n"
        )
        (folder / "reference.py").write_text(
            "import numpy as np\nimport helper\ndef double(x):\n"
            "    return (x.astype(int) * helper.factor).astype(np.int16)\n"
        )
        assert self.kept(shelf) == 0
        assert self.kept(shelf) == 2
        np.save(data, np.array([3]))
        assert regress("shelf").return_value == 1
        np.save(data, np.array([2]))
        assert regress("shelf").return_value == 0
        text = (folder / "helper.py").read_text()
        (folder / "helper.py").write_text(text.replace("[0]", "[0] + 1"))
        assert regress("shelf").return_value == 1
        (folder / "helper.py").write_text(text)
        (folder / "cases").mkdir()
        (folder / "cases" / "small.json").write_text('{"kernel": "double", "inputs": {"x": [1, 2]}}')
        assert "13 cases" in regress("shelf").output
        assert self.kept(shelf) == 2

    def test_a_new_golden_and_a_new_reference_count(self, shelf: Path) -> None:
        (shelf / "double" / "reference.py").rename(shelf / "kept.py")
        assert self.kept(shelf) == 0
        (shelf / "kept.py").rename(shelf / "double" / "reference.py")
        assert self.kept(shelf) == 1
        assert status_of(["golden", str(shelf / "double"), "--date", "2030-01-31"]) == 0
        assert "12 goldens" in regress("shelf").output

    def test_a_saved_file_that_says_the_same_does_not_count(self, shelf: Path) -> None:
        assert self.kept(shelf) == 0
        for path in shelf.rglob("*.*"):
            path.write_bytes(path.read_bytes())
        assert self.kept(shelf) == 2

    def test_a_core_file_counts(self, shelf: Path) -> None:
        core = shelf / "double" / "mine.toml"
        core.write_text('name = "mine"\nsummary = "mine"\nbase = "pair7"\n')
        (shelf / "double" / "double.vliw").write_text(DOUBLE.replace("core    pair7", "core    mine.toml"))
        assert self.kept(shelf) == 0
        assert self.kept(shelf) == 2
        core.write_text(core.read_text() + "[latency]\nload = 6\n")
        assert regress("shelf").return_value == 1

    def test_damaged_entries_count_as_not_there(self, shelf: Path, cache: Path) -> None:
        assert self.kept(shelf) == 0
        for path in (cache / "verdicts").glob("*.json"):
            path.write_text(path.read_text().replace('"held": true', '"held": null', 1))
        assert self.kept(shelf) == 0
        for path in (cache / "verdicts").glob("*.json"):
            path.write_bytes(b"\x00\xff" * 10)
        assert self.kept(shelf) == 0
        assert self.kept(shelf) == 2

    def test_options_count_and_can_be_cleared(self, shelf: Path, cache: Path) -> None:
        assert self.kept(shelf) == 0
        assert "unchanged" not in regress("shelf", "--interrupts").output
        assert "unchanged" not in regress("shelf", "--no-cache").output
        assert "unchanged" not in regress("shelf", "--clear-cache").output
        assert len(list((cache / "verdicts").iterdir())) == 2

    def test_no_place_to_keep_anything_is_no_reason_to_fail(self, shelf: Path, cache: Path) -> None:
        cache.write_text("a file where the folder should be")
        assert self.kept(shelf) == 0
        assert regress("shelf").return_value == 0


REFERENCES = {
    "raises": ("def double(x):\n    y = x * 2\n    raise ValueError('no idea')\n", "ValueError", 3),
    "wrong shape": ("def double(x):\n    return (x * 2)[:-1]\n", "shape", 1),
    "two dimensions": ("def double(x):\n    return [[1, 2]]\n", "shape", 1),
    "wrong type": ("def double(x):\n    return x * 2.5\n", "holds floats", 1),
    "nothing": ("def double(x):\n    x * 2\n", "None for y", 1),
    "too large": ("def double(x):\n    return x.astype(int) * 0 + 2**40\n", "1099511627776", 1),
    "no function": ("def triple(x):\n    return x\n", "no function double", 1),
    "no Python": ("def double(x:\n", "SyntaxError", 1),
    "exits": ("import sys\ndef double(x):\n    sys.exit(0)\n", "SystemExit", 3),
    "loops for ever": ("def double(x):\n    while True:\n        pass\n", "no answer within 0.5 s", 2),
    "loops while loading": ("while True:\n    pass\n", "no answer within 0.5 s", 1),
    "loops in its cases": (
        "def cases():\n    while True:\n        yield from ()\ndef double(x):\n    return x\n",
        "no answer",
        2,
    ),
    "swallows everything": (
        "def double(x):\n    while True:\n        try:\n            while True:\n                pass\n"
        "        except BaseException:\n            pass\n",
        "no answer within 0.5 s while",
        0,
    ),
    "ends its process": ("import os\ndef double(x):\n    os._exit(3)\n", "its process ended (status 3)", 0),
    "kills its process": (
        "import os, signal\ndef double(x):\n    os.kill(os.getpid(), signal.SIGKILL)\n",
        "its process ended (signal 9)",
        0,
    ),
}
"""Odd references: the file, what the message says, and the line it leads to (0 for none)."""


@pytest.mark.parametrize("name", REFERENCES)
def test_an_odd_reference_gets_a_clear_answer(name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    code, says, line = REFERENCES[name]
    monkeypatch.setattr("vliwsim.regression.workers.GRACE", 0.5)
    source = write(tmp_path, DOUBLE, code)
    result = regress(source, "--time-limit", "0.5")
    assert result.exception is None
    assert result.return_value == 1
    assert says in result.output
    assert "Traceback" not in result.output
    if line:
        assert f"reference.py:{line}:" in result.output


def test_a_reference_that_prints_or_changes_its_inputs(tmp_path: Path) -> None:
    code = (
        "import sys\nimport numpy as np\ndef double(x):\n    print('hello')\n    print('there', file=sys.stderr)\n"
        "    x *= 2\n    return x\n"
    )
    source = write(tmp_path, DOUBLE, code)
    result = regress(source, "--json")
    data = json.loads(result.output)
    assert data["kernels"][0]["notes"] == [
        "double prints: hello",
        "double changes its input x (a copy: nothing is harmed)",
    ]
    claims = {(c["kind"], c["name"]): c["held"] for c in data["kernels"][0]["claims"]}
    assert claims["case", "smallest"]
    assert "note     double on pair7: double prints: hello" in regress(source, "--no-cache").output


def test_what_a_hanging_reference_gave_is_not_kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("vliwsim.regression.workers.GRACE", 0.5)
    source = write(tmp_path, DOUBLE, REFERENCES["ends its process"][0])
    assert "unchanged" not in regress(source).output + regress(source).output


def test_without_its_reference_a_kernel_is_judged_by_the_rest(tmp_path: Path) -> None:
    source = write(tmp_path, DOUBLE, "raise SystemExit\n")
    assert regress(source).return_value == 1
    assert regress(source, "--no-reference").return_value == 0


def test_one_target_feels_nothing_of_another(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Two references with helper modules of one name, and one that changes the working folder."""
    for name, text, factor in (("total", SUM, 1), ("double", DOUBLE, 2)):
        (tmp_path / name).mkdir()
        write(tmp_path / name, text)
        (tmp_path / name / "common.py").write_text(f"import os\nos.chdir('/')\nfactor = {factor}\n")
    (tmp_path / "total" / "reference.py").write_text(
        "import common\ndef total(x):\n    return int(x.astype(int).sum()) * common.factor\n"
    )
    (tmp_path / "double" / "reference.py").write_text("import common\ndef double(x):\n    return x * common.factor\n")
    monkeypatch.chdir(tmp_path)
    found = list(judge_all(targets(["."]), 1, Options(), lambda target, text: None))
    assert [verdict.claims[0].held for _, verdict, _ in found] == [True, True]
    held = {verdict.kernel: [c for c in verdict.claims if c.held is False] for _, verdict, _ in found}
    assert held == {"total": [], "double": []}
    for _, _, files in found:
        assert {os.path.basename(name) for name in files if name.endswith(".py")} == {"reference.py", "common.py"}
        assert not any(os.path.isabs(name) for name in files if name.endswith(".py"))


def test_watch_finds_what_a_saved_file_touches(shelf: Path) -> None:
    options, found = Options(), targets(["shelf"])
    keep = Keep(None, options)
    for target, verdict, files in judge_all(found, 2, options, lambda target, text: None):
        keep.put(target, verdict, files)
    watch = Watch(["shelf"], None, keep)
    assert watch.look() == []
    (shelf / "double" / "reference.py").write_text("def double(x):\n    return x * 2\n\n")
    assert [target.title for target in watch.look()] == ["double on pair7"]
    assert watch.look() == []
    (shelf / "third").mkdir()
    write(shelf / "third", SUM)
    assert [target.source for target in watch.look()] == [os.path.join("shelf", "third", "total.vliw")]
    (shelf / "third" / "total.vliw").unlink()
    assert watch.look() == []


def test_killed_at_any_moment_nothing_is_half_written(tmp_path: Path, cache: Path, long: bool) -> None:
    """Kept verdicts and goldens after kills at random moments: what is there is whole."""
    kills = 50 if long else 6
    folder = tmp_path / "double"
    folder.mkdir()
    source = write(folder, DOUBLE)
    write(tmp_path, SUM)
    assert status_of(["golden", str(source), "--date", "2030-01-31"]) == 0
    before = (folder / "golden" / "double.pair7.npz").read_bytes()
    chance = random.Random(7)
    run = [sys.executable, "-m", "vliwsim"]
    for number in range(kills):
        golden = [*run, "golden", str(source), "--date", f"2030-02-{number % 28 + 1:02}", "--replace"]
        command = golden if number % 2 else [*run, "regress", str(tmp_path)]
        process = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        time.sleep(chance.uniform(0.1, 1.6))
        process.send_signal(signal.SIGKILL)
        process.wait()
        kept = read_golden(folder / "golden" / "double.pair7.npz")  # raises if it is damaged
        assert kept is not None
        assert len(kept.cases) == 12
        for path in (cache / "verdicts").glob("*.json"):
            assert json.loads(path.read_text())["kept"]["verdict"]["held"] is True
    assert len(before) == (folder / "golden" / "double.pair7.npz").stat().st_size
    assert "all hold" in regress(tmp_path).output


@pytest.mark.parametrize(
    ("cycles", "formula", "outliers", "pattern"),
    [
        ({n: 3 * n + 5 for n in (4, 8, 12, 40)}, "3 n + 5", [], ""),
        ({n: 11 * n // 16 + 2 for n in (16, 32, 64, 256)}, "11/16 n + 2", [], ""),
        ({n: 2 * n + (7 if n % 4 == 2 else 0) for n in range(4, 40)}, "2 n", [6, 10], "n % 4 = 2"),
        ({n: 2 * n + (1 if n < 8 else 0) for n in range(1, 30)}, "2 n", [1, 2], "n < 8"),
        ({8: 30, 16: 30, 24: 30}, "30", [], ""),
    ],
)
def test_cycles_as_a_formula(cycles: dict[int, int], formula: str, outliers: list[int], pattern: str) -> None:
    found = fit("n", cycles)
    assert found is not None
    assert found.formula == formula
    assert [size for size, _ in found.outliers][:2] == outliers
    assert found.pattern == pattern
