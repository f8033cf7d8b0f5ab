"""Many cases of one layout: every array at one place, some inputs different from case to case.

What differs is written into a row a case; formulas of the header that speak of it are worked out case by case, all
others once.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from typing import TYPE_CHECKING, Any

import attrs
import numpy as np

from vliwsim.kernel.binding import Setup, bind, excerpt
from vliwsim.kernel.elements import ELEMENTS, Element, convert
from vliwsim.kernel.interface import Elements, interface_of
from vliwsim.kernel.sizes import formula_value, shown_values
from vliwsim.machine.memory import Region
from vliwsim.problems import InterfaceError, Problem, problem
from vliwsim.program.kernel import Formula, Item, Kernel

if TYPE_CHECKING:
    from vliwsim.native.batch import Plan, Results

MOST_REMEMBERED = 1 << 16
"""Values of scalars for which formulas are not worked out again."""

Inputs = Mapping[str, np.ndarray]
"""By name, in their element's type, an entry a case: matrices for arrays, vectors for scalars."""


def layout_names(kernel: Kernel) -> frozenset[str]:
    """Names whose values decide where arrays stand and what tables hold."""
    names: set[str] = set()
    for item in kernel.items:
        formulas = [item.size, item.over, item.align, item.bank, item.value if item.kind == "table" else None]
        for formula in formulas:
            names |= formula.names if formula is not None else set()
    return frozenset(names)


class Stack:
    """Cases that are laid out as ``setup``. ``varying``: inputs that differ by case; ``carried``: those of
    ``changes`` that each case takes from the one before it.

    ``late``: the computed values that differ with them; ``judged``: so does ``needs``.
    """

    def __init__(self, setup: Setup, varying: Collection[str], carried: Collection[str] = ()) -> None:
        self.setup, self.kernel = setup, setup.kernel
        self.interface = interface_of(setup.kernel)
        self.varying = [name for name in self.interface.inputs if name in varying]
        self.carried = [name for name in self.interface.inputs if name in carried]
        changing = {*self.varying, *self.carried}
        self.late: list[Item] = []
        for item in self.interface.computed:
            assert item.value is not None
            if item.value.names & changing:
                self.late.append(item)
                changing.add(item.name)
        needs = self.kernel.needs
        self.judged = needs is not None and bool(needs.names & changing)
        formulas = [item.value for item in self.late] + ([needs] if self.judged else [])
        spoken = frozenset(name for formula in formulas if formula is not None for name in formula.names)
        self._spoken = [name for name in self.varying if name in spoken]
        self.depends_on_carried = bool(spoken & set(self.carried))
        self._names = setup.names if formulas else {}
        self._remembered: dict[tuple[object, ...], list[int]] = {}
        self.order = self.kernel.core.memory.endianness
        self.values = [n for n, i in self.interface.outputs.items() if i.size is None]
        self.arrays = [n for n, i in self.interface.outputs.items() if i.size is not None]
        self.plan = self._planned()

    @property
    def given(self) -> dict[str, Any]:
        """What a caller gave of sizes, scalars and arrays."""
        setup = self.setup
        known = {**setup.arrays, **setup.values}
        return {**setup.sizes, **{name: known[name] for name in self.interface.inputs}}

    def _planned(self) -> Plan:
        from vliwsim.native.batch import BEFORE, ROW, SHARED, Plan

        setup, late = self.setup, {item.name for item in self.late}
        image = np.zeros(len(self.kernel.core.register_names), np.uint32)
        for number, raw in setup.registers.items():
            image[number] = raw
        values = [(self._register(n), (1 << self.interface.element(n).bytes) - 1) for n in self.values]
        arrays = [(setup.area(n).start, setup.area(n).bytes) for n in self.arrays]
        regions = tuple(Region(a.name, a.start, a.bytes, a.over) for a in setup.areas)
        plan = Plan(regions, image, (), (), tuple(values), tuple(arrays), 0, b"")
        value_places = dict(zip(self.values, plan.value_places, strict=True))
        array_places = dict(zip(self.arrays, plan.array_places, strict=False))
        self.places: dict[str, int] = {}
        registers: list[tuple[int, int, int]] = []
        row = 0
        for item in self.kernel.items:
            if item.register is None or item.size is not None:
                continue
            if item.name in self.carried:
                registers.append((item.register, value_places[item.name], BEFORE))
            elif item.name in late or item.name in self.varying:
                registers.append((item.register, row, ROW))
                self.places[item.name] = row
                row += 4
        pieces: list[tuple[int, int, int, int]] = []
        shared = b""
        names = {area.start: area.name for area in setup.areas}
        for address, data in setup.memory:
            name = names[address]
            if name in self.carried:
                pieces.append((address, len(data), array_places[name], BEFORE))
            elif name in self.varying:
                pieces.append((address, len(data), row, ROW))
                self.places[name] = row
                row += len(data)
            else:
                pieces.append((address, len(data), len(shared), SHARED))
                shared += data
        return attrs.evolve(plan, registers=tuple(registers), pieces=tuple(pieces), row=row, shared=shared)

    def _register(self, name: str) -> int:
        number = self.interface.items[name].register
        assert number is not None
        return number

    # ------------------------------------------------------------------------------------------------------- inputs

    def rows(self, given: Mapping[str, Any], label: Callable[[int], str]) -> tuple[np.ndarray, Inputs]:
        """The rows of some cases, and their inputs as they were converted.

        ``given``: for every varying input an array whose first axis is the case. ``label`` names a case, by its number
        in these. Raises :class:`~vliwsim.problems.InterfaceError` for the first case that does not fit.
        """
        inputs = {name: self._converted(name, given[name], label) for name in self.varying}
        count = len(next(iter(inputs.values()))) if inputs else 0
        made = np.zeros((count, self.plan.row), np.uint8)
        for name, array in inputs.items():
            item, element = self.interface.items[name], self.interface.element(name)
            at = self.places.get(name)
            if at is None:
                continue
            if item.size is None:
                made[:, at : at + 4] = raw_values(element, array).view(np.uint8).reshape(count, 4)
            else:
                stored = np.ascontiguousarray(array.astype(element.stored(self.order), copy=False))
                size = stored.shape[1] * element.bytes
                made[:, at : at + size] = stored.view(np.uint8).reshape(count, size)
        if self.late or self.judged:
            self._late_values(made, inputs, label)
        return made, inputs

    def _converted(self, name: str, array: Any, label: Callable[[int], str]) -> np.ndarray:
        element = self.interface.element(name)
        if isinstance(array, np.ndarray) and array.dtype == element.dtype:
            return array
        converted = convert(element, array, name)
        if converted.array is not None:
            return converted.array
        for case, one in enumerate(array):
            problems = convert(element, one, name).problems
            if problems:
                raise InterfaceError([of_case(p, label(case)) for p in problems])
        raise InterfaceError(converted.problems)

    def _late_values(self, made: np.ndarray, inputs: Inputs, label: Callable[[int], str]) -> None:
        scalars = [name for name in self._spoken if self.interface.items[name].size is None]
        arrays = [name for name in self._spoken if self.interface.items[name].size is not None]
        columns = [inputs[name].tolist() for name in scalars]
        places = [self.places[item.name] for item in self.late if item.name in self.places]
        raws = np.zeros((len(made), len(places)), np.uint32)
        for case in range(len(made)):
            values = tuple(column[case] for column in columns)
            raw = None if arrays else self._remembered.get(values)
            if raw is None:
                names = dict(zip(scalars, values, strict=True))
                raw = self._work_out({**names, **{n: Elements(inputs[n][case]) for n in arrays}}, case, label)
                if not arrays and len(self._remembered) < MOST_REMEMBERED:
                    self._remembered[values] = raw
            raws[case] = raw
        for k, at in enumerate(places):
            made[:, at : at + 4] = np.ascontiguousarray(raws[:, k]).view(np.uint8).reshape(-1, 4)

    def _work_out(self, own: Mapping[str, Any], case: int, label: Callable[[int], str]) -> list[int]:
        """Raw values of what is computed for one case; ``needs`` is judged."""
        names, problems = {**self._names, **own}, []  # type: ignore[var-annotated]
        raws = []
        for item in self.late:
            assert item.value is not None
            value = formula_value(item.value, names, problems)
            element = ELEMENTS[item.type]
            converted = convert(element, int(value) if isinstance(value, bool) else value, item.name)
            if problems or converted.array is None:
                found = problems or [attrs.evolve(p, place=item.place) for p in converted.problems]
                raise InterfaceError([of_case(p, label(case)) for p in found])
            names[item.name] = converted.array[()].item()
            if item.name in self.places:
                raws.append(element.raw(converted.array[()]))
        needs = self.kernel.needs
        if self.judged and needs is not None:
            held = formula_value(needs, names, problems)
            if held is not None and not held:
                problems.append(_violated(self.kernel, needs, names))
            if problems:
                raise InterfaceError([of_case(p, label(case)) for p in problems])
        return raws

    def setup_of(self, inputs: Inputs, case: int, carried: Mapping[str, Any] | None = None) -> Setup:
        """The setup of one case as the reference sees it; registers and memory are those of the first.

        ``carried``: what the case before left.
        """
        own: dict[str, Any] = {name: inputs[name][case] for name in self.varying}
        own |= carried or {}
        if self.late:
            return bind(self.kernel, {**self.given, **own})
        values, arrays = dict(self.setup.values), dict(self.setup.arrays)
        for name, value in own.items():
            if self.interface.items[name].size is not None:
                arrays[name] = value
            else:
                element = self.interface.element(name)
                values[name] = np.float32(value) if element.floating else int(value)
        return attrs.evolve(self.setup, values=values, arrays=arrays)

    # ------------------------------------------------------------------------------------------------------- outputs

    def outputs(self, results: Results) -> dict[str, np.ndarray]:
        """Outputs by name in their element's type: vectors of scalars, matrices of arrays, a row a case."""
        found: dict[str, np.ndarray] = {}
        for k, name in enumerate(self.values):
            found[name] = from_raw_values(self.interface.element(name), results.value(k))
        for k, name in enumerate(self.arrays):
            element, data = self.interface.element(name), results.array(k)
            shape = (len(data), data.shape[1] // element.bytes)
            stored = np.frombuffer(data.tobytes(), element.stored(self.order)).reshape(shape)
            found[name] = stored.astype(element.dtype)
        return {name: found[name] for name in self.interface.outputs}

    def before(self, carried: Mapping[str, Any]) -> np.ndarray:
        """A result whose outputs are these: what the first case takes for the result before it."""
        made = np.zeros(self.plan.result, np.uint8)
        for name, at in zip(self.values, self.plan.value_places, strict=True):
            if name in carried:
                made[at : at + 4] = np.array([self.interface.element(name).raw(carried[name])], np.uint32).view(
                    np.uint8
                )
        for name, at in zip(self.arrays, self.plan.array_places, strict=False):
            if name in carried:
                stored = np.asarray(carried[name]).astype(self.interface.element(name).stored(self.order))
                made[at : at + stored.nbytes] = stored.view(np.uint8)
        return made


def raw_values(element: Element, array: np.ndarray) -> np.ndarray:
    """32-bit register values of a vector of this type."""
    if element.floating:
        return np.ascontiguousarray(array, np.float32).view(np.uint32)
    return (array.astype(np.int64) & 0xFFFFFFFF).astype(np.uint32)


def from_raw_values(element: Element, raw: np.ndarray) -> np.ndarray:
    """The inverse of :func:`raw_values`; what is above the element's bits is not looked at."""
    return raw.astype(f"u{element.bytes}").view(element.dtype).copy()


def of_case(one: Problem, label: str) -> Problem:
    """The problem, said of a case."""
    return attrs.evolve(one, found=f"{label}: {one.found}")


def _violated(kernel: Kernel, needs: Formula, names: Mapping[str, Any]) -> Problem:
    found = f"needs does not hold{shown_values(needs.names, names)}"
    line = excerpt(kernel, needs.place)
    return problem("needs-violated", found, needs.text.strip(), place=needs.place, excerpt=line)
