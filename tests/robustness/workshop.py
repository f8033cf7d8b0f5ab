"""A folder full of damaged files, the command run on them, and what it says taken apart.

The table (rows_*.py, test_table.py) and the fuzzer (fuzz.py) share this: a run must end with a status and problems in
our form, and leave every file in the folder as it was.
"""

from __future__ import annotations

import contextlib
import io
import os
import re
import shlex
import stat
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path

import attrs
import numpy as np

from vliwsim.faces.main import status_of

Content = str | bytes | Callable[[Path], None]
"""A file's text, its bytes, or what makes it at a path."""

HEAD = re.compile(
    r"(?:(?P<place>\S.*?:\d+:\d+)  )?(?:(?P<key>\S.*?)  )?"
    r"(?P<name>[a-z]+(?:-[a-z]+)*)  \((?P<kind>error|illegal|note)\)\Z"
)
PART = re.compile(r"  (found   |allowed |try     ) (.*)\Z")


@attrs.frozen
class Said:
    """One problem as it was printed."""

    place: str
    key: str
    name: str
    kind: str
    found: str
    allowed: str
    remedy: str


@attrs.frozen
class Result:
    """What one command did. ``said`` holds errors and illegal things, not notes."""

    status: int
    out: str
    err: str

    @property
    def said(self) -> list[Said]:
        return [said for said in parse(self.err + "\n" + self.out) if said.kind != "note"]

    @property
    def names(self) -> list[str]:
        return sorted(said.name for said in self.said)


def parse(text: str) -> Iterator[Said]:
    """The problems printed in ``text``, in order."""
    head: re.Match[str] | None = None
    parts: dict[str, str] = {}
    for line in [*text.splitlines(), "  (note)"]:
        if line.endswith((" (error)", " (illegal)", " (note)")):
            if head is not None:
                fields = {k: v or "" for k, v in head.groupdict().items()}
                yield Said(**fields, **{k: parts.get(k, "") for k in ("found", "allowed", "remedy")})
            head, parts = HEAD.match(line), {}
        elif head is not None and (match := PART.match(line)):
            key = match[1].strip()
            parts.setdefault("remedy" if key == "try" else key, match[2].strip())


def call(arguments: Sequence[str]) -> Result:
    """The command line in this process, its output caught. Whatever it raises comes through."""
    out, err = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        status = status_of(list(arguments))
    return Result(status, out.getvalue(), err.getvalue())


def contents(folder: Path) -> dict[str, object]:
    """Every entry below ``folder``: the bytes of a file, or what else it is."""
    found: dict[str, object] = {}
    for path in sorted(folder.rglob("*")):
        mode = path.lstat().st_mode
        plain = stat.S_ISREG(mode)
        found[str(path.relative_to(folder))] = path.read_bytes() if plain else (stat.S_IFMT(mode), _target(path))
    return found


def _target(path: Path) -> str:
    return os.readlink(path) if path.is_symlink() else ""


@attrs.frozen
class Row:
    """One mistake: the files, the command (run inside their folder), and what must come of it.

    ``names``: the problems, all of them, with repeats, in any order. ``says`` must stand in the output, ``remedy`` in a
    `try` line. ``changed``: files that may come, go or change. ``process``: run it as a process of its own.
    """

    title: str
    command: str
    names: Sequence[str]
    status: int = 2
    files: Mapping[str, Content] = attrs.field(factory=dict)
    says: str = ""
    remedy: str = ""
    changed: Sequence[str] = ()
    process: bool = False

    @property
    def arguments(self) -> list[str]:
        return shlex.split(self.command)


def write(folder: Path, files: Mapping[str, Content]) -> None:
    """Make the files below ``folder``, and the folders they are in."""
    for name, content in files.items():
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        if isinstance(content, str):
            path.write_text(content, encoding="utf-8")
        elif isinstance(content, bytes):
            path.write_bytes(content)
        else:
            content(path)


def a_folder(path: Path) -> None:
    path.mkdir()


def a_pipe(path: Path) -> None:
    """A named pipe that nobody writes to: opening it for reading would wait for ever."""
    os.mkfifo(path)


def link_to(target: str) -> Callable[[Path], None]:
    return lambda path: path.symlink_to(target)


def npy(array: object, **more: object) -> bytes:
    """The bytes of an array file."""
    stream = io.BytesIO()
    np.save(stream, np.asarray(array), **more)  # type: ignore[arg-type]
    return stream.getvalue()


def npy_with_header(header: str, data: bytes = b"", version: bytes = b"\x01\x00") -> bytes:
    """An array file with any text as its header."""
    text = header.encode("latin-1") + b"\n"
    size = len(text).to_bytes(2 if version == b"\x01\x00" else 4, "little")
    return b"\x93NUMPY" + version + size + text + data
