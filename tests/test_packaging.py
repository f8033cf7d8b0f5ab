"""A wheel built from the tree works in an empty environment outside the checkout: cores, operations, kernels found."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import attrs
import pytest

pytestmark = pytest.mark.xdist_group("packaging")  # one worker, one wheel

ROOT = Path(__file__).resolve().parent.parent


def output(*command: str | Path, cwd: Path) -> str:
    """What a command prints; nothing of this environment reaches it."""
    clean = {"PATH": os.environ["PATH"], "HOME": str(cwd), "LANG": "C.UTF-8"}
    run = subprocess.run([*map(str, command)], cwd=cwd, env=clean, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stdout + run.stderr
    return run.stdout


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("wheel")
    pip = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--no-build-isolation", "--no-index"]
    output(*pip, "--disable-pip-version-check", "--wheel-dir", folder, ROOT, cwd=folder)
    (built,) = folder.glob("*.whl")
    return built


@pytest.fixture(scope="module")
def environment(wheel: Path) -> Path:
    """A virtual environment with the wheel, and this one's libraries but not its vliwsim."""
    folder = wheel.parent / "environment"
    output(sys.executable, "-m", "venv", "--without-pip", folder, cwd=wheel.parent)
    (packages,) = folder.glob("lib/python*/site-packages")
    # a plain path: .pth files in it, the checkout's among them, are not followed
    (packages / "libraries.pth").write_text(f"{Path(attrs.__file__).parent.parent}\n")
    pip = [sys.executable, "-m", "pip", "--python", folder, "install", "--quiet", "--no-deps", "--no-index"]
    output(*pip, "--disable-pip-version-check", "--ignore-installed", wheel, cwd=wheel.parent)
    return folder


def test_the_wheel_holds_the_data(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    for folder in ("isa", "programs"):
        for path in (ROOT / folder).rglob("*"):
            if path.is_file() and "__pycache__" not in path.parts:
                assert f"vliwsim/_data/{path.relative_to(ROOT)}" in names
    assert "vliwsim/_data/isa/cores/pair7.toml" in names
    assert not [name for name in names if "__pycache__" in name or name.endswith(".pyc")]
    assert {name.split("/")[0].split("-")[0] for name in names} == {"vliwsim"}


def test_it_is_the_wheel_that_runs(environment: Path) -> None:
    program = (
        "import vliwsim.description.places as p; print(p.__file__); print(p.isa_folder()); print(p.programs_folder())"
    )
    for line in output(environment / "bin" / "python", "-c", program, cwd=environment).splitlines():
        assert Path(line).is_relative_to(environment.resolve()), line


def test_commands_outside_the_checkout(environment: Path) -> None:
    command = environment / "bin" / "vliwsim"
    for name in ("pair7", "lone2", "lone4", "ring16", "float3"):
        assert name in output(command, "cores", cwd=environment)
    assert "mul.half" in output(command, "ops", "mul.half", cwd=environment)
    assert "64 bits" in output(command, "layout", "--core", "pair7", cwd=environment)


def test_a_shipped_kernel_outside_the_checkout(environment: Path) -> None:
    told = output(environment / "bin" / "vliwsim", "run", "energy", cwd=environment)
    assert "energy on pair7" in told
    assert not (environment / "programs").exists()
