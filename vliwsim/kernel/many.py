"""Many cases of one kernel at once: one translation, a compiled loop over the cases, all processors."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.binding import Setup, bind
from vliwsim.kernel.elements import ELEMENTS, convert
from vliwsim.kernel.interface import Interface, interface_of
from vliwsim.kernel.runner import LIMIT, KernelRun, run_kernel
from vliwsim.machine.memory import DEFINED, Region
from vliwsim.machine.stepper import Machine
from vliwsim.problems import InterfaceError, Problem, problem
from vliwsim.program.kernel import Kernel

MOST_SINGLE = 1000
"""Cases that are run one by one because the compiled loop gives them back; with more it is refused."""


@attrs.frozen(eq=False)
class ManyRuns:
    """``outputs`` by name, a row a case; ``cycles`` of each, drain included; ``exceptions``: runs that did not end
    with all outputs defined, by case number (their rows hold what there is: zeros where nothing is)."""

    kernel: Kernel
    outputs: Mapping[str, np.ndarray]
    cycles: np.ndarray
    exceptions: Mapping[int, KernelRun]

    @property
    def ok(self) -> bool:
        return not self.exceptions


def run_many(
    kernel: Kernel,
    arrays: Mapping[str, Any],
    *,
    limit: int = LIMIT,
    progress: Callable[[int], None] | None = None,
) -> ManyRuns:
    """Run ``kernel`` on many cases: of every array input a matrix, a row a case; scalars and sizes are shared.

    ``limit``: cycles a case. ``progress`` is called with the number of cases done. Nothing is compared: the outputs are
    matrices, ready to be held against a reference computed at once. Raises
    :class:`~vliwsim.problems.InterfaceError` for inputs that do not fit.
    """
    interface = interface_of(kernel)
    names = [item.name for item in interface.inputs.values() if item.size is not None and item.name in arrays]
    count, stacked = _stacked(interface, arrays, names)
    setup = bind(kernel, {**arrays, **{name: stacked[name][0] for name in names}})
    _judge_formulas(interface, names)
    batch, rows = _prepared(setup, stacked)
    fuel = max(0, (limit - batch.plain.region.reach) // batch.plain.region.span - 1)
    parts = batch.parts(batch.run(rows, count, fuel, progress))
    return _gathered(setup, parts, arrays, names, limit)


def _stacked(interface: Interface, arrays: Mapping[str, Any], names: list[str]) -> tuple[int, dict[str, np.ndarray]]:
    """Number of cases, and the matrices in their elements' types."""
    problems: list[Problem] = []
    found: dict[str, np.ndarray] = {}
    for name in names:
        converted = convert(interface.element(name), arrays[name], name)
        problems += converted.problems
        if converted.array is not None and converted.array.ndim != 2:
            given = f"{name} has {converted.array.ndim} dimensions"
            problems.append(problem("array-shape", given, "a matrix, a row a case"))
        elif converted.array is not None:
            found[name] = converted.array
    counts = {name: len(array) for name, array in found.items()}
    if not problems and (not counts or len(set(counts.values())) > 1 or 0 in counts.values()):
        shown = ", ".join(f"{name}: {n} rows" for name, n in counts.items()) or "no array"
        problems.append(problem("case-count", shown, "arrays of as many rows as there are cases, at least one"))
    if problems:
        raise InterfaceError(problems)
    return next(iter(counts.values())), found


def _judge_formulas(interface: Interface, names: list[str]) -> None:
    """A formula that looks at an array's elements may have another value in each case."""
    formulas = [i.value for i in interface.computed] + [interface.kernel.needs]
    looking = sorted({n for f in formulas if f is not None for n in f.names & set(names)})
    if looking:
        found = f"a formula of {interface.kernel.name} looks into {', '.join(looking)}"
        raise InterfaceError([problem("not-for-many", found, "formulas of sizes and scalars", "run the cases singly")])


def _prepared(setup: Setup, stacked: Mapping[str, np.ndarray]) -> tuple[Any, Callable[[int, int], np.ndarray]]:
    from vliwsim.native.batch import Batch

    kernel, memory = setup.kernel, setup.kernel.core.memory
    interface = interface_of(kernel)
    areas = {area.start: area for area in setup.areas}
    outputs = [setup.area(name) for name, item in interface.outputs.items() if item.size is not None]
    batch = Batch(
        Machine(kernel.program),
        sorted(setup.registers),
        [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas],
        [(address, len(data)) for address, data in setup.memory],
        [(area.start, area.bytes) for area in outputs],
    )
    image = np.zeros(batch.registers, np.uint32)
    for number, value in setup.registers.items():
        image[number] = value

    def rows(first: int, last: int) -> np.ndarray:
        made = np.zeros((last - first, batch.row), np.uint8)
        made[:, : 4 * batch.registers] = image.view(np.uint8)
        at = 4 * batch.registers
        for address, data in setup.memory:
            name = areas[address].name
            if name in stacked:
                stored = stacked[name][first:last].astype(interface.element(name).stored(memory.endianness))
                made[:, at : at + len(data)] = stored.view(np.uint8).reshape(last - first, len(data))
            else:
                made[:, at : at + len(data)] = np.frombuffer(data, np.uint8)
            at += len(data)
        return made

    return batch, rows


def _gathered(
    setup: Setup, parts: Mapping[str, np.ndarray], arrays: Mapping[str, Any], names: list[str], limit: int
) -> ManyRuns:
    """Outputs in their types; what did not end well is run again by itself."""
    interface, order = interface_of(setup.kernel), setup.kernel.core.memory.endianness
    good = parts["finished"].copy() & (parts["cycles"] <= limit)
    outputs: dict[str, np.ndarray] = {}
    k = 0
    for name, item in interface.outputs.items():
        element = ELEMENTS[item.type]
        if item.size is None:
            assert item.register is not None
            raw = parts["registers"][:, item.register]
            narrow = raw.astype(f"u{element.bytes}")
            outputs[name] = narrow.view(element.dtype).copy()
            good &= parts["masks"][:, item.register] & (1 << element.bytes) - 1 == 0
        else:
            data = np.ascontiguousarray(parts[f"data {k}"])
            outputs[name] = data.view(element.stored(order)).astype(element.dtype)
            good &= (parts[f"status {k}"] == DEFINED).all(axis=1)
            k += 1
    cycles = parts["cycles"].copy()
    again = np.flatnonzero(~good).tolist()
    if len(again) > MOST_SINGLE:
        found = f"{len(again)} cases, such as number {again[0]}, do not run through by themselves"
        raise InterfaceError([problem("not-for-many", found, f"at most {MOST_SINGLE} such cases", "run one singly")])
    exceptions = {}
    for case in again:
        single = {**arrays, **{name: np.asarray(arrays[name])[case] for name in names}}
        run = run_kernel(setup.kernel, single, case=f"number {case}", reference=None, limit=limit)
        cycles[case] = run.cycles
        for name, value in run.outputs.items():
            outputs[name][case] = value
        if run.reason != "halt" or run.problems:
            exceptions[case] = run
    return ManyRuns(setup.kernel, outputs, cycles, exceptions)
