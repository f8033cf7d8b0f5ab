"""What a finished run gives back, as NumPy arrays and numbers."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

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


def read_outputs(
    setup: Setup, registers: Sequence[Value], read_memory: ReadMemory
) -> tuple[Mapping[str, Output], tuple[Problem, ...]]:
    """Every output by name, in interface order, and one ``undefined-output`` problem for each that is not all defined.

    Arrays have their element's NumPy type in the host's byte order; undefined elements read as 0. A scalar narrower
    than a register is its low bits.
    """
    outputs: dict[str, Output] = {}
    problems: list[Problem] = []
    for name, item in interface_of(setup.kernel).outputs.items():
        if item.size is None:
            assert item.register is not None
            outputs[name], bad = _scalar(item, registers[item.register])
            found = f"{name} was never given a value" if bad else ""
        else:
            outputs[name], undefined = _array(setup, item, read_memory)
            bad = bool(undefined.any())
            found = _first(name, undefined) if bad else ""
        if bad:
            line = excerpt(setup.kernel, item.place)
            problems.append(
                problem(
                    "undefined-output", found, "every element defined", place=item.place, excerpt=line, kind="illegal"
                )
            )
    return outputs, tuple(problems)


def _scalar(item: Item, value: Value) -> tuple[Output, bool]:
    element = ELEMENTS[item.type]
    bits, unknown = parts(value)
    return element.from_raw(bits), bool(unknown & ((1 << element.bytes) - 1))


def _array(setup: Setup, item: Item, read_memory: ReadMemory) -> tuple[np.ndarray, np.ndarray]:
    element, area = ELEMENTS[item.type], setup.area(item.name)
    data, undefined = read_memory(area.start, area.bytes)
    flags = np.frombuffer(undefined, np.uint8).reshape(-1, element.bytes).max(axis=1, initial=0) > 0
    array = np.frombuffer(data, element.stored(setup.kernel.core.memory.endianness)).astype(element.dtype)
    array[flags] = 0
    return array, flags


def _first(name: str, undefined: np.ndarray) -> str:
    index = int(np.flatnonzero(undefined)[0])
    count = int(np.count_nonzero(undefined))
    return f"{name}[{index}] is undefined" + (
        f", and {count - 1} more of {len(undefined)} elements" if count > 1 else ""
    )
