"""Hypothesis strategies: inputs of a kernel, from the types of its interface and its ``needs``.

Hypothesis is an extra of the package (``pip install vliwsim[test]``) and loaded when first used.

    kernel = vliwsim.load_kernel("lowpass.vliw")

    @given(inputs(kernel))
    def test_lowpass(given):
        assert kernel.run(given=given).ok

Failing inputs shrink towards the smallest sizes, zeros, and constant arrays. :func:`counterexample` looks for one, and
:func:`~vliwsim.kernel.saved_cases.save_case` keeps it as a case.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from vliwsim.kernel.binding import bind
from vliwsim.kernel.cases import FLOAT_SCALE
from vliwsim.kernel.elements import Element
from vliwsim.kernel.interface import Interface, interface_of
from vliwsim.kernel.loaded import LoadedKernel
from vliwsim.kernel.runner import KernelRun
from vliwsim.kernel.search import Search
from vliwsim.kernel.sizes import Sizes
from vliwsim.problems import InterfaceError, OptionError, problem
from vliwsim.program.kernel import Item, Kernel

if TYPE_CHECKING:
    from hypothesis.strategies import SearchStrategy

SMALL_SIZES = 48
"""Size assignments tried, smallest first; there every remainder comes up."""


def _hypothesis() -> Any:
    try:
        import hypothesis.strategies
    except ImportError:
        remedy = "pip install vliwsim[test]"
        raise OptionError(problem("no-hypothesis", "Hypothesis is not installed", "Hypothesis 6", remedy)) from None
    return hypothesis.strategies


def inputs(kernel: LoadedKernel | Kernel, **fixed: Any) -> SearchStrategy[dict[str, Any]]:
    """A strategy of inputs by name (arrays, scalars, sizes) that the kernel takes.

    ``fixed``: sizes and inputs whose values are chosen already. Arrays are zeros, constants, impulses, alternating
    extremes, and arbitrary values among which extremes are frequent; sizes come from the smallest the kernel allows up.
    Raises :class:`~vliwsim.problems.InterfaceError` where no sizes are found.
    """
    st = _hypothesis()
    plain = kernel.kernel if isinstance(kernel, LoadedKernel) else kernel
    interface = interface_of(plain)
    chosen = _sizes(interface, fixed)
    if not chosen:
        found = f"no sizes and values were found for which {plain.name} can run"
        raise InterfaceError(problem("no-case", found, "inputs for which needs holds", "sizes given by name"))

    @st.composite
    def drawn(draw: Callable[[Any], Any]) -> dict[str, Any]:
        import hypothesis

        values: dict[str, Any] = {**draw(st.sampled_from(chosen)), **fixed}
        lengths = Sizes(interface, {**plain.constants, **values}).check({})
        for name, item in interface.inputs.items():
            if name not in values:
                values[name] = draw(_values(interface.element(name), item, lengths.get(name, 0)))
        try:
            bind(plain, values)  # needs may speak of elements
        except InterfaceError:
            hypothesis.reject()
        return values

    strategy: SearchStrategy[dict[str, Any]] = drawn()
    return strategy


def _sizes(interface: Interface, fixed: Mapping[str, Any]) -> list[dict[str, int]]:
    """Assignments of sizes, and of the scalars that ``needs`` speaks of, the smallest first."""
    search = Search(interface, fixed)
    found = search.smallest(SMALL_SIZES) if not search.scalars else search.smallest_sizes(SMALL_SIZES // 4)
    for base in list(found[:8]):
        for name in search.scalars & base.keys():
            element = interface.element(name)
            extremes = (element.low, element.high, -1, 1, *search._spoken_numbers()[:64])
            others = ({**base, name: value} for value in extremes if value != base[name])
            found += [values for values in others if search.holds(values)]
    medium = search.medium()
    return found + ([medium] if medium else [])


def _values(element: Element, item: Item, length: int) -> Any:
    """What one input may be."""
    st = _hypothesis()
    one = values_of(element)
    if item.size is None:
        return one
    kinds = [
        one.map(lambda value: np.full(length, value, element.dtype)),
        st.tuples(st.integers(0, max(0, length - 1)), one).map(lambda at: _impulse(element, length, *at)),
        st.booleans().map(lambda low_first: _alternating(element, length, low_first)),
        _free(element, length, one),
    ]
    return st.one_of(kinds)


def values_of(element: Element) -> Any:
    """A strategy of single values of an element type, extremes among them."""
    st = _hypothesis()
    if element.floating:
        named = [0.0, 1.0, -1.0, FLOAT_SCALE, -FLOAT_SCALE, 2.0**-126]
        wide = st.floats(-FLOAT_SCALE, FLOAT_SCALE, width=32, allow_subnormal=False)
        return st.one_of(st.sampled_from(named), wide)
    named = [v for v in (0, 1, -1, element.high, element.low, element.high - 1, element.low + 1) if v >= element.low]
    return st.one_of(st.sampled_from(list(dict.fromkeys(named))), st.integers(element.low, element.high))


def _impulse(element: Element, length: int, where: int, value: Any) -> np.ndarray:
    array = np.zeros(length, element.dtype)
    array[where : where + 1] = value
    return array


def _alternating(element: Element, length: int, low_first: bool) -> np.ndarray:
    low, high = (-FLOAT_SCALE, FLOAT_SCALE) if element.floating else (element.low, element.high)
    array = np.full(length, low if low_first else high, element.dtype)
    array[1::2] = high if low_first else low
    return array


def _free(element: Element, length: int, one: Any) -> Any:
    """Any values: a background, and a few elements that differ from it."""
    st = _hypothesis()
    places = st.dictionaries(st.integers(0, max(0, length - 1)), one, max_size=min(length, 24))

    def made(background: Any, others: Mapping[int, Any]) -> np.ndarray:
        array = np.full(length, background, element.dtype)
        for where, value in others.items():
            array[where : where + 1] = value
        return array

    return st.builds(made, one, places)


def counterexample(
    kernel: LoadedKernel,
    wrong: Callable[[KernelRun], bool] = lambda run: not run.ok,
    *,
    examples: int = 200,
    **fixed: Any,
) -> dict[str, Any] | None:
    """The smallest inputs found for which ``wrong`` holds of the run, None if there are none among ``examples``.

    The same kernel always gives the same answer.
    """
    from hypothesis import HealthCheck, Phase, Verbosity, find, settings
    from hypothesis.errors import NoSuchExample, Unsatisfiable

    quiet = settings(
        max_examples=examples,
        deadline=None,
        derandomize=True,
        database=None,
        verbosity=Verbosity.quiet,
        phases=[Phase.generate, Phase.shrink],
        suppress_health_check=list(HealthCheck),
    )
    strategy = inputs(kernel, **fixed)
    try:
        found: dict[str, Any] = find(strategy, lambda given: wrong(kernel.run(given=given)), settings=quiet)
    except (NoSuchExample, Unsatisfiable):
        return None
    return found
