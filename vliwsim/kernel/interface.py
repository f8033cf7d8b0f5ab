"""The interface of a kernel as the binding room sees it: which names are inputs, outputs and sizes."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cached_property

import attrs

from vliwsim.kernel.elements import ELEMENTS, Element
from vliwsim.program.kernel import Item, Kernel


@attrs.frozen(eq=False)
class Interface:
    """The items of a kernel, sorted by what a caller may do with them. Built by :func:`interface_of`."""

    kernel: Kernel

    @cached_property
    def items(self) -> Mapping[str, Item]:
        return {item.name: item for item in self.kernel.items}

    @cached_property
    def inputs(self) -> Mapping[str, Item]:
        """What a caller gives: ``given`` without a formula, and ``changes``, in interface order."""
        return {i.name: i for i in self.kernel.items if i.kind == "changes" or (i.kind == "given" and i.value is None)}

    @cached_property
    def arrays(self) -> tuple[Item, ...]:
        """Items that live in memory, in interface order."""
        return tuple(item for item in self.kernel.items if item.size is not None)

    @cached_property
    def outputs(self) -> Mapping[str, Item]:
        """What a run gives back: ``returns`` and ``changes``, in interface order."""
        return {i.name: i for i in self.kernel.items if i.kind in ("returns", "changes")}

    @cached_property
    def computed(self) -> tuple[Item, ...]:
        """Scalars whose value is a formula."""
        return tuple(i for i in self.kernel.items if i.size is None and i.value is not None)

    @cached_property
    def size_names(self) -> tuple[str, ...]:
        """Free names of size formulas, ``needs`` and ``budget`` that are no item and no constant, as first met."""
        names: dict[str, None] = {}
        formulas = [item.size for item in self.arrays]
        formulas += [f for item in self.kernel.items for f in (item.over, item.align, item.bank, item.within)]
        formulas += [self.kernel.needs, self.kernel.budget, *(i.value for i in self.computed)]
        for formula in formulas:
            if formula is not None:
                names |= dict.fromkeys(sorted(formula.names))
        return tuple(n for n in names if n not in self.items and n not in self.kernel.constants)

    def element(self, name: str) -> Element:
        return ELEMENTS[self.items[name].type]


def interface_of(kernel: Kernel) -> Interface:
    """The interface of ``kernel``."""
    return Interface(kernel)


class Elements:
    """An array as formulas see it: a sequence of Python numbers, so that no arithmetic wraps."""

    def __init__(self, array: object) -> None:
        self._array = array

    def __len__(self) -> int:
        return len(self._array)  # type: ignore[arg-type]

    def __getitem__(self, index: int) -> object:
        return self._array[index].item()  # type: ignore[index]
