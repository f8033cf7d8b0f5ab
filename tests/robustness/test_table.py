"""The table of malformed inputs: each is refused by name, with its status, and leaves every file as it was."""

from __future__ import annotations

import os
import subprocess
import sys
from collections import Counter
from pathlib import Path

import pytest

from tests.kernel.sources import DOUBLE, REFERENCES, SUM
from tests.robustness import (
    rows_arrays,
    rows_commands,
    rows_cores,
    rows_frames,
    rows_images,
    rows_operations,
    rows_options,
    rows_references,
    rows_sources,
)
from tests.robustness.workshop import Result, Row, call, contents, write

ROOMS = {
    "source": rows_sources.ROWS,
    "core": rows_cores.ROWS,
    "operations": rows_operations.ROWS,
    "image": rows_images.ROWS,
    "array": rows_arrays.ROWS,
    "reference": rows_references.ROWS,
    "option": rows_options.ROWS,
    "command": rows_commands.ROWS,
    "frames": rows_frames.ROWS,
}
CASES = [pytest.param(row, id=f"{room}: {row.title}") for room, rows in ROOMS.items() for row in rows]

BASE = {
    "total/total.vliw": SUM,
    "total/reference.py": REFERENCES["total"],
    "double/double.vliw": DOUBLE,
    "double/reference.py": REFERENCES["double"],
}
"""Good kernels that the rows may run."""

REST = ["more-problems"]
"""Problems that say how many more there are, and allow nothing."""

SECONDS = 60
"""After which a process hangs, on a machine with other work."""


def process(arguments: list[str], **more: object) -> Result:
    """The command in a process of its own, run in the working folder."""
    command = [sys.executable, "-m", "vliwsim", *arguments]
    path = os.pathsep.join([str(Path(__file__).parents[2]), os.environ.get("PYTHONPATH", "")])
    settings = {**os.environ, "PYTHONPATH": path}
    done = subprocess.run(command, capture_output=True, text=True, timeout=SECONDS, check=False, env=settings, **more)  # type: ignore[call-overload]
    return Result(done.returncode, done.stdout, done.stderr)


@pytest.mark.parametrize("row", CASES)
def test_row(row: Row, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write(tmp_path, {**BASE, **row.files})
    before = contents(tmp_path)
    result = process(row.arguments) if row.process else call(row.arguments)
    spoken = result.out + result.err
    assert "Traceback" not in spoken
    assert (result.names, result.status) == (sorted(row.names), row.status), spoken
    for said in result.said:
        assert said.found
        assert said.allowed or said.name in REST
    assert row.says in spoken
    assert not row.remedy or any(row.remedy in said.remedy for said in result.said)
    assert not [c for c in spoken if not c.isprintable() and c != "\n"]
    after = contents(tmp_path)
    assert {n: c for n, c in after.items() if n not in row.changed} == {
        n: c for n, c in before.items() if n not in row.changed
    }


def test_the_table_is_large_and_every_row_its_own() -> None:
    """No title twice in a room, no command and files twice at all."""
    assert sum(map(len, ROOMS.values())) >= 120
    for rows in ROOMS.values():
        assert max(Counter(row.title for row in rows).values()) == 1
    every = [(row.command, {n: c for n, c in row.files.items()}) for rows in ROOMS.values() for row in rows]
    assert not [one for k, one in enumerate(every) if one in every[:k]]


SAMPLE = [rows[k] for rows in ROOMS.values() for k in (len(rows) // 3, -1)]


@pytest.mark.parametrize("row", [pytest.param(row, id=row.title) for row in SAMPLE])
def test_a_process_says_the_same(row: Row, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """What is seen in this process is what a shell sees: same status, same text, on the same streams."""
    monkeypatch.chdir(tmp_path)
    write(tmp_path, {**BASE, **row.files})
    here = call(row.arguments)
    write(tmp_path, row.files)
    assert here == process(row.arguments)
