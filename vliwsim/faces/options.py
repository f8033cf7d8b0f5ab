"""Options that several commands share, and how their values are read."""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from vliwsim.problems import OptionError, Problem, VliwsimError, problem

if TYPE_CHECKING:
    import numpy as np

    from vliwsim.kernel.outputs import Output
    from vliwsim.program.kernel import Kernel

Command = TypeVar("Command", bound=Callable[..., Any])

_NAME = re.compile(r"[A-Za-z_]\w*\Z")


def core_options(command: Command) -> Command:
    """``--core`` and ``--set``."""
    command = click.option(
        "--set", "changes", multiple=True, metavar="KEY=VALUE", help="Change a value of the core: latency.load=5."
    )(command)
    return click.option("--core", metavar="NAME|FILE", help="The core, instead of the one the source names.")(command)


def load(path: str, core: str | None, changes: Sequence[str]) -> Kernel:
    """The assembled kernel that the arguments name."""
    from vliwsim.kernel.loading import assemble_source

    return assemble_source(path, core, tuple(changes))


def given_values(texts: Sequence[str]) -> dict[str, Any]:
    """What the ``--give`` options give, by name. Raises with all bad ones at once."""
    values: dict[str, Any] = {}
    problems: list[Problem] = []
    for text in texts:
        name, sign, value = text.partition("=")
        name, value = name.strip(), value.strip()
        try:
            if not sign or not _NAME.match(name) or not value:
                raise OptionError(problem("bad-option", f"--give {text}", "NAME=FILE.npy, NAME=40, NAME=1,2,3"))
            if name in values:
                raise OptionError(problem("bad-option", f"--give {name} twice", "each name once"))
            values[name] = given_value(name, value)
        except VliwsimError as error:
            problems.extend(error.problems)
    if problems:
        raise OptionError(problems)
    return values


def given_value(name: str, text: str) -> int | float | list[int | float] | np.ndarray:
    """One value: a number, numbers with commas, or the array in a ``.npy`` file."""
    if "," in text:
        return [_number(name, part.strip()) for part in text.split(",") if part.strip()]
    try:
        return _number(name, text)
    except OptionError:
        looks_like_file = "/" in text or "\\" in text or "." in text or os.path.exists(text)
        if not looks_like_file:
            raise
    from vliwsim.kernel.files import read_npy

    return read_npy(Path(text), name)


def _number(name: str, text: str) -> int | float:
    if len(text) <= 400 and text.isascii():
        for read in (lambda t: int(t, 0), float):
            try:
                return read(text)
            except ValueError:
                continue
    shown = text if len(text) <= 40 else f"{text[:40]}…"
    raise OptionError(problem("bad-option", f"--give {name}={shown}", "a number, numbers with commas, or a .npy file"))


def save_targets(texts: Sequence[str], outputs: Sequence[str], replace: bool) -> dict[str, Path]:
    """Where the ``--save`` options put outputs, by name; judged before anything runs."""
    from vliwsim.kernel.files import exists

    targets: dict[str, Path] = {}
    problems: list[Problem] = []
    for text in texts:
        name, sign, value = text.partition("=")
        path = Path(value)
        if not sign or not value:
            problems.append(problem("bad-option", f"--save {text}", "NAME=FILE.npy"))
        elif name not in outputs:
            problems.append(problem("bad-option", f"--save {name}", f"an output: {', '.join(outputs) or 'none'}"))
        elif name in targets or path in targets.values():
            problems.append(problem("bad-option", f"--save {text} besides another of that name or file", "each once"))
        elif path.suffix != ".npy":
            problems.append(problem("bad-option", f"--save {text}", "a file whose name ends in .npy"))
        elif not os.path.isdir(path.parent):
            problems.append(problem("output-file", f"no folder {path.parent}", "a folder that is there"))
        elif impossible := _impossible(path):
            problems.append(problem("output-file", f"{path}: {impossible}", "a name that a file can have"))
        elif os.path.lexists(path) and not replace:
            problems += exists(path).problems
        targets.setdefault(name, path)
    if problems:
        raise OptionError(problems)
    return targets


def _impossible(path: Path) -> str:
    """Why no file can have this name; empty where one can."""
    try:
        path.lstat()
    except FileNotFoundError:
        return ""
    except (OSError, ValueError) as error:
        return getattr(error, "strerror", None) or str(error)
    return ""


def save_outputs(targets: dict[str, Path], outputs: dict[str, Output], replace: bool) -> None:
    """Write outputs to their files, each whole or not at all."""
    import numpy as np

    from vliwsim.kernel.files import write_whole

    for name, path in targets.items():
        array = np.asarray(outputs[name])
        write_whole(path, lambda stream, array=array: np.save(stream, array, allow_pickle=False), replace=replace)  # type: ignore[misc]
