"""Names of operations and of their files, without reading what they mean.

A core file names families, files of the user's own and, in two keys, single operations; whether these exist is all that
a core needs to know. The tables are read by :mod:`vliwsim.description.tables`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from contextlib import suppress
from functools import lru_cache
from pathlib import Path

from vliwsim.description.coreparts import OPERATION
from vliwsim.description.places import isa_folder
from vliwsim.description.toml_places import read_toml
from vliwsim.problems import OperationError


def shipped_operations() -> list[str]:
    """Names of the shipped operation families."""
    return sorted(path.stem for path in (isa_folder() / "operations").glob("*.toml"))


class OperationNames:
    """Names of the operations of some files, read only when asked for: two keys of a core file may name operations."""

    def __init__(self, entries: Iterable[str]) -> None:
        self.entries = tuple(entries)
        self.names: frozenset[str] | None = None

    def all(self) -> frozenset[str]:
        if self.names is None:
            self.names = frozenset().union(*(_names_in(_operations_path(entry)) for entry in self.entries))
        return self.names

    def __contains__(self, name: str) -> bool:
        return name in self.all()


def _operations_path(entry: str) -> Path:
    return Path(entry) if entry.endswith(".toml") else isa_folder() / "operations" / f"{entry}.toml"


def _names_in(path: Path) -> frozenset[str]:
    """Names of the operations in a file; of a bad one none, for it is reported where tables are read."""
    try:
        status = path.stat()
    except OSError:
        return frozenset()
    return _names_as_of(path, status.st_mtime_ns, status.st_size)


@lru_cache(maxsize=64)
def _names_as_of(path: Path, changed: int, size: int) -> frozenset[str]:
    """The same, kept as long as the file does not change: a sweep evolves one core many times."""
    found: set[str] = set()
    with suppress(OperationError):
        _collect(read_toml(path, OperationError).data, "", found)
    return frozenset(found)


def _collect(table: Mapping[str, object], name: str, found: set[str], depth: int = 0) -> None:
    """Names of the operations in a table: the tables that say what the operation ``does``."""
    for key, inner in table.items():
        whole = f"{name}.{key}" if name else key
        if isinstance(inner, dict) and depth < 8:
            if "does" in inner and OPERATION.fullmatch(whole):
                found.add(whole)
            _collect(inner, whole, found, depth + 1)
