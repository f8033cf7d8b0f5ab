"""The pytest plugin, run by pytest in pytest, in a process of its own, under xdist, and from an installed wheel."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import attrs
import pytest

# pytester forgets what an inner pytest imports; what is loaded before stays, and NumPy cannot be loaded twice
import vliwsim.check.judge
import vliwsim.check.words
import vliwsim.kernel.equality
import vliwsim.program.assembler
import vliwsim.program.encoding.decode
import vliwsim.program.encoding.encode
import vliwsim.regression.judge  # noqa: F401
from tests.kernel.sources import DOUBLE, REFERENCES, SUM

ROOT = Path(__file__).resolve().parents[2]
pytest_plugins = ["pytester"]

WRONG = DOUBLE.replace("add g3, g2, g2", "add g3, g2, 1")
FEW = "def cases():\n    yield 'ramp', {'x': [3, 5, 7]}\n    yield 'one', {'x': [9]}\n"


@pytest.fixture
def shelf(pytester: pytest.Pytester) -> pytest.Pytester:
    """A project with a kernel, its reference and two cases; nothing of this suite's configuration."""
    pytester.makefile(".vliw", double=DOUBLE)
    pytester.makepyfile(reference=REFERENCES["double"] + FEW)
    return pytester


def run(pytester: pytest.Pytester, *arguments: str) -> pytest.RunResult:
    """In this process; the plugin is loaded by name where the package was installed before it had one."""
    return pytester.runpytest_inprocess("-p", "no:cacheprovider", *PLUGIN, *arguments)


def _installed() -> bool:
    from importlib.metadata import entry_points

    return any(point.name == "vliwsim" for point in entry_points(group="pytest11"))


PLUGIN = [] if _installed() else ["-p", "vliwsim.faces.pytest_plugin"]


def test_one_test_a_claim(shelf: pytest.Pytester) -> None:
    result = run(shelf, "--collect-only", "-q")
    assert [line for line in result.outlines if "::" in line] == [
        "double.vliw::legal",
        "double.vliw::case ramp",
        "double.vliw::case one",
    ]
    run(shelf).assert_outcomes(passed=3)


def test_goldens_budget_and_cores_are_claims_too(pytester: pytest.Pytester) -> None:
    from vliwsim.faces.main import status_of

    text = SUM.replace("core    pair7", "core    pair7, lone4").replace("@4 add", "@load add")
    pytester.makefile(".vliw", total=text.replace("@1 count", "@load + 1 - branch count").replace("5 * n", "9 * n"))
    pytester.makepyfile(reference=REFERENCES["total"] + FEW)
    assert status_of(["golden", "total.vliw", "--date", "2030-01-31", "--case", "one"]) == 0
    result = run(pytester, "-v")
    assert result.ret == 0
    names = [line.split("::")[1].split(" PASSED")[0] for line in result.outlines if "PASSED" in line]
    assert names == [
        *("legal on pair7", "case ramp on pair7", "case one on pair7", "golden one on pair7", "budget on pair7"),
        *("legal on lone4", "case ramp on lone4", "case one on lone4", "budget on lone4"),
    ]


def test_a_failure_leads_to_the_line(shelf: pytest.Pytester) -> None:
    shelf.makefile(".vliw", double=WRONG)
    result = run(shelf)
    result.assert_outcomes(passed=1, failed=2)
    result.stdout.fnmatch_lines(
        [
            "*case ramp: double on pair7, n = 3: wrong, legal*",
            "*y?0? is 4, expected 6; 3 of 3 elements differ*",
            "*made     stored by line 13, sh at loop@5, cycle 6*",
            "*behind   line 13 sh * line 12 add * line 10 lh *",
            "*look     vliwsim debug double.vliw --case ramp *",
        ]
    )
    assert "Traceback" not in result.stdout.str()


def test_what_does_not_assemble_or_load_is_a_failure(shelf: pytest.Pytester) -> None:
    shelf.makefile(".vliw", double=DOUBLE.replace("lh g2", "lhh g2"))
    result = run(shelf)
    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(["*unknown-operation*", "*double.vliw:10:4*"])
    shelf.makefile(".vliw", double=DOUBLE)
    shelf.makepyfile(reference="def double(x):\n    return x *\n")
    result = run(shelf)
    assert result.parseoutcomes()["failed"] == 1
    assert result.parseoutcomes()["passed"] > 5  # generated cases, legal as far as one can see
    assert "SyntaxError" in result.stdout.str()


def test_settings(shelf: pytest.Pytester) -> None:
    shelf.makepyfile(reference="def double(x):\n    while True: pass\ndef cases():\n    yield 'one', {'x': [1]}\n")
    shelf.makeini("[pytest]\nvliwsim_time_limit = 0.3\n")
    result = run(shelf)
    result.assert_outcomes(passed=1, failed=1)
    assert "no answer within 0.3 s" in result.stdout.str()
    shelf.makeini("[pytest]\nvliwsim_skip = double*\n")
    assert run(shelf).ret == pytest.ExitCode.NO_TESTS_COLLECTED
    shelf.makeini("[pytest]\nvliwsim_time_limit = soon\n")
    assert "vliwsim_time_limit = soon" in "\n".join(run(shelf).outlines + run(shelf).errlines)
    shelf.makeini("[pytest]\n")
    assert run(shelf, "--no-kernels").ret == pytest.ExitCode.NO_TESTS_COLLECTED


OWN = """
import numpy as np

def test_right(vliwsim_kernel):
    run = vliwsim_kernel("double.vliw").run(x=[1, 2, 3])
    assert run == {"y": [2, 4, 6]}
    assert run == np.array([2, 4, 6])
    assert np.array([2, 4, 6]) == run

def test_wrong(vliwsim_kernel):
    kernel = vliwsim_kernel("double.vliw", core="pair7", changes={"interrupt.service": 3})
    assert kernel.run(x=range(40)) == {"y": np.where(np.arange(40) == 17, 3, 2 * np.arange(40))}

def test_wrong_case(vliwsim_kernel):
    assert vliwsim_kernel("double.vliw").run(case="ramp") == [6, 10, 15]

def test_shape(vliwsim_kernel):
    assert vliwsim_kernel("double.vliw").run(x=[1, 2, 3]) == {"y": [2, 4], "z": 1}
"""


def test_kernels_in_tests_of_ones_own(shelf: pytest.Pytester) -> None:
    shelf.makepyfile(test_own=OWN)
    result = run(shelf, "test_own.py")
    result.assert_outcomes(passed=1, failed=3)
    result.stdout.fnmatch_lines(
        [
            "*double on pair7, n = 40: not what is expected*",
            "*y: 1 of 40 elements differ (2.5 %)*",
            "*first    y?17? is 34, expected 3*",
            "*largest  y?17? is 34, expected 3: 31 apart*",
            "*got      y?13:21? = ?26 28 30 32 34 36 38 40?*",
            "*stored by line 13, sh at loop@5*",
        ]
    )
    result.stdout.fnmatch_lines(["*y?2? is 14, expected 15*", "*vliwsim debug double.vliw --case ramp*"])
    result.stdout.fnmatch_lines(["*z: expected, but the run gives y*", "*y: shape (3,), expected (2,)*"])


def test_under_xdist(shelf: pytest.Pytester) -> None:
    shelf.makefile(".vliw", double=WRONG)
    result = shelf.runpytest_subprocess("-n", "2", *PLUGIN)
    result.assert_outcomes(passed=1, failed=2)
    result.stdout.fnmatch_lines(["*stored by line 13, sh at loop@5, cycle 6*"])


@pytest.mark.long
@pytest.mark.xdist_group("packaging")
def test_from_a_project_that_only_installs_the_wheel(tmp_path: Path) -> None:
    """A wheel in an environment of its own; the project is a kernel, its reference, and nothing else."""
    clean = {"PATH": os.environ["PATH"], "HOME": str(tmp_path), "LANG": "C.UTF-8"}

    def done(*command: object, status: int = 0, where: Path = tmp_path) -> str:
        text = [str(part) for part in command]
        result = subprocess.run(text, cwd=where, env=clean, capture_output=True, text=True, check=False)
        assert result.returncode == status, result.stdout + result.stderr
        return result.stdout

    pip = [sys.executable, "-m", "pip"]
    offline = ["--quiet", "--no-deps", "--no-index", "--disable-pip-version-check"]
    done(*pip, "wheel", *offline, "--no-build-isolation", "--wheel-dir", tmp_path, ROOT)
    (wheel,) = tmp_path.glob("*.whl")
    done(sys.executable, "-m", "venv", "--without-pip", tmp_path / "environment")
    (packages,) = (tmp_path / "environment").glob("lib/python*/site-packages")
    (packages / "libraries.pth").write_text(f"{Path(attrs.__file__).parent.parent}\n")
    done(*pip, "--python", tmp_path / "environment", "install", *offline, "--ignore-installed", wheel)
    project = tmp_path / "project"
    project.mkdir()
    (project / "double.vliw").write_text(DOUBLE.strip())
    (project / "reference.py").write_text(REFERENCES["double"] + FEW)
    python = tmp_path / "environment" / "bin" / "python"
    assert "3 passed" in done(python, "-m", "pytest", "-p", "no:cacheprovider", where=project)
    (project / "double.vliw").write_text(WRONG.strip())
    told = done(python, "-m", "pytest", "-n", "2", "-p", "no:cacheprovider", status=1, where=project)
    assert "stored by line 13, sh at loop@5, cycle 6" in told
