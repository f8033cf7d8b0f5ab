"""The command line: what it prints, where, and with which exit status."""

from __future__ import annotations

import json
import os
import pty
import select
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from tests.kernel.sources import DOUBLE, REFERENCES, SUM, write
from vliwsim.faces.main import COMMANDS, cli, status_of

Captured = pytest.CaptureFixture[str]


def vliwsim(*arguments: object, **more: object) -> subprocess.CompletedProcess[str]:
    """The command in a process of its own."""
    command = [sys.executable, "-m", "vliwsim", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, timeout=60, check=False, **more)  # type: ignore[call-overload,no-any-return]


@pytest.fixture
def total(tmp_path: Path) -> Path:
    return write(tmp_path, SUM)


@pytest.fixture
def double(tmp_path: Path) -> Path:
    return write(tmp_path, DOUBLE)


class TestReports:
    def test_the_report_of_a_right_run(self, total: Path, capsys: Captured) -> None:
        assert status_of(["run", str(total), "--give", "x=1,2,3"]) == 0
        out, err = capsys.readouterr()
        assert out.splitlines() == [
            "total on pair7, n = 3: right, legal, on budget.",
            "",
            "  17 cycles = 17 bundles + 0 stalls + 0 drain      (budget 17)",
            "   1  start",
            "  15  loop    3 passes of 5",
            "   1  finish",
            "  Busiest: g.sum, g.mem, g.flow (3 of 15 beats of loop).",
        ]
        assert err == ""

    def test_the_shipped_example(self, capsys: Captured) -> None:
        assert status_of(["run", "energy", "--no-reference"]) == 0
        out = capsys.readouterr().out.splitlines()
        assert out[:6] == [
            "energy on pair7, n = 4096: not compared, legal, on budget.",
            "",
            "  1033 cycles = 1032 bundles + 0 stalls + 1 drain      (budget 1033)",
            "     7  start",
            "  1024  loop    1024 passes of 1",
            "     2  finish  1 of them drain",
        ]

    def test_the_report_of_a_wrong_run(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, DOUBLE, "def double(x):\n    return x * 2 + 2 * (x > 1)")
        assert status_of(["run", str(path), "--give", "x=1,2,3"]) == 1
        out = capsys.readouterr().out
        assert out.startswith("double on pair7, n = 3: wrong, legal.\n")
        assert "  y[1]  is 4, expected 6; 2 of 3 elements differ, by up to 2 in the last place\n" in out

    def test_stalls_stand_in_the_account(self, total: Path, capsys: Captured) -> None:
        assert status_of(["run", str(total), "--give", "x=1,2,3", "--interrupt-at", "4"]) == 0
        out = capsys.readouterr().out
        assert "  57 cycles = 17 bundles + 40 stalls + 0 drain      (budget 17, beside interrupt service)\n" in out
        assert "  40  stalled  40 interrupt\n" in out

    def test_a_hazard_has_the_form_of_a_diagnostic(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM.replace("@4 add g4, g4, g2", "@3 add g2, g4, 1\n@4 add g4, g4, g2"))
        assert status_of(["run", str(path)]) == 1
        out = capsys.readouterr().out
        assert (
            f"{path}:12:4  lands-twice  (illegal)\n    @0 lh g2, [g10 then +2]\n       ^\n  found    two results" in out
        )
        assert "\n  try      line 14 at @4\n" in out

    def test_a_source_that_does_not_assemble(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM.replace("add g4", "plus g4").replace("li g4", "lii g4"))
        assert status_of(["run", str(path)]) == 1
        out, err = capsys.readouterr()
        assert out == ""
        assert err.count("(error)") == 2
        assert err.count("found ") == 2

    def test_all_cases(self, double: Path, capsys: Captured) -> None:
        assert status_of(["run", str(double), "--case", "all"]) == 0
        out = capsys.readouterr().out
        assert "  alternating         224  double on pair7, n = 37: right, legal.\n" in out
        assert out.endswith("\n12 of 12 cases right, legal and within budget.\n")

    def test_all_cases_of_a_wrong_kernel(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, DOUBLE, "def double(x):\n    return x * 0")
        assert status_of(["run", str(path), "--case", "all"]) == 1
        out = capsys.readouterr().out
        assert "\nhighest: double on pair7, n = 37: wrong, legal.\n" in out
        assert out.endswith(" of 12 cases right, legal and within budget.\n")

    def test_a_named_case_and_the_list(self, double: Path, capsys: Captured) -> None:
        assert status_of(["run", str(double), "--case", "smallest"]) == 0
        assert capsys.readouterr().out.startswith("double on pair7, n = 1: right")
        assert status_of(["run", str(double), "--cases"]) == 0
        assert "  small-2        n = 2, x 2 values\n" in capsys.readouterr().out

    def test_trace_is_a_line_a_beat(self, total: Path, capsys: Captured) -> None:
        assert status_of(["run", str(total), "--give", "x=7", "--trace"]) == 0
        lines = capsys.readouterr().out.splitlines()
        assert lines[:7] == [
            "       0  start@0         li g4, 0",
            "       1  loop@0          lh g2, [g10 then +2]  <- g4 = 0x0",
            "       2  loop@1          count g16, loop  <- g10 = 0x42",
            "       3  loop@2          idle",
            "       4  loop@3          idle",
            "       5  loop@4          add g4, g4, g2  <- g2 = 0x7",
            "       6  finish@0        halt  <- g4 = 0x7",
        ]

    def test_notes_are_short_unless_asked_for(self, capsys: Captured) -> None:
        assert status_of(["run", "energy", "--no-reference"]) == 0
        short = capsys.readouterr().out
        assert status_of(["run", "energy", "--no-reference", "--notes"]) == 0
        whole = capsys.readouterr().out
        assert short.count("note  ") == 1
        assert "more such (--notes)" in short
        assert whole.count("note  ") > 1

    def test_a_conversion_is_said_once(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM.replace("x     : i16[n]", "x     : q15[n]"))
        assert status_of(["run", str(path), "--give", "x=0.5,1.0,-2.5"]) == 0
        out = capsys.readouterr().out
        assert out.endswith("  note     x: floats scaled by 2**15, rounded to nearest even; 2 of 3 saturated\n")


class TestGiving:
    def test_an_array_from_a_file(self, total: Path, tmp_path: Path, capsys: Captured) -> None:
        np.save(tmp_path / "x.npy", np.array([4, 5], np.int64))
        assert status_of(["run", str(total), "--give", f"x={tmp_path / 'x.npy'}"]) == 0
        assert "n = 2: right" in capsys.readouterr().out

    @pytest.mark.parametrize(
        ("given", "says"),
        [
            (["x"], "NAME=FILE.npy, NAME=40"),
            (["=3"], "NAME=FILE.npy, NAME=40"),
            (["x="], "NAME=FILE.npy, NAME=40"),
            (["3=4"], "NAME=FILE.npy, NAME=40"),
            (["x=1,2", "x=3"], "--give x twice"),
            (["x=1,two"], "a number, numbers with commas, or a .npy file"),
            (["x=many"], "a number, numbers with commas, or a .npy file"),
            (["x=0x"], "a number, numbers with commas, or a .npy file"),
            (["x=" + "9" * 5000], "a number, numbers with commas, or a .npy file"),
            (["x=none.npy"], "No such file"),
            (["x=/"], "is a folder"),
            (["x=/etc/hostname"], "no .npy file"),
            (["x=1.5,2"], "holds floats"),
            (["x=nan,"], "holds floats"),
            (["x=70000,"], "x[0] = 70000"),
            (["trips=1,2"], "trips is computed by line 5"),
            (["y=3"], "has no y"),
            (["n=0"], "needs does not hold with n = 0"),
            (["n=-1"], "x would have -1 elements"),
            (["n=2.5"], "a whole number"),
            (["n=99999999"], "bytes of data memory"),
            (["n=1e9"], "a whole number"),
            (["x=,"], "needs does not hold with n = 0"),
            (["trips=3", "x=1,"], "trips is computed by line 5"),
        ],
    )
    def test_bad_values(self, given: list[str], says: str, total: Path, capsys: Captured) -> None:
        options = [word for text in given for word in ("--give", text)]
        assert status_of(["run", str(total), *options]) == 2
        out, err = capsys.readouterr()
        assert out == ""
        assert says in err
        assert "  found    " in err


class TestSaving:
    def test_outputs_are_saved(self, double: Path, tmp_path: Path) -> None:
        target = tmp_path / "y.npy"
        assert status_of(["run", str(double), "--give", "x=1,2", "--save", f"y={target}"]) == 0
        assert np.load(target).tolist() == [2, 4]
        assert np.load(target).dtype == np.int16
        assert sorted(p.name for p in tmp_path.iterdir()) == ["double.vliw", "reference.py", "y.npy"]

    def test_never_over_a_file_unasked(self, double: Path, tmp_path: Path, capsys: Captured) -> None:
        target = tmp_path / "y.npy"
        target.write_text("mine")
        assert status_of(["run", str(double), "--save", f"y={target}"]) == 2
        assert "file-exists" in capsys.readouterr().err
        assert target.read_text() == "mine"
        assert status_of(["run", str(double), "--give", "x=1,", "--save", f"y={target}", "--replace"]) == 0
        assert np.load(target).tolist() == [2]

    @pytest.mark.parametrize(
        ("text", "says"),
        [
            ("y", "NAME=FILE.npy"),
            ("y=", "NAME=FILE.npy"),
            ("x={}/x.npy", "an output: y"),
            ("y={}/y.txt", "ends in .npy"),
            ("y={}/none/y.npy", "no folder"),
        ],
    )
    def test_bad_targets(self, text: str, says: str, double: Path, tmp_path: Path, capsys: Captured) -> None:
        before = sorted(tmp_path.iterdir())
        assert status_of(["run", str(double), "--save", text.format(tmp_path)]) == 2
        assert says in capsys.readouterr().err
        assert sorted(tmp_path.iterdir()) == before

    def test_nothing_is_saved_of_an_unfinished_run(self, double: Path, tmp_path: Path, capsys: Captured) -> None:
        target = tmp_path / "y.npy"
        assert status_of(["run", str(double), "--limit", "9", "--save", f"y={target}"]) == 1
        assert not target.exists()
        assert "nothing saved" in capsys.readouterr().out


class TestJson:
    def test_one_object(self, total: Path, capsys: Captured) -> None:
        assert status_of(["run", str(total), "--give", "x=1,2,3", "--json"]) == 0
        out, err = capsys.readouterr()
        data = json.loads(out)
        assert data["kernel"] == "total"
        assert data["sizes"] == {"n": 3}
        assert data["cycles"] == 17
        assert data["within_budget"] is True
        assert data["outputs"] == {"sum": {"matches": True, "first_difference": None}}
        assert data["diagnostics"] == []
        assert err == ""

    def test_a_reference_that_prints_does_not_disturb_it(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(
            tmp_path, SUM, "print('hello')\n" + REFERENCES["total"].replace("    ", "    print('there')\n    ")
        )
        assert status_of(["run", str(path), "--json"]) == 0
        out, err = capsys.readouterr()
        assert json.loads(out)["matches"] is True
        assert err == "hello\nthere\n"

    def test_a_wrong_run(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM, "def total(x):\n    return 5")
        assert status_of(["run", str(path), "--give", "x=1,2,3", "--json"]) == 1
        data = json.loads(capsys.readouterr().out)
        assert data["matches"] is False
        assert data["outputs"]["sum"]["first_difference"] == {"index": None, "got": 6, "expected": 5}

    def test_problems_too(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM.replace("add g4", "plus g4"))
        assert status_of(["run", str(path), "--json"]) == 1
        data = json.loads(capsys.readouterr().out)
        assert [d["line"] for d in data["diagnostics"]] == [14]

    def test_all_cases(self, double: Path, capsys: Captured) -> None:
        assert status_of(["run", str(double), "--case", "all", "--json"]) == 0
        data = json.loads(capsys.readouterr().out)
        assert [c["case"] for c in data["cases"]][:3] == ["random", "random-quiet", "zeros"]
        assert all(c["matches"] for c in data["cases"])


class TestImages:
    def test_there_and_back(self, total: Path, tmp_path: Path, capsys: Captured) -> None:
        image, source = tmp_path / "total.image", tmp_path / "back.vliw"
        assert status_of(["assemble", str(total), "-o", str(image)]) == 0
        assert capsys.readouterr().out.startswith("total on pair7: ")
        assert status_of(["disassemble", str(image), "-o", str(source)]) == 0
        again = tmp_path / "again.image"
        assert status_of(["assemble", str(source), "-o", str(again)]) == 0
        assert image.read_bytes() == again.read_bytes()

    def test_an_image_is_not_overwritten_unasked(self, total: Path, tmp_path: Path, capsys: Captured) -> None:
        image = tmp_path / "total.image"
        image.write_text("mine")
        assert status_of(["assemble", str(total), "-o", str(image)]) == 2
        assert image.read_text() == "mine"
        assert status_of(["assemble", str(total), "-o", str(image), "--replace"]) == 0

    @pytest.mark.parametrize("content", [b"", b"vliwsim image 1\n", b"\x00" * 100, b"kernel total"])
    def test_what_is_no_image(self, content: bytes, tmp_path: Path, capsys: Captured) -> None:
        (tmp_path / "x.image").write_bytes(content)
        assert status_of(["disassemble", str(tmp_path / "x.image")]) == 2
        assert "  found    " in capsys.readouterr().err

    def test_an_image_of_another_core(self, total: Path, tmp_path: Path, capsys: Captured) -> None:
        image = tmp_path / "total.image"
        assert status_of(["assemble", str(total), "-o", str(image), "--set", "latency.load=5"]) == 0
        assert status_of(["disassemble", str(image)]) == 2
        assert "other-core" in capsys.readouterr().err
        assert status_of(["disassemble", str(image), "--set", "latency.load=5"]) == 0


class TestCatalogue:
    def test_cores(self, capsys: Captured) -> None:
        assert status_of(["cores"]) == 0
        out = capsys.readouterr().out
        assert [line.split()[0] for line in out.splitlines()] == ["float3", "lone2", "lone4", "pair7", "ring16"]

    @pytest.mark.parametrize("core", ["float3", "lone2", "lone4", "pair7", "ring16"])
    def test_a_core(self, core: str, capsys: Captured) -> None:
        assert status_of(["cores", core]) == 0
        out = capsys.readouterr().out
        assert out.startswith(f"{core}: ")
        assert "\n  latency     " in out

    def test_a_changed_core(self, capsys: Captured) -> None:
        assert status_of(["cores", "pair7", "--set", "latency.load=9"]) == 0
        assert "load 9" in capsys.readouterr().out

    def test_operations(self, capsys: Captured) -> None:
        assert status_of(["ops"]) == 0
        out = capsys.readouterr().out
        assert "\n  mul.half" in out
        assert status_of(["ops", "mul.half"]) == 0
        assert "16 × 16 → 32" in capsys.readouterr().out
        assert status_of(["ops", "mul.half", "--core", "pair7"]) == 0
        assert "On pair7  latency 3; slots g.mul, h.mul\n" in capsys.readouterr().out
        assert status_of(["ops", "--core", "float3"]) == 0

    def test_layout(self, capsys: Captured) -> None:
        assert status_of(["layout"]) == 0
        assert capsys.readouterr().out.startswith("pair7: words of 64 bits")
        assert status_of(["layout", "add", "--core", "lone4"]) == 0
        assert capsys.readouterr().out.startswith("lone4: ")


class TestMistakes:
    @pytest.mark.parametrize(
        ("arguments", "name"),
        [
            (["rum"], "no-such-command"),
            (["run"], "missing-argument"),
            (["run", "--nope"], "no-such-option"),
            (["--nope"], "no-such-option"),
            (["run", "energy", "extra"], "bad-usage"),
            (["run", "energy", "--give"], "bad-option"),
            (["run", "energy", "--limit", "0"], "bad-option"),
            (["run", "energy", "--limit", "many"], "bad-option"),
            (["run", "energy", "--interrupt-at", "-1"], "bad-option"),
            (["run", "energy", "--core", "pair8"], None),
            (["run", "energy", "--core", "none.toml"], None),
            (["run", "energy", "--core", "/etc"], None),
            (["run", "energy", "--set", "latency.load"], None),
            (["run", "energy", "--set", "latency.load=0"], None),
            (["run", "energy", "--set", "latency.lod=5"], None),
            (["run", "energy", "--case", "storm"], "unknown-case"),
            (["run", "energy", "--cases", "--case", "zeros"], "bad-option"),
            (["run", "energy", "--case", "all", "--trace"], "bad-option"),
            (["run", "/etc/hostname"], None),
            (["run", "/"], "which-source"),
            (["run", "none.vliw"], "no-such-file"),
            (["run", ""], None),
            (["run", "a\0b"], "no-such-file"),
            (["run", "n" * 5000], "no-such-file"),
            (["cores", "pair8"], None),
            (["cores", "--set", "latency.load=3"], "bad-option"),
            (["ops", "multiply"], "unknown-operation"),
            (["layout", "multiply"], "unknown-operation"),
            (["disassemble", "none"], None),
            (["disassemble", "/"], None),
            (["assemble", "energy", "-o", "/none/there"], None),
            (["assemble", "energy", "-o", "/"], None),
            (["disassemble"], "missing-argument"),
        ],
    )
    def test_each_is_said_in_our_form(
        self, arguments: list[str], name: str | None, capsys: Captured, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.chdir(tmp_path)
        assert status_of(arguments) in ((2,) if name else (1, 2))
        out, err = capsys.readouterr()
        assert "  found    " in err
        assert name is None or f"{name}  (error)" in err
        assert "Traceback" not in out + err
        assert list(tmp_path.iterdir()) == []

    def test_the_nearest_command_and_option_are_offered(self, capsys: Captured) -> None:
        status_of(["assembel"])
        assert "try      vliwsim assemble" in capsys.readouterr().err
        status_of(["run", "energy", "--gibe", "n=4"])
        assert "try      --give" in capsys.readouterr().err

    def test_a_reference_that_fails(self, tmp_path: Path, capsys: Captured) -> None:
        path = write(tmp_path, SUM, "def total(x):\n    return x[99]")
        assert status_of(["run", str(path), "--give", "x=1,"]) == 2
        err = capsys.readouterr().err
        assert err.startswith(f"{tmp_path / 'reference.py'}:2:5  reference-raised  (error)\n    return x[99]\n    ^\n")
        assert "IndexError while calling total" in err

    def test_no_reference_runs_no_code(self, tmp_path: Path) -> None:
        path = write(tmp_path, SUM, f"open({str(tmp_path / 'ran')!r}, 'w')\ndef total(x): return 0")
        assert status_of(["run", str(path), "--give", "x=1,", "--no-reference"]) == 0
        assert status_of(["assemble", str(path)]) == 0
        assert not (tmp_path / "ran").exists()
        assert status_of(["run", str(path), "--give", "x=1,"]) == 1
        assert (tmp_path / "ran").exists()


class TestHelp:
    @pytest.mark.parametrize("command", [[], *([name] for name in COMMANDS)])
    def test_every_command_has_help(self, command: list[str]) -> None:
        result = CliRunner().invoke(cli, [*command, "--help"])
        assert result.exit_code == 0
        assert result.output.startswith("Usage: ")

    def test_no_arguments_show_the_commands(self, capsys: Captured) -> None:
        assert status_of([]) == 0
        out = capsys.readouterr().out
        assert all(f"\n  {name} " in out for name in COMMANDS)

    def test_version(self, capsys: Captured) -> None:
        assert status_of(["--version"]) == 0
        assert capsys.readouterr().out.startswith("vliwsim ")


class TestProcesses:
    """The same in a real process: status, streams, signals, pipes."""

    def test_status_and_streams(self, total: Path) -> None:
        right = vliwsim("run", total, "--give", "x=1,2,3")
        assert (right.returncode, right.stderr) == (0, "")
        missing = vliwsim("run", "nowhere.vliw")
        assert (missing.returncode, missing.stdout) == (2, "")
        assert missing.stderr.startswith("no-such-file  (error)\n  found    ")

    def test_output_is_plain_in_a_pipe(self, total: Path) -> None:
        for colour in ({"NO_COLOR": "1"}, {"FORCE_COLOR": "1"}, {"TERM": "dumb"}):
            result = vliwsim(
                "run", total, "--give", "n=30000", "--set", "memory.size=131072", env={**os.environ, **colour}
            )
            assert result.returncode == 0
            assert "\x1b" not in result.stdout + result.stderr
            assert result.stderr == ""

    def test_the_same_bytes_whatever_the_hash_seed(self, total: Path) -> None:
        outputs = {
            vliwsim("run", total, "--json", env={**os.environ, "PYTHONHASHSEED": seed}).stdout
            for seed in ("0", "1", "77")
        }
        assert len(outputs) == 1

    def test_a_reader_that_leaves_early_is_no_error(self, total: Path) -> None:
        shell = f"{sys.executable} -m vliwsim run {total} --trace | head -n 1; echo ${{PIPESTATUS[0]}}"
        result = subprocess.run(["bash", "-c", shell], capture_output=True, text=True, timeout=60, check=False)
        assert result.stdout == "       0  start@0         li g4, 0\n0\n"
        assert result.stderr == ""

    def test_ctrl_c_gives_the_account_so_far_and_only_a_terminal_sees_progress(self, tmp_path: Path) -> None:
        """An endless run, its progress on a terminal, interrupted once that is seen; its report in a pipe."""
        path = write(tmp_path, SUM.replace("count g16, loop", "jump loop").replace("g10 then +2", "g10 + 0"))
        main, other = pty.openpty()
        command = [sys.executable, "-m", "vliwsim", "run", str(path), "--limit", "1000000000000000"]
        process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=other, env={**os.environ, "TERM": "xterm"})
        os.close(other)
        seen = b""
        ends = time.monotonic() + 60
        while b"a second" not in seen and time.monotonic() < ends:
            if select.select([main], [], [], 0.5)[0]:
                seen += os.read(main, 4096)
        process.send_signal(signal.SIGINT)
        out, _ = process.communicate(timeout=60)
        os.close(main)
        assert b"total on pair7: cycle " in seen
        assert process.returncode == 130
        assert b"stopped after " in out
        assert b" cycles = " in out
        assert b"\x1b" not in out
        assert b"Traceback" not in seen + out

    def test_leaving_at_once_loses_nothing(self, tmp_path: Path) -> None:
        kept = tmp_path / "kept.txt"
        code = (
            "import atexit, sys; from vliwsim.faces.main import main; "
            f"held = open({str(kept)!r}, 'w'); held.write('said in time'); "
            "atexit.register(print, 'and the last word'); main(['cores', 'nosuch'])"
        )
        result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False)
        assert kept.read_text() == "said in time"
        assert result.stdout == "and the last word\n"
        assert result.returncode == 2
        assert "nosuch" in result.stderr

    def test_a_profiler_has_the_last_word(self) -> None:
        command = [sys.executable, "-m", "cProfile", "-m", "vliwsim", "cores"]
        result = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
        assert "pair7" in result.stdout
        assert "function calls" in result.stdout

    def test_cold_start_imports_nothing_heavy(self) -> None:
        code = (
            "import sys; from vliwsim.faces.main import status_of; status_of(['run', 'energy', '--no-reference']); "
            "heavy = {'rich', 'networkx', 'scipy', 'hypothesis', 'pandas', 'matplotlib', 'llvmlite', 'numpy.ma'}; "
            "sys.exit(sorted(heavy & set(sys.modules)) or 0)"
        )
        result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=False)
        assert result.stderr == ""
        assert result.returncode == 0
