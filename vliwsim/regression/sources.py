"""Which kernels a regression is about: the sources below some paths, each on every core it names."""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from pathlib import Path

import attrs

from vliwsim.problems import OptionError, Problem, SourceError, problem
from vliwsim.program.assembler import read_source
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.parser import parse

SKIPPED = frozenset({"golden", "node_modules", "__pycache__"})


@attrs.frozen(order=True)
class Target:
    """One source on one core: ``source`` as a path, ``core`` a name or core file; None where the source names none."""

    source: str
    core: str | None

    @property
    def title(self) -> str:
        return f"{Path(self.source).stem} on {Path(self.core).stem}" if self.core else self.source


def targets(paths: Sequence[str], core: str | None = None) -> list[Target]:
    """Every source at or below ``paths``, on every core it names, or on ``core`` alone; in order of paths.

    Raises :class:`~vliwsim.problems.OptionError` for a path that is not there or holds no source.
    """
    problems: list[Problem] = []
    found: dict[str, None] = {}
    for path in paths:
        try:
            there = list(_sources(path))
        except OptionError as error:
            problems += error.problems
            continue
        if not there:
            problems.append(problem("no-such-file", f"no source below {path}", "a folder with .vliw files"))
        found |= dict.fromkeys(there)
    if problems:
        raise OptionError(problems)
    return [Target(source, each) for source in found for each in ([core] if core else cores_named(source))]


def _sources(path: str) -> Iterator[str]:
    if os.path.isfile(path):
        yield path
        return
    if not os.path.exists(path):
        from vliwsim.kernel.loading import find_source

        yield str(find_source(path))  # a shipped kernel by name
        return
    for folder, folders, files in os.walk(path):
        folders[:] = sorted(f for f in folders if f not in SKIPPED and not f.startswith("."))
        yield from (os.path.join(folder, name) for name in sorted(files) if name.endswith(".vliw"))


def cores_named(source: str) -> list[str | None]:
    """The cores that a source names, a core file as a path beside it; [None] where it names none or cannot be read."""
    try:
        lines = read_source(source).splitlines()
        tree = parse(lines, Complaints(source, lines))
    except (OptionError, SourceError):
        return [None]
    names: list[str | None] = []
    for piece in tree.cores:
        beside = piece.text.endswith(".toml")
        names.append(os.path.normpath(os.path.join(os.path.dirname(source), piece.text)) if beside else piece.text)
    return list(dict.fromkeys(names)) or [None]
