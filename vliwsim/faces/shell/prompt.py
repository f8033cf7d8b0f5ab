"""The shell at a terminal: line editing, keys, tints, Ctrl-C; and the shell in a pipe."""

from __future__ import annotations

import os
import re
import shutil
import signal
import sys
import time
from collections.abc import Callable
from pathlib import Path
from types import FrameType, TracebackType
from typing import TYPE_CHECKING, Any

import click

from vliwsim.faces.shell.commands import COMMANDS, Shell
from vliwsim.faces.shell.completion import offers
from vliwsim.faces.shell.lines import TINTS, Line, plain, tint
from vliwsim.faces.shell.view import prompt_text
from vliwsim.problems import OptionError, printable
from vliwsim.shell.faults import Unclear, at_line
from vliwsim.shell.session import Session

if TYPE_CHECKING:
    from prompt_toolkit import PromptSession
    from prompt_toolkit.completion import Completer
    from prompt_toolkit.history import History
    from prompt_toolkit.key_binding import KeyBindings
    from prompt_toolkit.lexers import Lexer

PATIENCE = 1.0
"""Seconds before a move says where it is."""
PLAIN_WIDTH = 80
"""Characters of a line where no terminal says how wide it is."""

_WORD = re.compile(r"[A-Za-z_]\w*|.", re.DOTALL)


class Interrupt:
    """While entered, Ctrl-C asks the command to stop at the next look; the third in a row ends the program.

    On a terminal it says where a long move is. Call it with the cycle: true means stop.
    """

    def __init__(self) -> None:
        self.asked = 0
        self._began = time.monotonic()
        self._before: Any = None
        self._shown = 0.0
        self._terminal = sys.stderr.isatty()

    def __enter__(self) -> Interrupt:
        try:
            self._before = signal.signal(signal.SIGINT, self._ask)
        except ValueError:  # not in the main thread: Ctrl-C does what it did
            self._before = None
        return self

    def _ask(self, number: int, frame: FrameType | None) -> None:
        self.asked += 1
        if self.asked > 2:
            raise KeyboardInterrupt

    def __call__(self, cycle: int) -> bool:
        now = time.monotonic()
        if self._terminal and now - self._began > PATIENCE and now - self._shown > 0.5:
            self._shown = now
            sys.stderr.write(f"\r  cycle {cycle:,} (Ctrl-C stops there) ")
            sys.stderr.flush()
        return self.asked > 0

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._shown:
            sys.stderr.write("\r" + " " * 60 + "\r")
            sys.stderr.flush()
        if self._before is not None:
            signal.signal(signal.SIGINT, self._before)


def no_colour() -> bool:
    """Whether the user wants none, NO_COLOR being set and not empty, or the terminal has none."""
    return bool(os.environ.get("NO_COLOR")) or os.environ.get("TERM", "dumb") == "dumb" and os.name != "nt"


def write_plain(lines: list[Line]) -> None:
    """Lines without tints."""
    for line in lines:
        click.echo(plain(line))


def open_shell(
    session: Session, *, title: str, play: str | None = None, first: Callable[[Shell], None] | None = None
) -> None:
    """Open the shell on ``session``: at a terminal, with ``play`` on a script, else on what comes through the pipe.

    ``first`` is done before the first prompt. Raises :class:`~vliwsim.problems.OptionError` for a script line that
    cannot be followed.
    """
    if play is not None:
        _scripted(session, title, first, lambda shell: shell.play(Path(play)))
    elif sys.stdin.isatty() and sys.stdout.isatty():
        _Terminal(session).run(title, first)
    else:
        _scripted(session, title, first, _piped)


def _scripted(
    session: Session, title: str, first: Callable[[Shell], None] | None, work: Callable[[Shell], None]
) -> None:
    with Interrupt() as interrupt:
        shell = Shell(session, write_plain, width=lambda: PLAIN_WIDTH, watch=interrupt)
        _begin(shell, title, first)
        try:
            work(shell)
        except Unclear as fault:
            raise OptionError(fault.problems) from None
        if interrupt.asked:
            raise KeyboardInterrupt


def _piped(shell: Shell) -> None:
    """Commands a line on standard input, each shown behind its prompt."""
    for number, text in enumerate(sys.stdin, 1):
        if shell.left or (shell.watch and shell.watch(shell.session.cycle)):
            break
        if not text.partition("#")[0].strip():
            continue
        click.echo(prompt_text(shell.session) + printable(text.strip()))
        try:
            shell.follow(text)
        except Unclear as fault:
            raise at_line(f"line {number} of the input", fault) from None


def _begin(shell: Shell, title: str, first: Callable[[Shell], None] | None) -> None:
    shell.write([[("", f"{title}. "), ("faint", "help lists the commands.")]])
    if first:
        first(shell)
    else:
        shell.show()


class _Terminal:
    """The shell with a person in front of it."""

    def __init__(self, session: Session) -> None:
        from prompt_toolkit.styles import Style

        self.session = session
        tints = {f"tint{k}": colour for k, colour in enumerate(TINTS)}
        self.style = Style.from_dict({**tints, "faint": "#808080", "wrong": "bold #ff5f5f", "word": "bold"})
        self.plain = no_colour()
        self.shell = Shell(session, self._write, width=self._width)

    @staticmethod
    def _width() -> int:
        return max(20, shutil.get_terminal_size((PLAIN_WIDTH, 24)).columns)

    def _write(self, lines: list[Line]) -> None:
        if self.plain:
            write_plain(lines)
            return
        from prompt_toolkit import print_formatted_text
        from prompt_toolkit.formatted_text import FormattedText

        for line in lines:
            shown = FormattedText([(f"class:{style}" if style else "", text) for style, text in line])
            print_formatted_text(shown, style=self.style)

    def run(self, title: str, first: Callable[[Shell], None] | None) -> None:
        """Ask and answer until the user leaves."""
        asking = self._asking()
        with Interrupt() as interrupt:
            self.shell.watch = interrupt
            _begin(self.shell, title, first)
        while not self.shell.left:
            try:
                text = asking.prompt()
            except KeyboardInterrupt:
                continue
            except EOFError:
                break
            self._answer(text)

    def _answer(self, text: str) -> None:
        with Interrupt() as interrupt:
            self.shell.watch = interrupt
            self.shell.answer(text)

    def _asking(self) -> PromptSession[str]:
        from prompt_toolkit import PromptSession
        from prompt_toolkit.output import ColorDepth
        from prompt_toolkit.shortcuts import CompleteStyle

        return PromptSession(
            message=lambda: [("class:faint", prompt_text(self.session))],
            history=command_history(),
            completer=_completer(self.session),
            complete_style=CompleteStyle.READLINE_LIKE,
            complete_while_typing=False,
            lexer=_lexer(self.session),
            style=self.style,
            key_bindings=self._keys(),
            color_depth=ColorDepth.DEPTH_1_BIT if self.plain else None,
            enable_suspend=True,
        )

    def _keys(self) -> KeyBindings:
        """Alt-→ and Alt-← go a cycle and leave what is being typed as it is."""
        from prompt_toolkit.application import run_in_terminal
        from prompt_toolkit.key_binding import KeyBindings

        bindings = KeyBindings()
        for key, command in (("right", "ahead 1"), ("left", "back 1")):

            def step(event: object, command: str = command) -> None:
                run_in_terminal(lambda: self._answer(command))

            bindings.add("escape", key)(step)
        return bindings


def state_folder() -> Path:
    """Where this user's state of programs lives."""
    if os.name == "nt":
        return Path(os.environ.get("LOCALAPPDATA") or Path.home() / "AppData" / "Local") / "vliwsim"
    given = os.environ.get("XDG_STATE_HOME", "")
    return (Path(given) if given.startswith("/") else Path.home() / ".local" / "state") / "vliwsim"


def command_history() -> History:
    """The commands of earlier runs, kept in a file; in memory only where there can be none."""
    from prompt_toolkit.history import FileHistory, InMemoryHistory

    class Kept(FileHistory):
        def store_string(self, string: str) -> None:
            try:
                super().store_string(string)
            except OSError:
                return  # a full disk is no reason to lose a session

    try:
        folder = state_folder()
        folder.mkdir(parents=True, exist_ok=True, mode=0o700)
        path = folder / "commands"
        with path.open("a"):
            pass
        os.chmod(path, 0o600)
        return Kept(str(path))
    except (OSError, RuntimeError):
        return InMemoryHistory()


def _completer(session: Session) -> Completer:
    from collections.abc import Iterator

    from prompt_toolkit.completion import Completer, Completion, PathCompleter
    from prompt_toolkit.document import Document

    class Offers(Completer):
        def get_completions(self, document: Document, complete_event: Any) -> Iterator[Completion]:
            text = document.text_before_cursor
            if text.lstrip().startswith("play "):
                rest = text.lstrip()[5:]
                yield from PathCompleter().get_completions(Document(rest, len(rest)), complete_event)
                return
            word, found = offers(session, text)
            for offer in found:
                yield Completion(offer, start_position=-len(word))

    return Offers()


def _lexer(session: Session) -> Lexer:
    """Tints of what is typed: every register in that of the value it holds."""
    from prompt_toolkit.document import Document
    from prompt_toolkit.lexers import Lexer

    class Tints(Lexer):
        def lex_document(self, document: Document) -> Callable[[int], Any]:
            def line(number: int) -> Any:
                words = _WORD.findall(document.lines[number])
                return [(_style(session, word, k == 0), word) for k, word in enumerate(words)]

            return line

    return Tints()


def _style(session: Session, word: str, first: bool) -> str:
    if first and any(name.startswith(word) for name in COMMANDS):
        return "class:word"
    number = session.names.registers.get(word)
    if number is None and word in session.names.scalars:
        number = session.names.scalars[word][0]
    return "" if number is None else f"class:{tint(number, session.moment().registers[number])}"
