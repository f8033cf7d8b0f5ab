"""``run --frames`` as a person sees it: the report, the files, Ctrl-C."""

from __future__ import annotations

import json
import os
import pty
import select
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from tests.kernel.sources import SUM, write
from tests.robustness.workshop import Result, call

RANDOM = np.random.default_rng(6)


@pytest.fixture(scope="module", autouse=True)
def own_folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))
        yield


def run(*words: object) -> Result:
    result = call(["run", *map(str, words)])
    assert "Traceback" not in result.out + result.err
    return result


def test_an_hour_in_small(tmp_path: Path) -> None:
    """A filter with state over a recording: what is kept equals the reference over the whole of it."""
    x = RANDOM.integers(-(2**29), 2**29, 7003).astype(np.int32)
    np.save(tmp_path / "x.npy", x)
    y, state = tmp_path / "y.npy", tmp_path / "state.npy"
    zeros = "state=" + ",".join("0" * 8)
    words = ["sections", "--frames", f"x={tmp_path / 'x.npy'}", "--give", "n=100", "--give", zeros]
    result = run(*words, "--save", f"y={y}", "--save", f"state={state}", "--engine", "native")
    assert result.status == 0
    assert result.out.splitlines() == [
        "sections on pair7, n = 100, 70 frames: right, legal, on budget.",
        "",
        "  57680 cycles = 57680 bundles + 0 stalls + 0 drain      (budget 57680)",
        *result.out.splitlines()[3:-3],
        "  Every frame takes 824 cycles, budget 824.",
        "",
        "  note     3 of 7003 samples of x fill no frame: left out (--pad)",
    ]
    from vliwsim import load_kernel

    reference = load_kernel("sections").reference
    assert reference is not None
    whole = reference.function(x[:7000], np.zeros(8, np.int32))
    np.testing.assert_array_equal(np.load(y), whole["y"])
    np.testing.assert_array_equal(np.load(state)[-1], whole["state"])
    assert np.load(y).dtype == np.int32
    before = y.read_bytes()
    assert run(*words, "--save", f"y={y}").status == 2
    assert run(*words, "--save", f"y={y}", "--replace").status == 0
    assert y.read_bytes() == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["state.npy", "x.npy", "y.npy"]


def test_the_object_for_scripts(tmp_path: Path) -> None:
    np.save(tmp_path / "x.npy", np.arange(100, dtype=np.int16))
    result = run("energy", "--frames", f"x={tmp_path / 'x.npy'}", "--give", "n=8", "--hop", "n // 2", "--json")
    found = json.loads(result.out)
    assert (found["kernel"], found["cycles"], found["matches"], found["within_budget"]) == ("energy", 264, True, True)
    assert found["outputs"] == {"total": {"matches": True, "first_difference": None}}
    assert found["frames"]["cycles"] == {"minimum": 11, "median": 11, "maximum": 11}
    signal = {"samples": 100, "length": 8, "hop": 4, "lead": 0, "left_out": 0, "zeros_behind": 0}
    assert found["frames"]["signals"] == {"x": signal}
    assert (found["frames"]["wanted"], found["frames"]["done"]) == (24, 24)


def test_a_wrong_frame_and_one_over_budget(tmp_path: Path) -> None:
    source = SUM.replace("5 * n + 2", "5 * n + 2 - (x[0] == 3)")
    path = write(tmp_path, source, "def total(x):\n    return int(x.astype(int).sum()) + (x[0] == 7)\n")
    x = np.zeros(400, np.int16)
    x[[36, 80, 120]] = 7, 3, 7
    np.save(tmp_path / "x.npy", x)
    result = run(path, "--frames", f"x={tmp_path / 'x.npy'}", "--give", "n=4")
    assert result.status == 1
    assert result.out.startswith("total on pair7, n = 4, 100 frames: 2 wrong, legal, 1 over budget.\n")
    assert "\n  frame 9  sum  is 7, expected 8\n" in result.out
    assert "\n  Every frame takes 22 cycles, budgets 21 to 22.\n" in result.out
    assert "\n  Frame 20 is the first over budget: 22 cycles of 21.\n" in result.out


ENDLESS = """
kernel  endless
core    pair7
given   x : i16[4]   at g1
changes k : i32      in g2
start:
@0 lh g5, [g1]
@4 add g2, g2, g5
wait:
@0 count g5, wait
@1 add g2, g2, 0
@4 idle
finish:
@0 halt
"""


@pytest.mark.parametrize("long", [False, True])
def test_ctrl_c_ends_it_with_the_account_of_whole_frames(tmp_path: Path, long: bool) -> None:
    """Between frames, and in the midst of one."""
    path = write(tmp_path, ENDLESS, "def endless(x, k):\n    return 0\n")
    if long:
        x = np.zeros((3, 4), np.int32)
        x[1:] = 32767
        path.write_text(ENDLESS.replace("lh g5, [g1]", "lw g5, [g1]").replace("i16", "i32"))
        x[1, 0] = 2**31 - 1
        np.save(tmp_path / "x.npy", x)
    else:
        np.lib.format.open_memmap(tmp_path / "x.npy", "w+", np.int16, (200_000_000, 4)).flush()  # a hole on the disk
    words = ["--frames", f"x={tmp_path / 'x.npy'}", "--give", "k=0", "--no-reference", "--limit", "100000000000"]
    command = [sys.executable, "-m", "vliwsim", "run", str(path), *words, "--engine", "native"]
    status, out, seen = interrupted(command)
    assert status == 130, seen
    assert b": stopped after " in out.splitlines()[0]
    assert b" cycles = " in out
    assert b"endless on pair7: frame " in seen
    assert b"Traceback" not in seen


def interrupted(command: list[str]) -> tuple[int, bytes, bytes]:
    """Run it on a terminal and send Ctrl-C once its progress is seen: status, output, what the terminal saw."""
    main, other = pty.openpty()
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=other, env={**os.environ, "TERM": "xterm"})
    os.close(other)
    seen, ends = b"", time.monotonic() + 60
    while b"a second" not in seen and time.monotonic() < ends:
        if select.select([main], [], [], 0.5)[0]:
            seen += os.read(main, 4096)
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=60)
    os.close(main)
    return process.returncode, out, seen


def test_ctrl_c_ends_many_cases(tmp_path: Path) -> None:
    """In Python it is the usual exception, once what runs has been stopped."""
    path = write(tmp_path, ENDLESS.replace("changes", "given  "), "")
    program = (
        "import numpy as np, vliwsim\n"
        f"kernel = vliwsim.load_kernel({str(path)!r})\n"
        "x = np.full((64, 4), 32767, np.int16)\n"
        "begun = lambda done: print('begun', flush=True)\n"
        "try:\n"
        "    while True: kernel.run_many({'x': x, 'k': 0}, progress=begun)\n"
        "except KeyboardInterrupt:\n"
        "    print('ended')\n"
    )
    process = subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdout is not None
    assert process.stdout.readline() == b"begun\n"
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert (process.returncode, out.splitlines()[-1], err) == (0, b"ended", b"")
