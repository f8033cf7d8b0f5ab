"""What the parser makes of a source file, before anything in it is looked up."""

from __future__ import annotations

from typing import NamedTuple

import attrs

from vliwsim.program.source.pieces import Piece


class Label(NamedTuple):
    """``name:`` begins a section."""

    name: Piece


class Stamp(NamedTuple):
    """``@expression``: the beat of what follows, counted from the last label; empty for one that was refused."""

    expression: Piece


class Idle(NamedTuple):
    """``idle``: holds its stamp, so that the section lasts at least until then."""

    word: Piece


class Let(NamedTuple):
    """``let name = expression``."""

    name: Piece
    expression: Piece


class Name(NamedTuple):
    """``name alias = register``."""

    name: Piece
    register: Piece


class Call(NamedTuple):
    """One operation as written. ``guard`` is the register's text, ``pin`` the slot's, ``item`` an expression.

    ``others``: of operands from another item than ``item``, the register's text and the item's expression.
    ``targets``: the labels behind ``to``, None without one.
    """

    mnemonic: Piece
    operands: tuple[Piece, ...]
    guard: Piece | None = None
    negated: bool = False
    pin: Piece | None = None
    item: Piece | None = None
    others: tuple[tuple[Piece, Piece], ...] = ()
    targets: tuple[Piece, ...] | None = None


class Repeat(NamedTuple):
    """``repeat times as variable`` … ``end``."""

    times: Piece
    variable: Piece | None
    body: list[Node]


Node = Label | Stamp | Idle | Let | Name | Call | Repeat


class ItemLine(NamedTuple):
    """An interface line: ``clauses`` are the texts behind ``= from at in over within align bank``."""

    kind: str
    name: Piece
    type: Piece
    size: Piece | None
    clauses: dict[str, Piece]
    line: Piece


@attrs.define(eq=False, repr=False)
class Tree:
    """A parsed source file."""

    kernel: Piece | None = None
    cores: list[Piece] = attrs.field(factory=list)
    items: list[ItemLine] = attrs.field(factory=list)
    needs: Piece | None = None
    budget: Piece | None = None
    lets: list[Let] = attrs.field(factory=list)
    names: list[Name] = attrs.field(factory=list)
    body: list[Node] = attrs.field(factory=list)
