"""Sizes worth trying: values of the size names (and of scalars that ``needs`` speaks of) for which ``needs`` holds.

Nothing is proved here: candidates are tried in a fixed order, small ones first, and only what holds is used.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from vliwsim.kernel.interface import Interface
from vliwsim.kernel.placement import place
from vliwsim.kernel.sizes import Sizes, formula_value
from vliwsim.problems import Problem

TRIES = 20_000
"""Candidates judged in one search, at most."""
DECENT = 4096
"""Elements that a run of decent size has along its first size, at most."""


class Search:
    """Searches one kernel's sizes. ``fixed``: names whose value the caller has chosen."""

    def __init__(self, interface: Interface, fixed: Mapping[str, Any]) -> None:
        self.interface = interface
        self.kernel = interface.kernel
        self.fixed = dict(fixed)
        spoken = set(self.kernel.needs.names) if self.kernel.needs else set()
        for item in interface.arrays:
            spoken |= item.size.names if item.size else set()
        scalars = [n for n, i in interface.inputs.items() if i.size is None and n in spoken and i.type != "f32"]
        self.names = tuple(n for n in (*interface.size_names, *scalars) if n not in self.fixed)
        self.scalars = frozenset(scalars)

    def holds(self, values: Mapping[str, int]) -> bool:
        """Do all sizes exist, does all fit into memory, and does ``needs`` hold as far as it can be judged here?

        What ``needs`` says of array elements and computed values is judged when the case is bound.
        """
        known = {**self.kernel.constants, **self.fixed, **values}
        for name in self.scalars & values.keys():
            element = self.interface.element(name)
            if not element.low <= values[name] <= element.high:
                return False
        needs, problems = self.kernel.needs, list[Problem]()
        if needs is not None and needs.names <= known.keys() and not getattr(needs, "references", ()):
            held = formula_value(needs, known, problems)
            if problems or not held:
                return False
        solver = Sizes(self.interface, known)
        lengths = solver.check({})
        if solver.problems or len(lengths) < len(self.interface.arrays):
            return False
        names = {**known, **{f"len({n})": v for n, v in lengths.items()}}
        place(self.interface, self.kernel.core.memory, lengths, names, problems)
        return not problems

    def smallest(self, count: int) -> list[dict[str, int]]:
        """Up to ``count`` assignments that hold, the smallest first."""
        found = (values for values in self._small() if self.holds(values))
        return list(itertools.islice(found, count))

    def smallest_sizes(self, count: int) -> list[dict[str, int]]:
        """Up to ``count`` assignments that hold and differ in a size, not only in a scalar."""
        different: dict[tuple[int, ...], dict[str, int]] = {}
        for values in self.smallest(16 * count):
            different.setdefault(tuple(v for n, v in values.items() if n not in self.scalars), values)
        return list(different.values())[:count]

    def _small(self) -> Iterator[dict[str, int]]:
        """All assignments of small numbers by growing sum, then those of the numbers the source itself speaks of."""
        if not self.names:
            yield {}
            return
        width = len(self.names)
        reach = {1: 4200, 2: 120, 3: 24}.get(width, 8)
        seen = 0
        for total in range(reach * width + 1):
            for values in _sums(width, total, reach):
                seen += 1
                if seen > TRIES:
                    return
                yield dict(zip(self.names, values))
        for values in itertools.islice(itertools.product(self._spoken_numbers(), repeat=width), TRIES - seen):
            yield dict(zip(self.names, values))

    def _spoken_numbers(self) -> Sequence[int]:
        """Numbers in ``needs`` and in the sizes, with their neighbours and small multiples, and powers of two."""
        text = " ".join(f.text for f in (self.kernel.needs, *(i.size for i in self.interface.arrays)) if f is not None)
        numbers = {int(n) for n in re.findall(r"\b\d{1,7}\b", text)}
        wide = {n * k + d for n in numbers for k in (1, 2, 3) for d in (-1, 0, 1)} | {1 << k for k in range(17)} | {-1}
        return sorted(wide, key=lambda n: (abs(n), n))

    def decent(self) -> dict[str, int] | None:
        """One assignment of decent size: from the smallest, each name in turn made as large as it may be.

        The first name grows to at most 4096, every further one to at most 32. None if nothing small holds.
        """
        start = self.smallest(1)
        if not start:
            return None
        values = start[0]
        for position, name in enumerate(self.names):
            if name in self.scalars:
                continue
            top = DECENT if position == 0 else 32
            for candidate in range(top, values[name], -1):
                if self.holds({**values, name: candidate}):
                    values = {**values, name: candidate}
                    break
        return values

    def medium(self) -> dict[str, int] | None:
        """An assignment of a few dozen elements with odd sizes where they may be odd."""
        start = self.smallest(1)
        if not start:
            return None
        values = start[0]
        for position, name in enumerate(self.names):
            if name in self.scalars:
                continue
            bottom = 37 if position == 0 else 5
            for candidate in (*range(bottom, bottom + 300, 2), *range(bottom + 1, bottom + 300, 2)):
                if candidate > values[name] and self.holds({**values, name: candidate}):
                    values = {**values, name: candidate}
                    break
        return values


def _sums(width: int, total: int, reach: int) -> Iterator[tuple[int, ...]]:
    """All tuples of ``width`` numbers from 0 to ``reach`` with this sum."""
    if width == 1:
        if total <= reach:
            yield (total,)
        return
    for first in range(min(total, reach), -1, -1):
        for rest in _sums(width - 1, total - first, reach):
            yield (first, *rest)
