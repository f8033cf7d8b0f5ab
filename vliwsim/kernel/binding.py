"""Binding: what a caller gives, by name, becomes registers and memory to start a kernel with.

Everything is judged before anything runs: unknown and missing names, types, ranges, lengths, sizes, ``needs``, and
whether the arrays fit into data memory. All problems come in one :class:`~vliwsim.problems.InterfaceError`.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.elements import ELEMENTS, convert
from vliwsim.kernel.files import read_npy
from vliwsim.kernel.interface import Elements, Interface, interface_of
from vliwsim.kernel.placement import Area, place
from vliwsim.kernel.sizes import Sizes, formula_value, shown_values
from vliwsim.problems import InterfaceError, Place, Problem, problem
from vliwsim.program.kernel import Formula, Item, Kernel


@attrs.frozen(eq=False)
class Setup:
    """A kernel ready to start.

    ``registers``: raw start value by register number; all others start undefined. ``memory``: (address, bytes) pieces
    that start defined. ``areas``: where every array stands. ``sizes``: value by size name. ``values``: every scalar by
    name, as Python int or numpy.float32 (q types as their raw integer). ``arrays``: given arrays and tables in their
    NumPy type. ``notes``: what was converted on the way.
    """

    kernel: Kernel = attrs.field(repr=lambda kernel: kernel.name)
    registers: Mapping[int, int]
    memory: tuple[tuple[int, bytes], ...] = attrs.field(repr=False)
    areas: tuple[Area, ...]
    sizes: Mapping[str, int]
    values: Mapping[str, int | np.float32]
    arrays: Mapping[str, np.ndarray] = attrs.field(repr=False)
    notes: tuple[Problem, ...]

    @property
    def names(self) -> dict[str, Any]:
        """Values for formulas: constants, sizes, scalars, arrays, ``addr(x)`` and ``len(x)``."""
        return formula_names(self.kernel, self.sizes, self.values, self.arrays, self.areas)

    def area(self, name: str) -> Area:
        return next(area for area in self.areas if area.name == name)


def formula_names(
    kernel: Kernel,
    sizes: Mapping[str, Any],
    values: Mapping[str, Any],
    arrays: Mapping[str, np.ndarray],
    areas: tuple[Area, ...],
) -> dict[str, Any]:
    """The environment that the formulas of a kernel are evaluated in; f32 scalars become Python floats.

    ``addr(x)`` is an array's address in memory, or a label's in code where no array is called so.
    """
    names: dict[str, Any] = {**kernel.constants, **sizes}
    names |= {k: float(v) if isinstance(v, np.floating) else v for k, v in values.items()}
    names |= {name: Elements(array) for name, array in arrays.items()}
    names |= {f"addr({label})": address for label, address in kernel.program.labels.items()}
    types = {item.name: ELEMENTS[item.type] for item in kernel.items}
    for area in areas:
        names[f"addr({area.name})"] = area.start
        names[f"len({area.name})"] = area.bytes // types[area.name].bytes
    return names


def bind(kernel: Kernel, given: Mapping[str, object]) -> Setup:
    """Bind ``given`` (arrays, scalars and sizes by name) to the interface of ``kernel``.

    Raises :class:`~vliwsim.problems.InterfaceError` with every problem found.
    """
    return _Binder(interface_of(kernel), given).bind()


class _Binder:
    """One binding in the making; a stage runs only when those before it left no problem."""

    def __init__(self, interface: Interface, given: Mapping[str, object]) -> None:
        self.interface = interface
        self.kernel = interface.kernel
        self.given = given
        self.problems: list[Problem] = []
        self.notes: list[Problem] = []
        self.sizes: dict[str, int] = {}
        self.values: dict[str, int | np.float32] = {}
        self.arrays: dict[str, np.ndarray] = {}
        self.areas: tuple[Area, ...] = ()
        self.lengths: dict[str, int] = {}
        self.registers: dict[int, int] = {}
        self.needs_judged = False

    def bind(self) -> Setup:
        for stage in (
            self._convert,
            self._solve,
            self._judge_needs,
            self._place,
            self._tables,
            self._compute,
            self._judge_needs,
        ):
            stage()
            if self.problems:
                raise InterfaceError(self.problems)
        self._fill_registers()
        return Setup(
            self.kernel,
            self.registers,
            self._pieces(),
            self.areas,
            self.sizes,
            self.values,
            self.arrays,
            tuple(self.notes),
        )

    def _names(self) -> dict[str, Any]:
        return formula_names(self.kernel, self.sizes, self.values, self.arrays, self.areas)

    def _convert(self) -> None:
        """Names, then types and values, of everything given."""
        inputs, sizes = self.interface.inputs, self.interface.size_names
        for name, value in self.given.items():
            if name in inputs:
                self._convert_one(inputs[name], value)
            elif name in sizes:
                self._size(name, value)
            else:
                self.problems.append(self._unknown(name))
        missing = [name for name in inputs if name not in self.given and not self._solvable(inputs[name])]
        if missing:
            wanted = ", ".join(f"{n}: {describe(inputs[n])}" for n in missing)
            remedy = " ".join(f"--give {n}={'FILE.npy' if inputs[n].size is not None else '…'}" for n in missing)
            self.problems.append(problem("missing-input", f"nothing is given for {wanted}", "every input", remedy))

    def _solvable(self, item: Item) -> bool:
        """A scalar that an array's size formula names may follow from the array."""
        return item.size is None and any(
            a.size is not None and item.name in a.size.names for a in self.interface.inputs.values()
        )

    def _convert_one(self, item: Item, value: object) -> None:
        converted = convert(ELEMENTS[item.type], value, item.name)
        self.problems += converted.problems
        self.notes += converted.notes
        if converted.array is None:
            return
        array = converted.array
        if array.ndim != (0 if item.size is None else 1):
            found = "one number" if array.ndim == 0 else f"{array.ndim} dimensions, shape {array.shape}"
            remedy = (
                f"{item.name}.ravel()"
                if array.ndim > 1
                else f"numpy.atleast_1d({item.name})"
                if array.ndim == 0
                else ""
            )
            allowed = "one number" if item.size is None else "one dimension"
            self.problems.append(problem("array-shape", f"{item.name} has {found}", allowed, remedy))
        elif item.size is None:
            self.values[item.name] = np.float32(array[()]) if item.type == "f32" else int(array)
        else:
            self.arrays[item.name] = array

    def _size(self, name: str, value: object) -> None:
        if isinstance(value, np.ndarray) and value.ndim == 0:
            value = value[()]
        odd = (bool, np.bool_, np.timedelta64)  # a span of time counts as an integer to NumPy
        if isinstance(value, odd) or not isinstance(value, (int, np.integer)):
            self.problems.append(problem("size-value", f"{name} = {value!r:.40}", "a whole number", f"{name}=40"))
        else:
            self.sizes[name] = int(value)

    def _unknown(self, name: str) -> Problem:
        item = self.interface.items.get(name)
        inputs = [*self.interface.inputs, *self.interface.size_names]
        sizes = ", ".join(self.interface.size_names) or "none"
        allowed = f"inputs {', '.join(self.interface.inputs) or 'none'}; sizes {sizes}"
        if item is not None:
            what = (
                f"computed by line {item.place.line}" if item.value is not None or item.file else f"of kind {item.kind}"
            )
            return problem("not-an-input", f"{name} is {what}", allowed)
        import difflib

        close = difflib.get_close_matches(str(name), inputs, 1)
        return problem("unknown-input", f"{self.kernel.name} has no {name}", allowed, f"{close[0]}=…" if close else "")

    def _solve(self) -> None:
        known = {**self.kernel.constants, **self.sizes, **self.values}
        solver = Sizes(self.interface, known)
        given = {name: len(array) for name, array in self.arrays.items()}
        solver.solve(given)
        self.lengths = solver.check(given)
        self.problems += solver.problems
        for name in self.interface.size_names:
            if name in solver.values:
                self.sizes[name] = solver.values[name]
            elif not solver.problems:
                self.problems.append(
                    problem("size-unknown", f"no value for {name}", "a value for every name in a formula", f"{name}=…")
                )
        for name, item in self.interface.inputs.items():
            if item.size is None and name not in self.values and name in solver.values:
                self._convert_one(item, solver.values[name])
            elif item.size is None and name not in self.values and not solver.problems:
                self.problems.append(
                    problem("missing-input", f"nothing is given for {name}: {describe(item)}", "every input")
                )

    def _judge_needs(self) -> None:
        """``needs``, as soon as everything it names has a value: before placing if that is possible."""
        needs = self.kernel.needs
        if needs is None or self.needs_judged:
            return
        names = self._names()
        names |= {f"len({name})": length for name, length in self.lengths.items()}
        if not (needs.names | references(needs)) <= names.keys() and not self.areas:
            return
        self.needs_judged = True
        held = formula_value(needs, names, self.problems)
        if held is not None and not held:
            found = f"needs does not hold{shown_values(needs.names, names)}"
            self.problems.append(
                problem(
                    "needs-violated",
                    found,
                    needs.text.strip(),
                    place=needs.place,
                    excerpt=excerpt(self.kernel, needs.place),
                )
            )

    def _place(self) -> None:
        self.areas = place(self.interface, self.kernel.core.memory, self.lengths, self._names(), self.problems)

    def _tables(self) -> None:
        for item in self.interface.arrays:
            if item.kind != "table":
                continue
            value = self._table_file(item) if item.file is not None else self._table_formula(item)
            if value is None:
                continue
            converted = convert(ELEMENTS[item.type], value, item.name)
            self.problems += [attrs.evolve(p, place=item.place) for p in converted.problems]
            if converted.saturated:  # that a formula's floats are scaled and rounded goes without saying
                self.notes += [attrs.evolve(p, place=item.place) for p in converted.notes]
            if converted.array is None:
                continue
            if converted.array.shape != (self.lengths[item.name],):
                found = f"table {item.name} has shape {converted.array.shape}"
                self.problems.append(problem("array-length", found, f"({self.lengths[item.name]},)", place=item.place))
            self.arrays[item.name] = converted.array

    def _table_file(self, item: Item) -> np.ndarray | None:
        folder = Path(self.kernel.path).resolve().parent
        path = (folder / str(item.file)).resolve()
        if not path.is_relative_to(folder):
            self.problems.append(
                problem(
                    "table-file", f"{item.file} leads out of {folder}", "a file beside the source", place=item.place
                )
            )
            return None
        try:
            return read_npy(path, item.name)
        except InterfaceError as error:
            self.problems += [attrs.evolve(p, name="table-file", place=item.place) for p in error.problems]
            return None

    def _table_formula(self, item: Item) -> list[Any] | None:
        """One value an element; in the formula, ``i`` counts elements from 0."""
        assert item.value is not None
        names, values, problems = self._names(), [], []  # type: ignore[var-annotated]
        for index in range(self.lengths[item.name]):
            values.append(formula_value(item.value, {**names, "i": index}, problems))
            if problems:
                self.problems += problems
                return None
        return values

    def _compute(self) -> None:
        """Computed scalars, in interface order; a later one may use an earlier one."""
        for item in self.interface.computed:
            assert item.value is not None
            value = formula_value(item.value, self._names(), self.problems)
            if value is None:
                continue
            converted = convert(ELEMENTS[item.type], int(value) if isinstance(value, bool) else value, item.name)
            self.problems += [attrs.evolve(p, place=item.place) for p in converted.problems]
            if converted.saturated:  # that a formula's floats are scaled and rounded goes without saying
                self.notes += [attrs.evolve(p, place=item.place) for p in converted.notes]
            if converted.array is not None:
                self.values[item.name] = np.float32(converted.array[()]) if item.type == "f32" else int(converted.array)

    def _fill_registers(self) -> None:
        for item in self.kernel.items:
            if item.register is None:
                continue
            if item.size is not None:
                self.registers[item.register] = next(a.start for a in self.areas if a.name == item.name)
            elif item.name in self.values:
                self.registers[item.register] = ELEMENTS[item.type].raw(self.values[item.name])

    def _pieces(self) -> tuple[tuple[int, bytes], ...]:
        order = self.kernel.core.memory.endianness
        return tuple(
            (area.start, self.arrays[area.name].astype(self.interface.element(area.name).stored(order)).tobytes())
            for area in self.areas
            if area.name in self.arrays
        )


def references(formula: Formula) -> frozenset[str]:
    """``addr(x)`` and ``len(x)`` in a formula."""
    return frozenset(getattr(formula, "references", ()))


def describe(item: Item) -> str:
    """An item's type as the source writes it: ``i16[n]``."""
    return item.type if item.size is None else f"{item.type}[{item.size.text.strip()}]"


def excerpt(kernel: Kernel, place: Place | None) -> str:
    """The source line at ``place``, empty where there is none."""
    lines = kernel.text.splitlines()
    return lines[place.line - 1] if place and place.file == kernel.path and 0 < place.line <= len(lines) else ""
