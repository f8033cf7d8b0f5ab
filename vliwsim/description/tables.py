"""Operation tables: the operations of a core from the files it names.

Shipped files are trusted to be well-formed (a test checks them whole), so that loading a core costs next to nothing: a
file is only cut at its ``[headers]``, and an operation is parsed when it is first asked for. A user's file is read and
checked whole, its meanings and examples included, and refused with every mistake it has.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping, Sequence
from typing import TypeVar

from vliwsim.description.examples import check_examples
from vliwsim.description.operations import Operation, OperationSet
from vliwsim.description.tablefile import check_file, merge, table_file
from vliwsim.description.tablerows import Row, TableFile
from vliwsim.problems import OperationError, Problem

__all__ = ["check_examples", "load_operations", "validate"]

Key = TypeVar("Key")


class _Lazy(Mapping[Key, Operation]):
    """Operations by name or code, each built when first asked for."""

    def __init__(self, rows: Mapping[Key, Row]) -> None:
        self.rows = rows

    def __getitem__(self, key: Key) -> Operation:
        return self.rows[key].operation()

    def __iter__(self) -> Iterator[Key]:
        return iter(self.rows)

    def __len__(self) -> int:
        return len(self.rows)

    def __contains__(self, key: object) -> bool:
        return key in self.rows


def load_operations(names: Sequence[str]) -> OperationSet:
    """The operations of the named files: shipped families by name (``integer``), others by path (``my_ops.toml``).

    Raises :class:`OperationError` with every mistake of users' files, and for names or codes that two files share.
    """
    files: list[TableFile] = []
    problems: list[Problem] = []
    digest = hashlib.sha256()
    for name in dict.fromkeys(names):
        try:
            file, content_hash = table_file(name)
        except OperationError as error:
            problems.extend(error.problems)
        else:
            files.append(file)
            digest.update(content_hash)
    by_name, by_code = merge(files, problems)
    if problems:
        raise OperationError(problems)
    return OperationSet(_Lazy(by_name), _Lazy(by_code), digest.hexdigest())


def validate(operations: OperationSet) -> list[Problem]:
    """Everything wrong with a loaded set: reads its files whole, checks and compiles each operation, runs examples."""
    assert isinstance(operations.by_name, _Lazy)
    files = {id(row.file): row.file for row in operations.by_name.rows.values()}
    return [problem for file in files.values() for problem in check_file(TableFile(file.path, file.family, file.text))]
