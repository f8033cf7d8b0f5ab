"""A number a frame for very many frames, mostly the same one: in little memory, looked at without expanding."""

from __future__ import annotations

from collections import Counter

import numpy as np


class Tally:
    """Numbers in a row, to which more are added. ``count``: how many there are; ``histogram``: how often each is."""

    def __init__(self) -> None:
        self.count = 0
        self.histogram: Counter[float] = Counter()
        self._parts: list[tuple[np.ndarray, int]] = []

    def add(self, numbers: np.ndarray) -> None:
        if not len(numbers):
            return
        self.count += len(numbers)
        values, counts = np.unique(numbers, return_counts=True)
        self.histogram.update(dict(zip(values.tolist(), counts.tolist(), strict=True)))
        if len(values) > 1:
            self._parts.append((numbers, 1))
        elif self._parts and len(self._parts[-1][0]) == 1 and self._parts[-1][0] == values:
            self._parts[-1] = values, self._parts[-1][1] + len(numbers)
        else:
            self._parts.append((values, len(numbers)))

    def array(self) -> np.ndarray:
        """All of them; empty where there are none."""
        return np.concatenate([np.repeat(part, times) for part, times in self._parts] or [np.zeros(0, np.int64)])

    @property
    def total(self) -> float:
        return sum(number * count for number, count in self.histogram.items())

    @property
    def spread(self) -> tuple[float, float, float]:
        """Least, median and greatest."""
        numbers = sorted(self.histogram)
        return numbers[0], (self._ranked((self.count - 1) // 2) + self._ranked(self.count // 2)) / 2, numbers[-1]

    def _ranked(self, rank: int) -> float:
        """The number that stands at ``rank``, from 0, when all are put in order."""
        for number in sorted(self.histogram):
            rank -= self.histogram[number]
            if rank < 0:
                return number
        raise IndexError(rank)
