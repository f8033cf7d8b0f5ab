"""Comparison of outputs, exact and within units in the last place."""

from __future__ import annotations

import numpy as np
import pytest

from vliwsim.kernel.compare import compare
from vliwsim.kernel.elements import ELEMENTS

TINY = float(np.float32(2**-149))  # IEEE 754: the smallest binary32 above 0
NEXT = float(np.nextafter(np.float32(1), np.float32(2)))


@pytest.mark.parametrize(
    ("kind", "got", "expected", "within", "first"),
    [
        ("i16", [1, 2, 3], [1, 2, 3], None, None),
        ("i16", [1, 2, 3], [1, 9, 4], None, 1),
        ("i16", [1, 2, 3], [1, 3, 4], 1, None),
        ("i16", [1, 2, 3], [1, 3, 5], 1, 2),
        ("i16", [-32768], [32767], 65534, 0),
        ("i16", [-32768], [32767], 65535, None),
        ("i32", [-(2**31)], [2**31 - 1], 2**32 - 2, 0),
        ("u32", [0], [2**32 - 1], 2**32 - 1, None),
        ("q15", [100], [101], 0, 0),
        ("i32", [], [], None, None),
        ("f32", [1.0, NEXT], [1.0, NEXT], None, None),
        ("f32", [1.0], [NEXT], None, 0),
        ("f32", [1.0], [NEXT], 1, None),
        ("f32", [0.0], [-0.0], None, 0),
        ("f32", [0.0], [-0.0], 0, None),
        ("f32", [TINY], [-TINY], 1, 0),
        ("f32", [TINY], [-TINY], 2, None),
        ("f32", [np.nan], [np.nan], None, None),
        ("f32", [np.nan], [-np.nan], 3, None),
        ("f32", [np.nan], [1.0], 2**31, 0),
        ("f32", [1.0], [np.nan], None, 0),
        ("f32", [np.inf], [np.inf], None, None),
        ("f32", [np.inf], [-np.inf], None, 0),
    ],
)
def test_first_difference(
    kind: str, got: list[float], expected: list[float], within: int | None, first: int | None
) -> None:
    element = ELEMENTS[kind]
    found = compare(element, np.array(got, element.dtype), np.array(expected, element.dtype), within)
    assert (found and found.index) == first
    assert (found is None) == (first is None)


def test_a_difference_says_how_much() -> None:
    found = compare(ELEMENTS["i16"], np.array([5, 2, 9], "i2"), np.array([1, 2, 3], "i2"))
    assert found is not None
    assert (found.index, found.got, found.expected, found.differing, found.size, found.distance) == (0, 5, 1, 2, 3, 6)
    assert found.as_json() == {"index": 0, "got": 5, "expected": 1}


def test_a_scalar_has_no_index() -> None:
    found = compare(ELEMENTS["i32"], 5, 6)
    assert found is not None
    assert found.as_json() == {"index": None, "got": 5, "expected": 6}


def test_json_has_no_nan() -> None:
    found = compare(ELEMENTS["f32"], np.float32(np.nan), np.float32(np.inf))
    assert found is not None
    assert found.as_json() == {"index": None, "got": "nan", "expected": "inf"}
    assert found.distance is None


def test_an_overflow_is_no_last_place() -> None:
    """Infinity is one step beyond the largest binary32 number, and still no rounding of it."""
    largest = np.array([np.finfo(np.float32).max], np.float32)
    infinite = np.array([np.inf], np.float32)
    element = ELEMENTS["f32"]
    assert compare(element, infinite, largest, within=2) is not None
    assert compare(element, largest, infinite, within=2) is not None
    assert compare(element, infinite, infinite, within=2) is None
    assert compare(element, -infinite, infinite, within=2) is not None
