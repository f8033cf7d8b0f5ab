"""An assembled kernel: its interface, its program, and the way back from code to source.

What the source says of its data (the header) and what the machine needs (the program) meet here; the kernel room binds
arrays to it, the machine runs ``program``, and diagnostics find their lines through ``map``.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple, Protocol

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import OperationSet
from vliwsim.problems import Place, Problem
from vliwsim.program.code import Program


class Formula(Protocol):
    """A parsed expression of the source language (:mod:`vliwsim.program.source.expressions`)."""

    @property
    def text(self) -> str: ...

    @property
    def place(self) -> Place: ...

    @property
    def names(self) -> frozenset[str]:
        """Free names, functions excluded."""
        ...

    @property
    def references(self) -> frozenset[str]:
        """What stands in it like ``addr(x)`` and ``len(x)``, so spelled: keys of ``value``'s mapping."""
        ...

    def value(self, names: Mapping[str, object]) -> object:
        """The value with these names; raises :class:`~vliwsim.problems.SourceError` for a bad one."""
        ...


class Item(NamedTuple):
    """One interface line.

    ``kind``: given, returns, changes, table, scratch. ``type``: i8…i32, u8…u32, q15, q31, f32. ``size``: elements, None
    for a scalar. ``value``: how a computed ``given`` or a ``table`` gets its data (a table may instead name a ``file``
    beside the source). ``how``: ``at`` (the register holds the address of the first element) or ``in`` (the register
    holds the value). ``over``: bytes past the end that may be read; ``within``: units in the last place an output may
    differ by; ``align`` in bytes; ``bank``: the memory bank the first element stands in. A ``scratch`` or ``table`` may
    have no register (None).
    """

    kind: str
    name: str
    type: str
    size: Formula | None
    register: int | None
    how: str
    place: Place
    value: Formula | None = None
    file: str | None = None
    over: Formula | None = None
    align: Formula | None = None
    bank: Formula | None = None
    within: Formula | None = None


class Section(NamedTuple):
    """A labelled stretch: ``first`` is its first bundle's index in the program, ``beats`` its length in beats."""

    label: str
    first: int
    beats: int
    place: Place


class ItemTag(NamedTuple):
    """What the source says of an operation: it works on the item of the loop that is ``age`` passes old.

    ``others``: (register, age) of operands that come from another item.
    """

    age: int
    others: tuple[tuple[int, int], ...] = ()


class SourceMap(NamedTuple):
    """From bundles (by index in the program) and their instructions (in bundle order) back to the source."""

    sections: tuple[Section, ...]
    bundle_at: tuple[tuple[str, int], ...]
    """For each bundle index its (label, beat within the label's section); an idle word's is its first beat."""
    instruction_places: tuple[tuple[Place, ...], ...]
    """For each bundle index, for each of its instructions, where the source says it (column at the mnemonic)."""
    items: tuple[tuple[ItemTag | None, ...], ...] = ()
    """For each bundle index, for each of its instructions, the item it works on; empty where nothing is tagged."""


@attrs.frozen
class Kernel:
    """One assembled source file on one core. ``path`` is the source file's path as given."""

    name: str
    path: str
    text: str
    core: Core
    operations: OperationSet
    cores_named: tuple[str, ...]
    items: tuple[Item, ...]
    needs: Formula | None
    budget: Formula | None
    constants: Mapping[str, object]
    """The ``let`` names of the header and body that are visible to formulas, evaluated."""
    register_names: Mapping[str, int]
    """The ``name`` names: name → register number."""
    image: bytes
    program: Program
    map: SourceMap
    notes: tuple[Problem, ...] = ()
