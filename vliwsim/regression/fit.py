"""Cycles as a formula of a size: the line that most points lie on, and what lies beside it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from fractions import Fraction

import attrs

FINEST = 64
"""Largest denominator of a slope."""


@attrs.frozen
class Fit:
    """``cycles = slope * size + start`` holds exactly at ``exact`` of ``points`` sizes.

    ``outliers``: (size, cycles more than the line). ``pattern``: what the outliers have in common, empty if nothing.
    """

    size: str
    slope: Fraction
    start: Fraction
    exact: int
    points: int
    outliers: tuple[tuple[int, Fraction], ...]
    pattern: str

    @property
    def formula(self) -> str:
        """``3/8 n + 8``."""
        parts = [f"{self.slope} {self.size}"] if self.slope else []
        if self.start or not parts:
            sign = "-" if self.start < 0 else "+"
            parts.append(f"{sign} {abs(self.start)}" if parts else str(self.start))
        return " ".join(parts)

    def at(self, size: int) -> Fraction:
        return self.slope * size + self.start


def fit(size: str, cycles: Mapping[int, int]) -> Fit | None:
    """The line through most of the points (the flattest of equals); None for fewer than two sizes.

    Every pair of points is tried: with at most a few dozen sizes that is cheap, and one odd size does not bend the line
    as a least-squares one would.
    """
    points = sorted(cycles.items())
    if len(points) < 2:
        return None
    best: tuple[int, int, Fraction, Fraction] | None = None
    for k, (x, y) in enumerate(points):
        for x2, y2 in points[k + 1 :]:
            slope = Fraction(y2 - y, x2 - x)
            if slope.denominator > FINEST:
                continue
            start = y - slope * x
            exact = sum(slope * a + start == b for a, b in points)
            rank = (exact, -slope.denominator, -slope, start)
            if best is None or rank > (best[0], -best[1], -best[2], best[3]):
                best = exact, slope.denominator, slope, start
    if best is None:
        return None
    exact, _, slope, start = best
    outliers = tuple((x, y - (slope * x + start)) for x, y in points if y != slope * x + start)
    return Fit(size, slope, start, exact, len(points), outliers, _pattern(size, points, outliers))


def _pattern(size: str, points: list[tuple[int, int]], outliers: tuple[tuple[int, Fraction], ...]) -> str:
    """A remainder that all outliers, and no other sizes, have; or that they are the smallest sizes."""
    odd = {x for x, _ in outliers}
    if not odd:
        return ""
    straight = {x for x, _ in points} - odd
    if straight and max(odd) < min(straight):
        return f"{size} < {min(straight)}"
    for modulus in (2, 3, 4, 5, 6, 8, 12, 16, 24, 32):
        rests = Counter(x % modulus for x in odd)
        if len(rests) <= max(1, modulus // 2) and not {x % modulus for x in straight} & rests.keys():
            return f"{size} % {modulus} = {', '.join(map(str, sorted(rests)))}"
    return ""
