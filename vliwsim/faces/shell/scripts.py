"""Script files: plain text, a command a line."""

from __future__ import annotations

from pathlib import Path

from vliwsim.description.files import open_regular
from vliwsim.problems import printable
from vliwsim.shell.faults import unclear

LARGEST = 1 << 20
"""Bytes of a script."""


def read_script(path: Path) -> list[str]:
    """The lines of a script; raises ``Unclear`` where the file cannot be read as one."""
    try:
        with open_regular(path) as stream:
            data = stream.read(LARGEST + 1)
        if len(data) > LARGEST:
            raise unclear(f"{path} has more than {LARGEST} bytes", "a script of commands", name="script-file")
        return [printable(line) for line in data.decode("utf-8-sig").splitlines()]
    except (OSError, ValueError) as error:
        said = getattr(error, "strerror", None) or "is no text in UTF-8"
        raise unclear(f"{path}: {said}", "a text file of commands", name="script-file") from None
