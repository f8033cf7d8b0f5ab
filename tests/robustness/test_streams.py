"""What surrounds the process is bad: its output, its locale, the bytes of its arguments."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from tests.kernel.sources import SUM

ROOT = Path(__file__).parents[2]


def shell(line: str, folder: Path, **settings: str) -> subprocess.CompletedProcess[bytes]:
    """``line`` in bash, in ``folder``, with VLIWSIM the command."""
    command = f'vliwsim() {{ "{sys.executable}" -m vliwsim "$@"; }}\n{line}'
    environment = {**os.environ, "PYTHONPATH": str(ROOT), **settings}
    return subprocess.run(
        ["bash", "-c", command], capture_output=True, timeout=60, check=False, cwd=folder, env=environment
    )


@pytest.mark.parametrize("encoding", ["ascii", "latin-1", "utf-8", "cp1252"])
@pytest.mark.parametrize("line", ["vliwsim ops mul.half", "vliwsim layout", "vliwsim rum", "vliwsim ops $'\\u00d7'"])
def test_any_encoding_of_the_terminal(line: str, encoding: str, tmp_path: Path) -> None:
    done = shell(line, tmp_path, PYTHONIOENCODING=encoding)
    assert b"Traceback" not in done.stderr
    assert done.returncode in (0, 2)
    assert done.stdout or done.stderr


@pytest.mark.parametrize("line", ["vliwsim ops", "vliwsim run energy --no-reference", "vliwsim cores"])
def test_a_full_disk(line: str, tmp_path: Path) -> None:
    done = shell(f"{line} > /dev/full", tmp_path)
    assert b"Traceback" not in done.stderr
    assert b"output-file" in done.stderr
    assert done.returncode == 2


@pytest.mark.parametrize(
    "line", ["vliwsim ops >&-", "vliwsim rum 2>&-", "vliwsim rum >&- 2>&-", "vliwsim run energy <&-"]
)
def test_closed_streams(line: str, tmp_path: Path) -> None:
    done = shell(line, tmp_path)
    assert b"Traceback" not in done.stderr
    assert done.returncode == (2 if "rum" in line else 0)


def test_names_that_are_no_text(tmp_path: Path) -> None:
    """File names are bytes: a kernel of such a name works, and is spoken of, whatever the stream takes."""
    name = os.fsencode(tmp_path) + b"/\xff.vliw"
    with open(name, "wb") as file:
        file.write(SUM.encode())
    for line in (
        "vliwsim run $'\\xff.vliw' --give x=1,2 --no-reference",
        "vliwsim assemble $'\\xff.vliw' -o $'\\xfe.image'",
        "vliwsim run $'\\xff.vliw' --give x=1,2 --json --no-reference",
        "vliwsim run $'\\xff.vliw' --give x=$'\\xff'",
        "vliwsim run $'\\xfd.vliw'",
        "vliwsim $'\\xfd'",
    ):
        done = shell(line, tmp_path)
        assert b"Traceback" not in done.stderr
        assert done.returncode == (2 if b"(error)" in done.stderr else 0)


def test_the_working_folder_is_gone(tmp_path: Path) -> None:
    done = shell("mkdir gone; cd gone; rmdir ../gone; vliwsim run energy --no-reference; vliwsim run x.vliw", tmp_path)
    assert b"Traceback" not in done.stderr
    assert done.returncode == 2
