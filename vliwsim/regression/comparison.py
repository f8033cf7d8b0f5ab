"""Kernels of one interface on the same inputs: are they equal, and what does each cost?"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.binding import describe
from vliwsim.kernel.cases import Case, cases_of, generated_cases
from vliwsim.kernel.compare import compare
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.reference import Reference
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.kernel.search import Search
from vliwsim.kernel.sizes import formula_value
from vliwsim.problems import InterfaceError, OptionError, Place, Problem, problem
from vliwsim.program.kernel import Item, Kernel
from vliwsim.regression.explain import text_of_difference
from vliwsim.regression.fit import Fit, fit

SHIFTS = (8, 16, 24)
"""Bytes by which each array is moved away from those before it, to see whether their places matter."""
MOST_SIZES = 24


@attrs.frozen
class Compared:
    """One kernel's part. ``equal``: with the first kernel on every common case; None for the first itself.

    ``first_difference``: where not. ``cycles`` by case. ``by_size``: cycles by size. ``fitted``: as a formula.
    ``slots``: share of its beats for which the hottest section uses each slot, on the largest size. ``moved``: (array,
    bytes, cycles more) where it costs or saves cycles that an array stands so many bytes further on. ``refused``: cases
    that its ``needs`` does not allow.
    """

    name: str
    core: str
    code_bytes: int
    equal: bool | None
    first_difference: str
    cycles: Mapping[str, int]
    by_size: Mapping[int, int]
    fitted: Fit | None
    hottest: str
    slots: Mapping[str, float]
    moved: tuple[tuple[str, int, int], ...]
    refused: int


@attrs.frozen
class Comparison:
    """Kernels side by side. ``size``: the name of the size that varies, empty if none does."""

    size: str
    sizes: tuple[int, ...]
    cases: int
    kernels: tuple[Compared, ...]

    @property
    def equal(self) -> bool:
        return all(kernel.equal is not False for kernel in self.kernels)


def compare_kernels(
    kernels: Sequence[Kernel],
    reference: Reference | None,
    *,
    cases: Sequence[Case] | None = None,
    sizes: Sequence[int] = (),
    limit: int = 10_000_000,
    about: Callable[[str], None] = lambda text: None,
) -> Comparison:
    """Run every kernel on the same inputs.

    ``cases``: those inputs, by default all cases of the first kernel. ``sizes``: values of the first size to time, by
    default smallest ones, a run of neighbours, and larger ones. Raises :class:`~vliwsim.problems.OptionError` where the
    interfaces differ.
    """
    _same_interface(kernels)
    first = kernels[0]
    chosen = list(cases_of(first, reference) if cases is None else cases)
    size = next(iter(interface_of(first).size_names), "")
    wanted = list(sizes) or (_sizes(kernels) if size else [])
    sized = _sized_cases(kernels, size, wanted)
    names = _names(kernels)
    found: list[Compared] = []
    base: dict[str, KernelRun] = {}
    for kernel, name in zip(kernels, names):
        part = _Part(kernel, limit, about, name)
        part.run_all(chosen, sized, base)
        found.append(part.compared(size))
    return Comparison(size, tuple(sorted(sized)), len(chosen), tuple(found))


def _names(kernels: Sequence[Kernel]) -> list[str]:
    """What tells the kernels apart: their file names, with the core where those are the same."""
    from pathlib import PurePath

    stems = [PurePath(kernel.path).stem for kernel in kernels]
    plain = stems if len(set(stems)) == len(stems) else [f"{s} on {k.core.name}" for s, k in zip(stems, kernels)]
    return plain if len(set(plain)) == len(plain) else [f"{n} {k + 1}" for k, n in enumerate(plain)]


def _same_interface(kernels: Sequence[Kernel]) -> None:
    """Inputs and outputs of the same names and types, raises otherwise with everything that differs."""
    problems: list[Problem] = []
    first = kernels[0]
    for kernel in kernels[1:]:
        for kind in ("inputs", "outputs"):
            mine, other = getattr(interface_of(first), kind), getattr(interface_of(kernel), kind)
            for name in dict.fromkeys([*mine, *other]):
                one, two = mine.get(name), other.get(name)
                said = [f"{describe(item)} {name}" if item else f"no {name}" for item in (one, two)]
                if one is None or two is None or (one.type, one.size is None) != (two.type, two.size is None):
                    found = f"{first.path} has {said[0]}, {kernel.path} has {said[1]}"
                    problems.append(problem("other-interface", found, f"the same {kind} by name and type"))
    if problems:
        raise OptionError(problems)


def _sizes(kernels: Sequence[Kernel]) -> list[int]:
    """Sizes worth timing: for each kernel its smallest, some in a row, and some far larger."""
    found: set[int] = set()
    for kernel in kernels:
        interface = interface_of(kernel)
        name = interface.size_names[0]
        search = Search(interface, {})
        small = [values[name] for values in search.smallest_sizes(4)]
        found |= set(small)
        for base in (32, 64, 128, 256, 1024):
            for step in range(0, 17):
                values = {**(search.smallest(1) or [{}])[0], name: base + step}
                if base + step not in found and search.holds(values):
                    found.add(base + step)
                    if base > 64:
                        break
    ordered = sorted(found)
    if len(ordered) <= MOST_SIZES:
        return ordered
    return ordered[: MOST_SIZES - 4] + ordered[-4:]


def _sized_cases(kernels: Sequence[Kernel], size: str, sizes: Sequence[int]) -> dict[int, Case]:
    """A random case a size, from the first kernel that takes it."""
    found: dict[int, Case] = {}
    for value in sizes:
        for kernel in kernels:
            case = next(generated_cases(kernel, {size: value}), None)
            if case is not None:
                found[value] = Case(f"{size}={value}", case.inputs)
                break
    return found


class _Part:
    """One kernel of a comparison, its runs in the making."""

    def __init__(self, kernel: Kernel, limit: int, about: Callable[[str], None], name: str) -> None:
        self.kernel, self.limit, self.about, self.name = kernel, limit, about, name
        self.cycles: dict[str, int] = {}
        self.by_size: dict[int, int] = {}
        self.largest: KernelRun | None = None
        self.difference = ""
        self.compared_cases = 0
        self.refused = 0
        self.moved: list[tuple[str, int, int]] = []

    def run_all(self, cases: Sequence[Case], sized: Mapping[int, Case], base: dict[str, KernelRun]) -> None:
        for case in cases:
            run = self._run(case, base)
            if run is not None and run.reason == "halt":
                self.cycles[case.name] = run.cycles
        for size in sorted(sized):
            run = self._run(sized[size], base)
            if run is not None and run.reason == "halt":
                self.by_size[size] = run.cycles
                self.largest = run
        if self.largest is None and cases:
            self.largest = self._run(cases[0], {})
        if self.largest is not None:
            self._move(self.largest)

    def _run(self, case: Case, base: dict[str, KernelRun]) -> KernelRun | None:
        """The run of a case, held against the first kernel's; None where ``needs`` refuses it."""
        self.about(f"{self.name}, {case.name}")
        try:
            run = run_kernel(self.kernel, case.inputs, case=case.name, reference=None, limit=self.limit)
        except InterfaceError:
            self.refused += 1
            return None
        first = base.setdefault(case.name, run)
        if first is not run:
            self.compared_cases += 1
            if not self.difference:
                self.difference = _difference(first, run)
        elif run.reason != "halt" and not self.difference:
            self.difference = f"{case.name}: {run.verdict[:-1]}"
        return run

    def _move(self, run: KernelRun) -> None:
        """The same inputs with each array further on: does its place cost cycles?"""
        interface = interface_of(self.kernel)
        inputs: dict[str, Any] = {n: a for n, a in run.setup.arrays.items() if n in interface.inputs}
        inputs |= {n: v for n, v in run.setup.values.items() if n in interface.inputs}
        inputs |= run.setup.sizes
        for array in interface.arrays:
            for shift in SHIFTS:
                moved = run_kernel(_moved(self.kernel, array.name, shift), inputs, reference=None, limit=self.limit)
                if moved.reason == "halt" and moved.cycles != run.cycles:
                    self.moved.append((array.name, shift, moved.cycles - run.cycles))

    def compared(self, size: str) -> Compared:
        slots: dict[str, float] = {}
        hottest = ""
        if self.largest is not None and self.largest.account.hottest:
            account = self.largest.account
            hottest = account.hottest
            issued = account.section(hottest).bundles
            slots = {use.slot: use.used / issued for use in account.slots}
        equal = None if not self.compared_cases and not self.difference else not self.difference
        return Compared(
            self.name,
            self.kernel.core.name,
            self.kernel.program.code_bytes,
            equal,
            self.difference,
            self.cycles,
            self.by_size,
            fit(size, self.by_size),
            hottest,
            slots,
            tuple(self.moved),
            self.refused,
        )


def _difference(first: KernelRun, run: KernelRun) -> str:
    """How a run differs from the first kernel's, empty if it does not."""
    if first.reason != "halt" or run.reason != "halt":
        bad = run if run.reason != "halt" else first
        return f"{run.case}: {bad.verdict[:-1]}"
    for name, item in interface_of(run.kernel).outputs.items():
        mine, other = run.outputs[name], first.outputs[name]
        if np.shape(mine) != np.shape(other):
            return f"{run.case}: {name} has {np.size(mine)} elements, not {np.size(other)}"
        within = formula_value(item.within, run.setup.names, []) if item.within else None
        difference = compare(interface_of(run.kernel).element(name), mine, other, within)
        if difference:
            return f"{run.case}: {text_of_difference(name, difference, 'the first gives')}"
        if not run.legal:
            return f"{run.case}: {run.verdict[:-1]}"
    return ""


@attrs.frozen
class _Fixed:
    """A formula that is a number."""

    number: int
    place: Place
    names: frozenset[str] = frozenset()
    references: frozenset[str] = frozenset()

    @property
    def text(self) -> str:
        return str(self.number)

    def value(self, names: Mapping[str, Any]) -> int:
        return self.number


def _moved(kernel: Kernel, name: str, shift: int) -> Kernel:
    """The kernel with ``shift`` bytes of nobody in front of the array ``name``."""
    place = Place(kernel.path)
    pad = Item("scratch", f"in front of {name}", "i8", _Fixed(shift, place), None, "at", place)
    items: list[Item] = []
    for item in kernel.items:
        items += [pad, item] if item.name == name else [item]
    return attrs.evolve(kernel, items=tuple(items))
