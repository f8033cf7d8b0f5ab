"""Recordings cut into frames: what each run of a kernel takes of an array far longer than one run takes.

Frame k of a signal begins at sample k * hop - lead; before the first sample there are zeros. The last samples, where
they fill no frame, are left out, or filled up with zeros. A matrix is cut already, a row a frame; a scalar input has a
value a frame, given as a vector or as an expression of the frame's number.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.elements import Element, convert, rounding_note, scaling_note
from vliwsim.problems import InterfaceError, Problem, SourceError, problem
from vliwsim.program.kernel import Formula
from vliwsim.program.source.expressions import formula as parsed

BLOCK = 1 << 20
"""Values that are looked at together before anything runs."""

NUMBER = "frame"
"""The name of the frame's number, from 0, in an expression."""


@attrs.frozen(eq=False)
class Signal:
    """One array input, one dimension, cut into frames of ``length`` samples."""

    name: str
    element: Element
    samples: np.ndarray
    length: int
    hop: int
    lead: int
    padded: bool

    @property
    def count(self) -> int:
        """Frames there are."""
        over = self.lead + len(self.samples) - self.length
        if self.padded:
            return -(-over // self.hop) + 1 if over > 0 else int(len(self.samples) > 0)
        return over // self.hop + 1 if over >= 0 else 0

    def rest(self, count: int) -> int:
        """Samples behind the last of ``count`` frames; negative, zeros that fill it up."""
        end = (count - 1) * self.hop - self.lead + self.length if count else 0
        return len(self.samples) - end

    def frames(self, first: int, last: int) -> np.ndarray:
        """The frames from ``first`` to ``last``, the end excluded, a row each, in the element's type."""
        begin, end = first * self.hop - self.lead, (last - 1) * self.hop - self.lead + self.length
        inside = self.samples[max(0, begin) : max(0, min(end, len(self.samples)))]
        array = convert(self.element, np.asarray(inside), self.name).array
        assert array is not None  # all of it has been looked at
        if begin < 0 or end > len(self.samples):
            whole = np.zeros(end - begin, self.element.dtype)
            at = max(0, -begin)
            whole[at : at + len(array)] = array
            array = whole
        if not self.length:
            return np.zeros((last - first, 0), self.element.dtype)
        return np.lib.stride_tricks.sliding_window_view(array, self.length)[:: self.hop]


@attrs.frozen(eq=False)
class Rows:
    """One input with an entry a frame: of an array a row of a matrix, of a scalar a number of a vector."""

    name: str
    element: Element
    samples: np.ndarray

    @property
    def count(self) -> int:
        return len(self.samples)

    def frames(self, first: int, last: int) -> np.ndarray:
        array = convert(self.element, np.asarray(self.samples[first:last]), self.name).array
        assert array is not None
        return array


@attrs.frozen(eq=False)
class Computed:
    """One scalar input as an expression of the frame's number, and of ``names``."""

    name: str
    element: Element
    formula: Formula
    names: Mapping[str, Any]

    count = None  # as many as anybody asks for

    def frames(self, first: int, last: int) -> np.ndarray:
        values = []
        for frame in range(first, last):
            value = value_of(f"{self.name} of frame {frame}", self.formula, {**self.names, NUMBER: frame})
            converted = convert(self.element, int(value) if isinstance(value, bool) else value, self.name)
            if converted.array is None:
                raise InterfaceError([attrs.evolve(p, found=f"frame {frame}: {p.found}") for p in converted.problems])
            values.append(converted.array[()])
        return np.array(values, self.element.dtype)


Source = Signal | Rows | Computed


def judge(source: Signal | Rows, look: Callable[[], bool] | None = None) -> tuple[Problem, ...]:
    """Look at all values before anything runs; notes of what becomes of them.

    Raises :class:`~vliwsim.problems.InterfaceError` for the first that does not fit, with its number.
    """
    samples, element, name = source.samples, source.element, source.name
    if samples.dtype == element.dtype:
        return ()
    flat, saturated, rounded = samples.reshape(-1) if samples.flags.c_contiguous else samples.ravel(), 0, 0
    for first in range(0, len(flat), BLOCK):
        block = np.asarray(flat[first : first + BLOCK])
        converted = convert(element, block, name)
        if converted.problems:
            raise InterfaceError(_first(element, block, first, name, samples.shape, converted.problems))
        saturated, rounded = saturated + converted.saturated, rounded + converted.rounded
        if look and look():
            break
    if element.fraction is not None and samples.dtype.kind == "f":
        return scaling_note(element, name, saturated, samples.size)
    return rounding_note(name, rounded, samples.size)


def _first(
    element: Element, block: np.ndarray, first: int, name: str, shape: tuple[int, ...], problems: tuple[Problem, ...]
) -> list[Problem]:
    """The problems of the first value that has any, called by its place in the whole."""
    low, high = 0, len(block)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if convert(element, block[low:middle], name).problems else (middle, high)
    where = first + low
    place = f"{name}[{where}]" if len(shape) == 1 else f"{name}[{where // shape[1]}, {where % shape[1]}]"
    return list(convert(element, block[low], place).problems or problems)


def expression(what: str, text: str) -> Formula:
    """An expression that somebody gives; raises :class:`~vliwsim.problems.InterfaceError` where it is none."""
    try:
        return parsed(text)
    except SourceError as error:
        raise InterfaceError(_said_of(what, error)) from None


def value_of(what: str, formula: Formula, names: Mapping[str, Any]) -> Any:
    """The value of an expression that somebody gave."""
    try:
        return formula.value(names)
    except SourceError as error:
        raise InterfaceError(_said_of(what, error)) from None


def _said_of(what: str, error: SourceError) -> list[Problem]:
    return [attrs.evolve(p, found=f"{what}: {p.found}", place=None, excerpt="") for p in error.problems]


def whole_number(what: str, value: object, least: int) -> int:
    """A hop or lead; raises :class:`~vliwsim.problems.InterfaceError`."""
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, (int, np.integer)) or value < least:
        raise InterfaceError(problem("frame-step", f"{what} is {value!r:.40}", f"a whole number, {least} or more"))
    return int(value)
