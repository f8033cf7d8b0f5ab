"""Sizes of a kernel's arrays, solved from what is given and checked against every formula.

A size formula that is a bare name binds that name to the array's length. A formula that is linear in one unknown name
(``n + 15``, ``2 * n``) binds it too. Every other formula is then checked.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from vliwsim.kernel.interface import Interface
from vliwsim.problems import Problem, SourceError, problem
from vliwsim.program.kernel import Formula, Item

LARGEST = 1 << 28
"""No array has more elements than this."""


class Sizes:
    """Solves sizes; ``values`` grows as names are bound, ``problems`` as contradictions are found.

    ``known``: names with given values (constants, scalars, sizes given by name).
    """

    def __init__(self, interface: Interface, known: Mapping[str, Any]) -> None:
        self.interface = interface
        self.values: dict[str, Any] = dict(known)
        self.sources: dict[str, str] = {}
        self.problems: list[Problem] = []

    def solve(self, lengths: Mapping[str, int]) -> None:
        """Bind every name that the ``lengths`` of the given arrays determine, bare names first."""
        formulas = {name: self.interface.items[name].size for name in lengths}
        for name, formula in formulas.items():
            if formula is not None and formula.names == {formula.text.strip()}:
                self._bind(formula.text.strip(), lengths[name], name)
        progress = True
        while progress:
            progress = False
            for name, formula in formulas.items():
                unknown = [n for n in formula.names if n not in self.values] if formula is not None else []
                if formula is not None and len(unknown) == 1:
                    solved = self._linear(formula, unknown[0], lengths[name])
                    if solved is not None:
                        self._bind(unknown[0], solved, name)
                        progress = True

    def _bind(self, name: str, value: int, array: str) -> None:
        if name not in self.values:
            self.values[name] = value
            self.sources[name] = f"{array} has {value}" if self._bare(array) else f"{array} gives {value}"
            return
        if self.values[name] != value:
            said = self.sources.get(name, f"{name} = {self.values[name]} is given")
            self.problems.append(
                problem(
                    "size-conflict", f"{array} has {value} elements, but {said}", f"one value of {name} for all arrays"
                )
            )

    def _bare(self, array: str) -> bool:
        formula = self.interface.items[array].size
        return formula is not None and formula.names == {formula.text.strip()}

    def _linear(self, formula: Formula, name: str, length: int) -> int | None:
        """The value of ``name`` that makes a linear formula give ``length``; None if it is not linear."""
        try:
            zero, one, two = (formula.value({**self.values, name: k}) for k in (0, 1, 2))
            slope = one - zero  # type: ignore[operator]
            if not isinstance(zero, int) or slope == 0 or two - one != slope or (length - zero) % slope:  # type: ignore[operator]
                return None
            solved = (length - zero) // slope
            return solved if formula.value({**self.values, name: solved}) == length else None
        except (SourceError, TypeError):
            return None

    def check(self, lengths: Mapping[str, int]) -> dict[str, int]:
        """The length of every array of the interface; ``lengths`` are those of the given ones."""
        found: dict[str, int] = {}
        missing: set[str] = set()
        for item in self.interface.arrays:
            size = self._length(item, missing)
            if size is None:
                continue
            found[item.name] = size
            if item.name in lengths and lengths[item.name] != size and not self._bare(item.name):
                text = item.size.text.strip() if item.size else ""
                self.problems.append(
                    problem(
                        "array-length",
                        f"{item.name} has {lengths[item.name]} elements",
                        f"{size} ({text}{self.shown(item.size)})",
                    )
                )
        return found

    def _length(self, item: Item, missing: set[str]) -> int | None:
        formula = item.size
        assert formula is not None
        unknown = sorted(n for n in formula.names if n not in self.values)
        if unknown:
            for name in unknown:
                if name not in missing and name not in self.interface.items:
                    self.problems.append(unknown_size(name, item.name))
                missing.add(name)
            return None
        value = formula_value(formula, self.values, self.problems)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int) or not 0 <= value <= LARGEST:
            self.problems.append(
                problem(
                    "size-value",
                    f"{item.name} would have {value} elements ({formula.text.strip()}{self.shown(formula)})",
                    f"a whole number from 0 to {LARGEST}",
                    place=formula.place,
                )
            )
            return None
        return value

    def shown(self, formula: Formula | None) -> str:
        """The values of a formula's names, for a message: `` with n = 5``."""
        return shown_values(formula.names if formula else (), self.values)


def unknown_size(name: str, array: str) -> Problem:
    return problem("size-unknown", f"no value for {name}, the size of {array}", "a size for every array", f"{name}=…")


def shown_values(names: Iterable[str], values: Mapping[str, Any]) -> str:
    parts = [f"{n} = {values[n]}" for n in sorted(names) if n in values and isinstance(values[n], (int, float))]
    return f" with {', '.join(parts)}" if parts else ""


def formula_value(formula: Formula, names: Mapping[str, Any], problems: list[Problem]) -> Any:
    """The value of ``formula``, or None with the reason added to ``problems``."""
    try:
        return formula.value(names)
    except SourceError as error:
        problems.extend(error.problems)
        return None
