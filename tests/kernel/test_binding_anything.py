"""Whatever is given, binding either makes a setup or says why not."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from vliwsim.kernel.binding import bind
from vliwsim.kernel.elements import ELEMENTS, convert
from vliwsim.problems import InterfaceError, Problem

from .sources import header

KERNEL = header("""
    given   x    : i16[n]        at g1
    given   c    : q15[taps]     at g2 align 2 * taps
    given   k    : f32           in g3
    changes acc  : u8[n]         at g4
    given   half : i32 = n // taps in g5
    returns y    : i32[n - taps] at g6
    needs   n >= taps
""")

NUMBERS = st.one_of(st.integers(), st.floats(), st.booleans(), st.none(), st.complex_numbers(), st.text(max_size=3))
DTYPES = st.one_of(arrays.scalar_dtypes(), arrays.nested_dtypes(max_itemsize=16))
ANYTHING: st.SearchStrategy[Any] = st.one_of(
    NUMBERS,
    st.lists(NUMBERS, max_size=6),
    st.lists(st.integers(-300, 300), max_size=6),
    st.lists(st.lists(NUMBERS, max_size=2), max_size=3),
    arrays.arrays(DTYPES, arrays.array_shapes(min_dims=0, max_side=4)),
)
NAMES = st.sampled_from(["x", "c", "k", "acc", "half", "y", "n", "taps", "z", ""])


@settings(max_examples=300, deadline=None)
@given(st.dictionaries(NAMES, ANYTHING, max_size=8))
def test_anything_binds_or_is_refused(inputs: dict[str, Any]) -> None:
    said: tuple[Problem, ...] = ()
    try:
        bind(KERNEL, inputs)
    except InterfaceError as error:
        said = error.problems
    assert all(str(problem) for problem in said)


@settings(max_examples=300, deadline=None)
@given(st.sampled_from(sorted(ELEMENTS)), ANYTHING)
def test_converted_values_fit_their_type(kind: str, value: Any) -> None:
    element = ELEMENTS[kind]
    converted = convert(element, value, "x")
    assert (converted.array is None) == bool(converted.problems)
    if converted.array is not None:
        assert converted.array.dtype == element.dtype
        assert not np.shares_memory(converted.array, np.asarray(value))


@settings(max_examples=200, deadline=None)
@given(st.sampled_from(["q15", "q31"]), st.lists(st.floats(-3, 3), min_size=1, max_size=8))
def test_scaling_equals_exact_arithmetic(kind: str, values: list[float]) -> None:
    """Rounding to nearest even, then saturation, in exact rationals: Python's round() of a Fraction."""
    from fractions import Fraction

    element = ELEMENTS[kind]
    array = convert(element, values, "x").array
    assert array is not None
    exact = [max(element.low, min(element.high, round(Fraction(v) * 2 ** (element.fraction or 0)))) for v in values]
    assert array.tolist() == exact


@settings(max_examples=200, deadline=None)
@given(st.sampled_from(sorted(ELEMENTS)), st.integers(0, 2**32 - 1))
def test_registers_and_values_agree(kind: str, bits: int) -> None:
    element = ELEMENTS[kind]
    value = element.from_raw(bits)
    mask = (1 << 8 * element.bytes) - 1
    if not (element.floating and np.isnan(value)):  # a NaN's payload may change on its way through NumPy
        assert element.raw(value) & mask == bits & mask
