"""The interface of a kernel: header lines to items, ``needs`` and ``budget``, every name in them known."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Collection, Iterable
from pathlib import PurePosixPath
from typing import NamedTuple

from vliwsim.program.kernel import Formula, Item
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.scope import Scope
from vliwsim.program.source.tree import ItemLine, Label, Tree

TYPES = ("i8", "i16", "i32", "u8", "u16", "u32", "q15", "q31", "f32")

_FORMULAS = {"=": "value", "over": "over", "align": "align", "bank": "bank", "within": "within"}
"""Clauses that hold a formula, and the field of an item it becomes."""

_ARRAYS_ONLY = ("over", "align", "bank", "from")
_LSB = re.compile(r"\s+lsb\Z")


class Interface(NamedTuple):
    """What the header says of data. ``sizes``: the names a caller gives or that follow from array lengths."""

    items: tuple[Item, ...]
    needs: Formula | None
    budget: Formula | None
    sizes: frozenset[str]


def interface(tree: Tree, scope: Scope) -> Interface:
    """The interface of a parsed source. Its header's ``let`` and ``name`` lines are already in ``scope``."""
    reader = _Reader(tree, scope)
    items = tuple(item for line in tree.items if (item := reader.item(line)))
    needs = reader.formula(tree.needs) if tree.needs else None
    budget = reader.formula(tree.budget) if tree.budget else None
    reader.check_names(items, needs, budget)
    _check_registers(items, scope)
    return Interface(items, needs, budget, frozenset(reader.sizes))


def judge_type(line: ItemLine, complaints: Complaints) -> None:
    """Complain of a type that is none, for which no core is needed."""
    if line.type.text not in TYPES:
        near = complaints.nearest(line.type.text, TYPES)
        complaints.add("unknown-type", line.type.where, f"type {line.type.text}", " ".join(TYPES), near)


class _Reader:
    def __init__(self, tree: Tree, scope: Scope) -> None:
        self.tree = tree
        self.scope = scope
        self.complaints: Complaints = scope.complaints
        self.bound: dict[str, object] = {**scope.latencies, **scope.constants}
        self.taken: dict[str, int] = {}
        """Lines of the items so far."""
        self.sizes: set[str] = set()

    def formula(self, piece: Piece) -> Formula | None:
        return self.scope.parsed(piece, self.bound)

    def item(self, line: ItemLine) -> Item | None:
        """One item; None when it cannot be made. Problems are told."""
        complaints, clauses = self.complaints, line.clauses
        before = len(complaints.problems)
        self._name(line.name)
        judge_type(line, complaints)
        self._shape(line)
        values: dict[str, Formula | None] = {}
        for word, field in _FORMULAS.items():
            if word in clauses:
                piece = clauses[word]
                if word == "within":
                    piece = piece._replace(text=_LSB.sub("", piece.text))
                values[field] = self.formula(piece)
        size = self.formula(line.size) if line.size else None
        if line.size and not line.size.text:
            size = None
        how = "in" if "in" in clauses else "at"
        register = self.scope.register(clauses[how]) if how in clauses else None
        file = self._file(clauses["from"]) if "from" in clauses else None
        if len(complaints.problems) > before:
            return None
        place = complaints.place(line.name.line, line.name.column, len(line.name.text))
        return Item(line.kind, line.name.text, line.type.text, size, register, how, place, file=file, **values)

    def _name(self, name: Piece) -> None:
        scope, text = self.scope, name.text
        if text in self.taken:
            self.complaints.add(
                "name-taken", name.where, f"{text} is the item of line {self.taken[text]}", "each name once"
            )
        elif scope.taken(name):
            return
        self.taken.setdefault(text, name.line)

    def _shape(self, line: ItemLine) -> None:
        """What must and must not go together."""
        add, clauses, kind = self.complaints.add, line.clauses, line.kind
        where, name = line.name.where, line.name.text
        array = line.size is not None
        if "at" in clauses and "in" in clauses:
            add("bad-clause", where, f"{name} both at and in", "at (address) or in (value)")
        elif kind in ("given", "changes", "returns") and not ("at" in clauses or "in" in clauses):
            wanted = "at REGISTER" if array else "in REGISTER"
            add("no-register", where, f"{name} without a register", wanted, wanted)
        elif array and "in" in clauses:
            add("bad-clause", where, f"array {name} in a register", "at REGISTER, which holds its address", "at")
        elif not array and "at" in clauses and kind not in ("table", "scratch"):
            add(
                "bad-clause",
                where,
                f"{name} at an address, without a size",
                "TYPE[SIZE] at REGISTER, or in REGISTER",
                "in",
            )
        if kind in ("table", "scratch") and not array:
            add("no-size", line.type.where, f"{kind} {name} without a size", "TYPE[SIZE]", f"{line.type.text}[1]")
        elif not array:
            for word in _ARRAYS_ONLY:
                if word in clauses and kind not in ("table", "scratch"):
                    add("bad-clause", clauses[word].where, f"{word} on the scalar {name}", f"{word} on arrays")
        if kind == "given" and array and "=" in clauses:
            add(
                "bad-clause", clauses["="].where, f"an array {name} with a formula", "given NAME : TYPE = … in", "table"
            )
        if kind == "table" and ("=" in clauses) is ("from" in clauses):
            found = f"table {name} with both = and from" if "=" in clauses else f"table {name} without values"
            add("bad-item", where, found, "= EXPRESSION of i, or from FILE.npy")

    def _file(self, piece: Piece) -> str:
        text = piece.text
        name = text[1:-1] if len(text) > 1 and text[0] == text[-1] == '"' else text
        path = PurePosixPath(name)
        bad = path.is_absolute() or ".." in path.parts or "\\" in name or '"' in name or ":" in name or not path.name
        if bad or path.suffix != ".npy":
            self.complaints.add(
                "bad-file", piece.where, f"file {text}", "a .npy file beside the source or below", '"taps.npy"'
            )
        return name

    def check_names(self, items: tuple[Item, ...], needs: Formula | None, budget: Formula | None) -> None:
        """Tell every name in a formula that nothing gives a value to."""
        self._find_sizes(items, needs, budget)
        arrays = {item.name for item in items if item.size is not None}
        arrays |= {line.name.text for line in self.tree.items if line.size is not None}
        labels = {node.name.text for node in self.tree.body if isinstance(node, Label)}
        scalars = {line.name.text: line for line in self.tree.items if line.size is None}
        plain = {name for name, line in scalars.items() if "=" not in line.clauses and line.kind != "returns"}
        earlier: set[str] = set()
        for item in items:
            for formula in (item.size, item.over, item.align, item.bank, item.within):
                self._known(formula, self.sizes | plain, arrays)
            counts = {"i"} if item.kind == "table" else set()
            self._known(item.value, self.sizes | plain | earlier | counts, arrays, labels)
            if item.size is None and item.kind != "returns":
                earlier.add(item.name)
        readable = self.sizes | set(scalars) | arrays
        self._known(needs, readable, arrays)
        self._known(budget, readable, arrays)

    def _find_sizes(self, items: tuple[Item, ...], needs: Formula | None, budget: Formula | None) -> None:
        """Sizes: names in the lengths of given arrays, and those that two formulas agree about."""
        own = set(self.taken)
        uses: Counter[str] = Counter()
        in_sizes: set[str] = set()
        for item in items:
            if item.size:
                in_sizes |= item.size.names
                if item.kind in ("given", "changes"):
                    self.sizes |= item.size.names
            for formula in (item.size, item.value):
                uses.update(formula.names if formula else ())
        for formula in (needs, budget):
            uses.update(formula.names if formula else ())
        self.sizes |= {name for name in in_sizes if uses[name] > 1}
        self.sizes -= own
        if len(items) < len(self.tree.items):  # a size may stand in an item that could not be made
            for line in self.tree.items:
                if line.size:
                    self.sizes |= set(re.findall(r"[A-Za-z_]\w*", line.size.text))

    def _known(
        self, formula: Formula | None, names: Iterable[str], arrays: set[str], labels: Collection[str] = ()
    ) -> None:
        """Tell what has no value in a formula. ``labels``: those whose ``addr`` has one."""
        if formula is None:
            return
        known = set(names)
        for name in sorted(formula.names - known):
            self._unknown(formula, name, known)
        for reference in sorted(formula.references):
            function, _, rest = reference.partition("(")
            if function == "latency":
                self._unknown(formula, rest[:-1], set(self.scope.operations.by_name))
            elif rest[:-1] not in arrays and not (function == "addr" and rest[:-1] in labels):
                self._unknown(formula, rest[:-1], arrays)

    def _unknown(self, formula: Formula, name: str, known: set[str]) -> None:
        match = re.search(rf"(?<![\w.]){re.escape(name)}(?![\w.])", formula.text)
        where = (formula.place.line, formula.place.column + (match.start() if match else 0), len(name))
        allowed = "known here: " + (" ".join(sorted(known)[:20]) or "nothing but let names and latencies")
        self.complaints.add(
            "unknown-name", where, f"{name} has no value here", allowed, self.complaints.nearest(name, known)
        )


def _check_registers(items: tuple[Item, ...], scope: Scope) -> None:
    """No two items in one register at the start, nor at the end."""
    names = scope.core.register_names
    start: dict[int, Item] = {}
    end: dict[int, Item] = {}
    for item in items:
        if item.register is None:
            continue
        ends = item.size is None and item.kind in ("returns", "changes")
        starts = not (item.size is None and item.kind == "returns")
        for when, taken, holds in (("start", start, starts), ("end", end, ends)):
            if not holds:
                continue
            other = taken.setdefault(item.register, item)
            if other is not item:
                found = (
                    f"{names[item.register]} holds {other.name} (line {other.place.line}) and {item.name} at the {when}"
                )
                scope.complaints.add("register-taken", item.place, found, "one item a register")
