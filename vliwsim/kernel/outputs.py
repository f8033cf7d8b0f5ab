"""What a finished run gives back, as NumPy arrays and numbers."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import NamedTuple

import numpy as np

from vliwsim.description.values import Value, parts
from vliwsim.kernel.binding import Setup, excerpt
from vliwsim.kernel.elements import ELEMENTS
from vliwsim.kernel.interface import interface_of
from vliwsim.problems import Problem, problem
from vliwsim.program.kernel import Item

Output = np.ndarray | int | np.float32
ReadMemory = Callable[[int, int], tuple[bytes, bytes]]
"""(address, bytes) → the bytes, and for each a 1 if it is undefined."""


class Outputs(NamedTuple):
    """``values`` by name in interface order; ``undefined``: for each, which elements are (0-dimensional for a scalar).

    ``problems``: one ``undefined-output`` for each output that is not all defined.
    """

    values: Mapping[str, Output]
    undefined: Mapping[str, np.ndarray]
    problems: tuple[Problem, ...]


def read_outputs(setup: Setup, registers: Sequence[Value], read_memory: ReadMemory) -> Outputs:
    """Every output of a finished run.

    Arrays have their element's NumPy type in the host's byte order; undefined elements read as 0. A scalar narrower
    than a register is its low bits.
    """
    values: dict[str, Output] = {}
    undefined: dict[str, np.ndarray] = {}
    problems: list[Problem] = []
    for name, item in interface_of(setup.kernel).outputs.items():
        if item.size is None:
            assert item.register is not None
            values[name], flags = _scalar(item, registers[item.register])
        else:
            values[name], flags = _array(setup, item, read_memory)
        undefined[name] = flags
        if flags.any():
            found, line = _first(name, flags), excerpt(setup.kernel, item.place)
            problems.append(
                problem(
                    "undefined-output", found, "every element defined", place=item.place, excerpt=line, kind="illegal"
                )
            )
    return Outputs(values, undefined, tuple(problems))


def _scalar(item: Item, value: Value) -> tuple[Output, np.ndarray]:
    element = ELEMENTS[item.type]
    bits, unknown = parts(value)
    return element.from_raw(bits), np.array(unknown & ((1 << element.bytes) - 1) != 0)


def _array(setup: Setup, item: Item, read_memory: ReadMemory) -> tuple[np.ndarray, np.ndarray]:
    element, area = ELEMENTS[item.type], setup.area(item.name)
    data, undefined = read_memory(area.start, area.bytes)
    flags = np.frombuffer(undefined, np.uint8).reshape(-1, element.bytes).max(axis=1, initial=0) > 0
    array = np.frombuffer(data, element.stored(setup.kernel.core.memory.endianness)).astype(element.dtype)
    array[flags] = 0
    return array, flags


def _first(name: str, undefined: np.ndarray) -> str:
    if undefined.ndim == 0:
        return f"{name} is undefined"
    index = int(np.flatnonzero(undefined)[0])
    count = int(np.count_nonzero(undefined))
    return f"{name}[{index}] is undefined" + (
        f", and {count - 1} more of {len(undefined)} elements" if count > 1 else ""
    )
