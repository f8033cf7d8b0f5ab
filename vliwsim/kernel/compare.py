"""Comparison of a run's outputs with what the reference says: exact, or within so many units in the last place."""

from __future__ import annotations

import attrs
import numpy as np

from vliwsim.kernel.elements import Element
from vliwsim.kernel.outputs import Output


@attrs.frozen(eq=False)
class Difference:
    """The first element that differs too much. ``index`` is None for a scalar, ``got`` where it is undefined.

    ``differing`` of ``size`` elements differ by more than allowed, the worst by ``distance`` units in the last place
    (None where one of the two is undefined or no number).
    """

    index: int | None
    got: int | float | None
    expected: int | float
    differing: int
    size: int
    distance: int | None

    def as_json(self) -> dict[str, object]:
        return {"index": self.index, "got": _plain(self.got), "expected": _plain(self.expected)}


def _plain(value: int | float | None) -> object:
    """JSON has no NaN and no infinity: those go as text."""
    return value if value is None or isinstance(value, int) or np.isfinite(value) else str(value)


def compare(
    element: Element, got: Output, expected: Output, within: int | None = None, undefined: np.ndarray | None = None
) -> Difference | None:
    """The first difference between two values of one type and shape, None if there is none.

    ``within``: units in the last place allowed; None asks for equal bits. NaNs are equal to each other whatever their
    payload, and to nothing else. ``undefined``: which elements of ``got`` are; they equal nothing.
    """
    one, other = np.atleast_1d(np.asarray(got, element.dtype)), np.atleast_1d(np.asarray(expected, element.dtype))
    unknown = np.zeros(one.shape, bool) if undefined is None else np.atleast_1d(undefined)
    assert one.shape == other.shape == unknown.shape
    distances, comparable = _distances(element, one, other)
    wrong = ~comparable | (distances > (within or 0))
    if within is None:
        wrong |= _bits(one) != _bits(other)
        wrong &= ~(_nan(one) & _nan(other))
    wrong |= unknown
    if not wrong.any():
        return None
    index = int(np.flatnonzero(wrong)[0])
    worst = int(distances[wrong].max()) if (comparable & ~unknown)[wrong].all() else None
    where = None if np.ndim(got) == 0 else index
    value = None if unknown[index] else one[index].item()
    return Difference(where, value, other[index].item(), int(np.count_nonzero(wrong)), one.size, worst)


def _nan(array: np.ndarray) -> np.ndarray:
    return np.isnan(array) if array.dtype.kind == "f" else np.zeros(array.shape, bool)


def _bits(array: np.ndarray) -> np.ndarray:
    return array.view(np.uint32) if array.dtype.kind == "f" else array


def _distances(element: Element, one: np.ndarray, other: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Distance of each pair in units in the last place, and whether the pair can be compared at all.

    Binary32 values are counted along the line of all of them, both zeros at 0. NaNs are at 0 from each other; an
    infinity can be compared only with itself, since an overflow is no last place.
    """
    if not element.floating:
        return np.abs(one.astype(np.int64) - other.astype(np.int64)), np.ones(one.shape, bool)
    steps = []
    for array in (one, other):
        bits = array.view(np.int32).astype(np.int64)
        steps.append(np.where(bits < 0, -(bits & 0x7FFFFFFF), bits))
    both = _nan(one) & _nan(other)
    apart = (_nan(one) | _nan(other) | np.isinf(one) | np.isinf(other)) & ~(both | (one == other))
    return np.where(both, 0, np.abs(steps[0] - steps[1])), ~apart
