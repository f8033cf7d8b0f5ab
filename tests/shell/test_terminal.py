"""The shell in a real pseudo-terminal, with a screen: keys, Tab, Ctrl-C, Ctrl-D, resize, history, colours."""

from __future__ import annotations

import io
import os
import re
import sys
import time
from collections.abc import Callable
from pathlib import Path

import attrs
import pytest

from vliwsim.faces.main import status_of

pytest.importorskip("termios")
pexpect = pytest.importorskip("pexpect")
pyte = pytest.importorskip("pyte")

ROOT = Path(__file__).resolve().parent.parent.parent
EARLY = "tests/shell/early_read"
WAIT = 30


class Terminal:
    """A shell in a terminal of 80 × 24, and its screen."""

    def __init__(self, home: Path, *arguments: str, columns: int = 80, rows: int = 24, **environment: str) -> None:
        self.screen = pyte.HistoryScreen(columns, rows, history=2000)
        self.stream = pyte.ByteStream(self.screen)
        self.bytes = b""
        clean = {k: v for k, v in os.environ.items() if k not in ("NO_COLOR", "PROMPT_TOOLKIT_COLOR_DEPTH")}
        self.child = pexpect.spawn(
            sys.executable,
            ["-m", "vliwsim", *arguments],
            cwd=str(ROOT),
            env={**clean, "XDG_STATE_HOME": str(home), "TERM": "xterm-256color", "LANG": "C.UTF-8", **environment},
            dimensions=(rows, columns),
            timeout=WAIT,
        )

    def read(self, seconds: float = 0.15) -> None:
        """Take what the shell writes until it has been quiet for a while; answer what it asks of the terminal."""
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            try:
                data = self.child.read_nonblocking(65536, timeout=0.03)
            except pexpect.TIMEOUT:
                continue
            except pexpect.EOF:
                return
            self.bytes += data
            self.stream.feed(data)
            for _ in range(data.count(b"\x1b[6n")):
                self.child.send(f"\x1b[{self.screen.cursor.y + 1};{self.screen.cursor.x + 1}R")
            end = time.monotonic() + seconds

    def wait(self, pattern: str) -> str:
        """Wait until the pattern stands on the screen; the screen."""
        end = time.monotonic() + WAIT
        while time.monotonic() < end:
            self.read(0.03)
            if re.search(pattern, self.text):
                return self.text
        raise AssertionError(f"no {pattern!r} on this screen:\n{self.text}")

    @property
    def text(self) -> str:
        return "\n".join(line.rstrip() for line in self.screen.display).rstrip()

    def type(self, text: str, then: str) -> str:
        self.child.send(text)
        return self.wait(then)

    def line(self, text: str, then: str) -> str:
        return self.type(text + "\r", then)

    def close(self) -> None:
        self.child.close(force=True)


def test_a_dialogue(tmp_path: Path) -> None:
    """Keys, stops, judging a planted early read and asking why, what-if, a resize, and the history of the next run."""
    terminal = Terminal(tmp_path, "debug", EARLY, "--give", "x=5,-7,11,2,30,-1")
    terminal.wait(r"0 · start@0 \?")
    screen = terminal.line("ahead 4", r"4 · start@4 \?$")
    assert "landed  sample = 5 from lh, line 14" in screen
    terminal.type("\x1b[1;3C", r"5 · start@5 \?$")  # Alt-→
    terminal.type("\x1b[1;3D", r"4 · start@4 \?$")  # Alt-←
    terminal.type("tell nonsense\x03", r"\?$")  # Ctrl-C clears the line
    terminal.line("alarm stored y[1]", r"alarm 1: stored y\[1\]")
    assert "means nothing" not in terminal.text
    screen = terminal.line("at end", r"14 · loop@6 · pass 1 \?$")
    assert "  alarm 1: stored y[1]" in screen
    terminal.line("silence 1", "silent")
    terminal.line("at end", r"45 · end \?$")
    screen = terminal.line("judge", "why y.1. says")
    assert "y[1] is 15, the reference says -21" in screen
    terminal.line("at wrong y", r"14 · loop@6 · pass 1 \?$")
    screen = terminal.line("why product", "2 operations in all, back to x.0.")
    assert "product = 15, at start@4, cycle 4 (line 15): mul product, sample, 3" in screen
    terminal.line("suppose product = -21", r"14 · loop@6 · pass 1 · supposing \?$")
    terminal.line("forget", r"14 · loop@6 · pass 1 \?$")
    terminal.line("a", "a could be ahead or again or at or alarm or alarms")

    terminal.type("ba\t", r"\? back$")  # Tab
    terminal.type(" 7\r", r"7 · start@7 \?$")
    assert colours(terminal.bytes)
    row = max(k for k, line in enumerate(terminal.screen.display) if "landed  product = 15" in line)
    landed = terminal.screen.buffer[row][10].fg
    reader = terminal.screen.buffer[row + 1][terminal.screen.display[row + 1].index("product")].fg
    assert landed == reader != "default"
    terminal.type("seek back landed sam\t", r"seek back landed sample$")
    terminal.type("\r", r"4 · start@4 \?$")
    screen = terminal.type("al\t\t", "alarms")
    assert re.search(r"alarm +alarms", screen)
    terminal.type("\x03", r"\?$")

    terminal.child.setwinsize(24, 40)
    terminal.screen.resize(24, 40)
    terminal.read(0.3)
    screen = terminal.line("why sample", "1 operation in all")
    assert "sample = 5, at start@0, cycle 0 (line…"[:37] in screen
    assert all(len(line) <= 40 for line in screen.splitlines())
    terminal.line("ahead 2", r"6 · start@6 \?$")
    terminal.child.send("\x04")  # Ctrl-D
    terminal.child.expect(pexpect.EOF)
    terminal.child.wait()
    assert terminal.child.exitstatus == 0

    assert "why sample" in (tmp_path / "vliwsim" / "commands").read_text()
    again = Terminal(tmp_path, "debug", EARLY, "--give", "x=5,-7,11,2", NO_COLOR="1")
    again.wait(r"0 · start@0 \?")
    again.type("\x1b[A\x1b[A", r"\? why sample$")
    again.type("\x1b[B\r", r"2 · start@2 \?$")
    assert not colours(again.bytes)
    again.line("leave", "")
    again.child.expect(pexpect.EOF)
    again.close()


def test_control_c_stops_a_long_search_where_it_is(tmp_path: Path) -> None:
    terminal = Terminal(tmp_path, "debug", "tests/shell/long_loop.vliw", "--give", "trips=60000000", "--no-reference")
    terminal.wait(r"0 · start@0 \?")
    terminal.child.send("seek g5 == 77\r")
    terminal.wait(r"cycle [\d,]+ \(Ctrl-C stops there\)")
    screen = terminal.type("\x03", r"\d+ · loop@0 · pass \d+ \?$")
    found = re.search(r"stopped in cycle (\d+)", screen)
    assert found
    assert f"{found[1]} · loop@0" in screen
    terminal.line("back 2", rf"{int(found[1]) - 2} · loop@0")
    terminal.child.send("at end\r")
    terminal.wait(r"Ctrl-C stops there")
    terminal.type("\x03", r"stopped in cycle \d+")
    terminal.close()


def colours(data: bytes) -> list[bytes]:
    """Escape sequences that set a colour."""
    return [m for m in re.findall(rb"\x1b\[([\d;]*)m", data) if re.search(rb"(^|;)(3[0-8]|9[0-7])(;|$)", m)]


def test_a_dumb_terminal_and_a_home_that_cannot_be_written_will_do(tmp_path: Path) -> None:
    (tmp_path / "vliwsim").write_text("in the way")
    made = Terminal(tmp_path, "debug", EARLY, "--give", "x=5,-7,11,2", TERM="dumb")
    made.wait(r"0 · start@0 \?")
    made.line("ahead 7", r"7 · start@7 \?$")
    assert not colours(made.bytes)
    assert b"\x1b[0m" not in made.bytes
    made.close()


def test_run_opens_the_shell_where_it_failed(tmp_path: Path) -> None:
    made = Terminal(tmp_path, "run", EARLY, "--give", "x=5,-7,11,2", "--debug")
    screen = made.wait(r"14 · loop@6 · pass 1 \?$")
    assert "y[1] is 15, the reference says -21" in screen
    made.line("back", r"13 · loop@5 · pass 1 \?$")
    made.line("leave", "")
    made.child.expect(pexpect.EOF)
    made.child.wait()
    assert made.child.exitstatus == 1


# ---------------------------------------------------------------------------------------------------- pipes and scripts


@attrs.frozen
class Done:
    returncode: int
    stdout: str
    stderr: str


Vliwsim = Callable[..., Done]


@pytest.fixture
def vliwsim(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Callable[..., Done]:
    """The command line in this process, with a pipe for its input and output."""
    monkeypatch.chdir(ROOT)

    def run(*arguments: str, given: str = "") -> Done:
        monkeypatch.setattr(sys, "stdin", io.StringIO(given))
        status = status_of(arguments)
        out, error = capsys.readouterr()
        return Done(status, out, error)

    return run


DIALOGUE = """early_read on pair7, n = 6, case given. help lists the commands.
  landed  nothing
  issues  lh sample, [g10 then +2]
  out     nothing
0 · start@0 ? seek differs
  landed  nothing
  issues  sw product, [g13 then +4]
  out     in 1: product
14 · loop@6 · pass 1 ? why product
  product = 15, at start@4, cycle 4 (line 15): mul product, sample, 3
    sample = 5, at start@0, cycle 0 (line 14): lh sample, [g10 then +2]
      x[0] = 5, as given
  2 operations in all, back to x[0].
14 · loop@6 · pass 1 ? flight     # the right one is a beat late
  in 1 beat   product = -21  sent loop@4 2 beats ago, line 21  mul product, sam…
"""

SCRIPT = """# where it goes wrong, and why
seek differs

why product
flight     # the right one is a beat late
"""


def test_a_script_is_plain_text_and_always_the_same(tmp_path: Path, vliwsim: Vliwsim) -> None:
    path = tmp_path / "steps.txt"
    path.write_text(SCRIPT)
    runs = [vliwsim("debug", EARLY, "--give", "x=5,-7,11,2,30,-1", "--play", str(path)) for _ in range(2)]
    assert runs[0].stdout == runs[1].stdout
    assert runs[0].stderr == ""
    assert runs[0].returncode == 0
    assert runs[0].stdout == DIALOGUE


def test_a_pipe_is_a_script(tmp_path: Path, vliwsim: Vliwsim) -> None:
    done = vliwsim("debug", EARLY, "--give", "x=5,-7,11,2,30,-1", given=SCRIPT)
    assert "why product\n  product = 15" in done.stdout
    assert "\x1b" not in done.stdout
    assert done.returncode == 0


def test_a_broken_line_stops_a_script_with_its_number(tmp_path: Path, vliwsim: Vliwsim) -> None:
    path = tmp_path / "steps.txt"
    path.write_text("ahead\n\nahead 1 1\nback\n")
    done = vliwsim("debug", EARLY, "--give", "x=5,-7,11,2,30,-1", "--play", str(path))
    assert done.returncode == 2
    assert f"  found    {path}:3: 1 1\n  allowed  a number of cycles\n" in done.stderr
    assert done.stdout.rstrip().endswith("ahead 1 1")
    done = vliwsim("debug", EARLY, "--give", "x=5,-7,11,2,30,-1", given="ahead\njump\n")
    assert done.returncode == 2
    assert "line 2 of the input: no command jump" in done.stderr


def test_scripts_that_call_themselves_or_leave_their_folder_are_refused(tmp_path: Path, vliwsim: Vliwsim) -> None:
    inner = tmp_path / "inner"
    inner.mkdir()
    (inner / "one.txt").write_text("ahead\nplay two.txt\n")
    (inner / "two.txt").write_text("ahead\nplay one.txt\n")
    (inner / "out.txt").write_text("play ../outside.txt\n")
    (tmp_path / "outside.txt").write_text("ahead\n")
    given = ("--give", "x=5,-7,11,2,30,-1")
    done = vliwsim("debug", EARLY, *given, "--play", str(inner / "one.txt"))
    assert done.returncode == 2
    assert "plays itself" in done.stderr
    assert "one.txt:2: " in done.stderr
    assert len(done.stderr.splitlines()) <= 4
    done = vliwsim("debug", EARLY, *given, "--play", str(inner / "out.txt"))
    assert done.returncode == 2
    assert "leads out of" in done.stderr


@pytest.mark.parametrize("name", ["folder", "binary", "absent", "large"])
def test_files_that_are_no_scripts(tmp_path: Path, vliwsim: Vliwsim, name: str) -> None:
    path = tmp_path / name
    if name == "folder":
        path.mkdir()
    elif name == "binary":
        path.write_bytes(b"\xff\xfe\x00ahead")
    elif name == "large":
        path.write_text("# much\n" * 200_000)
    done = vliwsim("debug", EARLY, "--give", "x=5,-7,11,2,30,-1", "--play", str(path))
    assert done.returncode == 2
    assert "script-file" in done.stderr
    assert "Traceback" not in done.stderr
