"""Cases: named sets of inputs to run a kernel on.

The reference's own ``cases`` function says them, as a dict or as (name, inputs) pairs; if it takes a parameter it gets
the generated ones, to keep or to drop. Without it cases are generated from the element types and ``needs``: zeros,
extremes, alternating extremes, impulses, smallest and odd sizes, and seeded random data. The same kernel always has the
same cases.
"""

from __future__ import annotations

import inspect
import zlib
from collections.abc import Callable, Iterator, Mapping
from typing import Any, NamedTuple

import numpy as np

from vliwsim.kernel.binding import bind
from vliwsim.kernel.elements import Element
from vliwsim.kernel.interface import Interface, interface_of
from vliwsim.kernel.reference import Reference, judged_code
from vliwsim.kernel.search import Search
from vliwsim.kernel.sizes import Sizes
from vliwsim.problems import InterfaceError, Place, ReferenceFailure, problem
from vliwsim.program.kernel import Kernel


class Case(NamedTuple):
    """``inputs``: arrays, scalars and sizes by name, as :func:`vliwsim.kernel.binding.bind` takes them."""

    name: str
    inputs: Mapping[str, Any]


Fill = Callable[[Element, int, np.random.Generator], np.ndarray]
"""(element, length, source of random numbers) → an array of the element's NumPy type."""

FLOAT_SCALE = 2.0**20
"""The extreme of generated binary32 data: large, and far from overflow."""


def _constant(which: str) -> Fill:
    def fill(element: Element, length: int, random: np.random.Generator) -> np.ndarray:
        return np.full(length, _extreme(element, which), element.dtype)

    return fill


def _extreme(element: Element, which: str) -> float:
    if which == "zero":
        return 0
    if element.floating:
        return FLOAT_SCALE if which == "high" else -FLOAT_SCALE
    return element.high if which == "high" else element.low


def _alternating(element: Element, length: int, random: np.random.Generator) -> np.ndarray:
    array = np.full(length, _extreme(element, "high"), element.dtype)
    array[1::2] = _extreme(element, "low")
    return array


def _impulse(where: int) -> Fill:
    def fill(element: Element, length: int, random: np.random.Generator) -> np.ndarray:
        array = np.zeros(length, element.dtype)
        array[where : length if where < 0 else where + 1] = 1 if element.floating else element.high
        return array

    return fill


def _random(shift: int = 0) -> Fill:
    """Uniform over the element's range, or over 2**-shift of it."""

    def fill(element: Element, length: int, random: np.random.Generator) -> np.ndarray:
        if element.floating:
            return (random.uniform(-1.0, 1.0, length) * 2.0**-shift).astype(np.float32)
        low, high = -(-element.low >> shift), element.high >> shift
        return random.integers(low, high, length, dtype=element.dtype, endpoint=True)

    return fill


PATTERNS: Mapping[str, tuple[str, Fill]] = {
    "random": ("decent", _random()),
    "random-quiet": ("medium", _random(4)),
    "zeros": ("medium", _constant("zero")),
    "highest": ("medium", _constant("high")),
    "lowest": ("medium", _constant("low")),
    "alternating": ("medium", _alternating),
    "impulse-first": ("medium", _impulse(0)),
    "impulse-last": ("medium", _impulse(-1)),
}
"""Generated cases: at which size, and what fills the arrays. The first is what a run uses when nothing is given."""

SMALLEST = 4
"""How many of the smallest sizes get a random case each."""


def generated_cases(kernel: Kernel, fixed: Mapping[str, Any] | None = None) -> Iterator[Case]:
    """The generated cases of ``kernel``, lazily, each of which binds.

    ``fixed``: sizes and scalars whose values are chosen already.
    """
    interface, fixed = interface_of(kernel), dict(fixed or {})
    search = Search(interface, fixed)
    sizes: dict[str, dict[str, int] | None] = {}
    for name, (size, fill) in PATTERNS.items():
        if size not in sizes:
            sizes[size] = search.decent() if size == "decent" else search.medium()
        case = _case(interface, name, sizes[size], fixed, fill)
        if case is not None:
            yield case
    for number, values in enumerate(search.smallest_sizes(SMALLEST)):
        name = "smallest" if number == 0 else f"small-{number + 1}"
        case = _case(interface, name, values, fixed, _random())
        if case is not None:
            yield case


def _case(
    interface: Interface, name: str, sizes: dict[str, int] | None, fixed: dict[str, Any], fill: Fill
) -> Case | None:
    """One case, or None if it does not bind (``needs`` may speak of elements)."""
    if sizes is None:
        return None
    inputs: dict[str, Any] = {**sizes, **fixed}
    solver = Sizes(interface, {**interface.kernel.constants, **inputs})
    lengths = solver.check({})
    random = np.random.Generator(np.random.PCG64(zlib.crc32(f"{interface.kernel.name} {name}".encode())))
    for item_name, item in interface.inputs.items():
        if item_name in inputs:
            continue
        element = interface.element(item_name)
        array = fill(element, 1 if item.size is None else lengths.get(item_name, 0), random)
        inputs[item_name] = array if item.size is not None else array[0]
    try:
        bind(interface.kernel, inputs)
    except InterfaceError:
        return None
    return Case(name, inputs)


def cases_of(kernel: Kernel, reference: Reference | None) -> Iterator[Case]:
    """All cases of ``kernel``, lazily: the reference's own if it has a ``cases`` function, else the generated ones.

    Then those kept beside it (:mod:`vliwsim.kernel.saved_cases`).
    """
    from vliwsim.kernel.saved_cases import saved_cases

    seen: set[str] = set()
    for case in _cases(kernel, reference, seen):
        seen.add(case.name)
        yield case
    yield from (Case(name, inputs) for name, inputs in saved_cases(kernel) if name not in seen)


def _cases(kernel: Kernel, reference: Reference | None, seen: set[str]) -> Iterator[Case]:
    if reference is None or reference.cases is None:
        yield from generated_cases(kernel)
        return
    for name, inputs in _own_cases(kernel, reference):
        if not isinstance(name, str) or not name or not isinstance(inputs, Mapping):
            found = f"cases() gives {type(name).__name__}, {type(inputs).__name__}"
            raise _wrong(reference, found, "a name (text) and a dict of inputs by name")
        if name in seen:
            raise _wrong(reference, f"cases() gives {name!r} twice", "a name of its own for every case")
        yield Case(name, dict(inputs))


class _Generated:
    """The generated cases as (name, inputs) pairs, made while somebody iterates, afresh every time."""

    def __init__(self, kernel: Kernel) -> None:
        self._kernel = kernel

    def __iter__(self) -> Iterator[tuple[str, dict[str, Any]]]:
        for case in generated_cases(self._kernel):
            yield case.name, dict(case.inputs)


def _own_cases(kernel: Kernel, reference: Reference) -> Iterator[tuple[Any, Any]]:
    assert reference.cases is not None
    with judged_code(reference.path, reference.source, "calling cases"):
        wanted = inspect.signature(reference.cases).parameters
        arguments = [_Generated(kernel)] if wanted else []
        result = reference.cases(*arguments)
        pairs = iter(result.items() if isinstance(result, Mapping) else result)
    while True:
        with judged_code(reference.path, reference.source, "calling cases"):
            try:
                pair = next(pairs)
            except StopIteration:
                return
        if not isinstance(pair, (tuple, list)) or len(pair) != 2:
            raise _wrong(reference, f"cases() gives {type(pair).__name__}", "pairs of a name and a dict of inputs")
        yield pair[0], pair[1]


def _wrong(reference: Reference, found: str, allowed: str) -> ReferenceFailure:
    code = getattr(reference.cases, "__code__", None)
    place = Place(str(reference.path), code.co_firstlineno if code else 1)
    return ReferenceFailure(problem("reference-cases", found, allowed, place=place))


def find_case(kernel: Kernel, reference: Reference | None, name: str | None) -> Case:
    """The case of this name, or the first one for None.

    A generated case can always be asked for by its name, even where the reference has its own. Raises
    :class:`~vliwsim.problems.InterfaceError` when there is none.
    """
    seen: list[str] = []
    for case in cases_of(kernel, reference):
        if name is None or case.name == name:
            return case
        seen.append(case.name)
    if name is not None and reference is not None and reference.cases is not None:
        for case in generated_cases(kernel):
            if case.name == name:
                return case
    if name is None:
        _say_why_none(kernel)
        found = f"no sizes and values were found for which {kernel.name} can run"
        raise InterfaceError(
            problem(
                "no-case", found, "inputs for which needs holds", "--give every input, or write cases() in reference.py"
            )
        )
    raise InterfaceError(problem("unknown-case", f"{kernel.name} has no case {name}", ", ".join(seen) or "none"))


def _say_why_none(kernel: Kernel) -> None:
    """Raise what keeps every case from binding, where that is neither ``needs`` nor a missing input."""
    interface = interface_of(kernel)
    sizes = Search(interface, {}).decent() or dict.fromkeys(interface.size_names, 1)
    try:
        bind(kernel, _zeros(interface, sizes))
    except InterfaceError as error:
        telling = [p for p in error.problems if p.name not in ("needs-violated", "missing-input")]
        if telling:
            raise InterfaceError(telling) from None


def case_with(kernel: Kernel, reference: Reference | None, name: str | None, given: Mapping[str, Any]) -> Case:
    """The inputs of one run: those ``given``, on top of the case ``name`` if one is named.

    With no case named: if no array is given, the random case of the given sizes and scalars; otherwise what is given.
    """
    interface = interface_of(kernel)
    if name is not None:
        return Case(name, {**find_case(kernel, reference, name).inputs, **given})
    if not given:
        return find_case(kernel, reference, None)
    arrays = [n for n, item in interface.inputs.items() if item.size is not None]
    known = set(interface.inputs) | set(interface.size_names)
    if not arrays or any(n in given for n in arrays) or not set(given) <= known:
        return Case("given", dict(given))
    case = next(generated_cases(kernel, given), None)
    # where nothing fits these sizes, binding what was given says why
    return case or Case("given", _zeros(interface, given))


def _zeros(interface: Interface, given: Mapping[str, Any]) -> dict[str, Any]:
    solver = Sizes(interface, {**interface.kernel.constants, **given})
    lengths = solver.check({})
    if solver.problems:
        raise InterfaceError(solver.problems)
    zeros = {
        n: np.zeros(lengths.get(n, 0), interface.element(n).dtype)
        for n, i in interface.inputs.items()
        if i.size is not None
    }
    return {**zeros, **given}
