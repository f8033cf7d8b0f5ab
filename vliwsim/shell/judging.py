"""Outputs against the reference, so far: what is written already and is not what the reference expects."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import attrs
import numpy as np

from vliwsim.description.values import Undefined, Value, parts
from vliwsim.kernel.compare import Difference, compare
from vliwsim.kernel.elements import ELEMENTS
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.outputs import Output
from vliwsim.kernel.sizes import formula_value
from vliwsim.machine.state import State
from vliwsim.problems import Problem
from vliwsim.shell.faults import unclear
from vliwsim.shell.terms import Names


@attrs.frozen(eq=False)
class Verdict:
    """One output so far: ``written`` of ``size`` elements judged, the first ``difference`` among them, if any."""

    name: str
    written: int
    size: int
    difference: Difference | None


class Judge:
    """Compares states with what the reference ``expected`` (None where there is none)."""

    def __init__(self, names: Names, expected: Mapping[str, Output] | None) -> None:
        self.names = names
        self.expected = expected
        self._items = interface_of(names.setup.kernel).outputs

    def within(self, name: str) -> int | None:
        """Units in the last place that the source allows."""
        formula = self._items[name].within
        problems: list[Problem] = []
        value = None if formula is None else formula_value(formula, self.names.setup.names, problems)
        return int(value) if isinstance(value, int) and not problems else None

    def verdicts(self, state: State, wanted: Sequence[str] | None = None) -> list[Verdict]:
        """Of every wanted output, or all. A scalar is judged once the run is over."""
        return [
            self._array(state, n) if n in self.names.arrays else self._scalar(state, n) for n in self._names(wanted)
        ]

    def wrong(self, state: State, wanted: Sequence[str] | None = None) -> Verdict | None:
        """The first output with a wrong element."""
        return next((v for v in self.verdicts(state, wanted) if v.difference), None)

    def _names(self, wanted: Sequence[str] | None) -> Sequence[str]:
        if self.expected is None:
            raise unclear("there is no reference to judge by", "a reference.py beside the source", name="no-reference")
        return tuple(self._items) if wanted is None else wanted

    def _scalar(self, state: State, name: str) -> Verdict:
        assert self.expected is not None
        if not state.finished:
            return Verdict(name, 0, 1, None)
        register, element = self.names.scalars[name]
        bits, unknown = parts(state.operands[register])
        flags = np.array(unknown & ((1 << element.bytes) - 1) != 0)
        got = element.from_raw(bits)
        return Verdict(name, 1, 1, compare(element, got, self.expected[name], self.within(name), flags))

    def _array(self, state: State, name: str) -> Verdict:
        assert self.expected is not None
        array = self.names.arrays[name]
        element = array.element
        data, unknown = state.memory.read(array.start, array.length * element.bytes)
        flags = np.frombuffer(unknown, np.uint8).reshape(-1, element.bytes).max(axis=1, initial=0) > 0
        got = np.frombuffer(data, element.stored(array.endianness)).astype(element.dtype)
        expected = np.asarray(self.expected[name], element.dtype)
        if state.finished:
            written = np.ones(len(got), bool)
        elif name in self.names.setup.arrays:  # changes: what differs from what was given has been written
            given = self.names.setup.arrays[name]
            bits = np.uint32 if element.floating else element.dtype
            written = (got.view(bits) != given.view(bits)) | flags
        else:
            written = ~flags
        shown = np.where(written, got, expected).astype(element.dtype)
        difference = compare(element, shown, expected, self.within(name), flags & written)
        return Verdict(name, int(np.count_nonzero(written)), len(got), difference)

    def stores_wrong(self, stores: Sequence[tuple[int, int, Value]], wanted: Sequence[str] | None) -> bool:
        """Whether any element that these stores write whole is not what the reference expects."""
        assert self.expected is not None
        names = self._names(wanted)
        order = self.names.setup.kernel.core.memory.endianness
        for address, size, value in stores:
            found = self.names.array_at(address)
            if found is None or found[0].name not in names:
                continue
            array, index = found
            bits, unknown = parts(value, size)
            data = bits.to_bytes(size, "little" if order == "little" else "big")
            element = ELEMENTS[array.element.name]
            for k in range(size // element.bytes):
                piece = data[k * element.bytes : (k + 1) * element.bytes]
                raw = int.from_bytes(piece, "little" if order == "little" else "big")
                expected = np.asarray(self.expected[array.name])
                if index + k >= array.length:
                    break
                got = np.array([element.from_raw(raw)], element.dtype)
                flags = np.array([isinstance(value, Undefined) and unknown != 0])
                one = expected[index + k : index + k + 1]
                if compare(element, got, one, self.within(array.name), flags):
                    return True
        return False
