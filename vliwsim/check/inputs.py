"""What is known of a program's inputs before it starts: from a kernel's header, or said outright."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

from vliwsim.check.formulas import ANY, INFINITY, Range, Reader
from vliwsim.check.residues import Residue, constant, lowest_bit
from vliwsim.program.kernel import Item, Kernel

ALIGN = 8
"""Alignment of an array that names neither its own nor a bank, in bytes; that of :mod:`vliwsim.kernel.placement`."""

BYTES = {"i8": 1, "u8": 1, "i16": 2, "u16": 2, "q15": 2, "i32": 4, "u32": 4, "q31": 4, "f32": 4}
WHOLE_NUMBERS = {
    name: (-(1 << 8 * size - 1), (1 << 8 * size - 1) - 1) if name[0] != "u" else (0, (1 << 8 * size) - 1)
    for name, size in BYTES.items()
    if name != "f32"
}


class Array(NamedTuple):
    """An array's ``least`` and ``most`` bytes (infinity where no bound is known) and ``over`` bytes at least."""

    least: int
    most: float
    over: int


class Inputs(NamedTuple):
    """``defined``: registers with a value. ``facts``: (register, is it nonzero). ``residues`` of registers.

    ``symbols``: what is known of an array's address itself. ``arrays`` by name. ``outputs``: (name, register) of
    returned values; ``stored``: names of returned arrays.
    """

    defined: frozenset[int] = frozenset()
    facts: tuple[tuple[int, bool], ...] = ()
    residues: Mapping[int, Residue] = {}
    symbols: Mapping[str, Residue] = {}
    arrays: Mapping[str, Array] = {}
    outputs: tuple[tuple[str, int], ...] = ()
    stored: tuple[str, ...] = ()

    def absolute(self, residue: Residue) -> Residue:
        """A residue relative to an array, as one relative to nothing."""
        if residue.symbol is None:
            return residue
        return residue._replace(symbol=None).moved(self.symbols.get(residue.symbol, Residue(None, 0, 1)))


def inputs_of(kernel: Kernel) -> Inputs:
    """What the header of ``kernel`` says of its inputs."""
    reader = Reader(_names(kernel))
    for item in kernel.items:
        if item.size is not None:
            reader.names[f"addr({item.name})"] = Range(1, INFINITY, address=Residue(item.name, 0, 1 << 32))
    if kernel.needs is not None:
        reader.require(kernel.needs)
    defined, facts, residues = set[int](), list[tuple[int, bool]](), dict[int, Residue]()
    for item in kernel.items:
        if item.size is None and item.kind not in ("given", "changes"):
            continue
        found = _value(reader, item)
        if item.size is None:
            reader.names[item.name] = found
        if item.register is not None:
            defined.add(item.register)
            residues[item.register] = found.address
            nonzero = found.nonzero()
            if nonzero is not None:
                facts.append((item.register, nonzero))
    arrays = {item.name: _array(reader, item) for item in kernel.items if item.size is not None}
    returned = [item for item in kernel.items if item.kind in ("returns", "changes")]
    return Inputs(
        frozenset(defined),
        tuple(facts),
        residues,
        {item.name: _symbol(reader, kernel, item) for item in kernel.items if item.size is not None},
        arrays,
        tuple((i.name, i.register) for i in returned if i.size is None and i.register is not None),
        tuple(i.name for i in returned if i.size is not None),
    )


def _names(kernel: Kernel) -> dict[str, Range]:
    """Ranges of the names of formulas, by their types alone."""
    names: dict[str, Range] = {}
    for name, value in kernel.constants.items():
        if type(value) is int:
            names[name] = Range(value, value, address=constant(value))
    formulas = [kernel.needs, *(f for item in kernel.items for f in (item.size, item.value))]
    for formula in formulas:
        for name in formula.names if formula is not None else ():
            names.setdefault(name, ANY)
    for item in kernel.items:
        if item.size is not None and item.size.names == {item.size.text.strip()}:
            names[item.size.text.strip()] = Range(0, INFINITY)
    for item in kernel.items:
        if item.size is None and item.kind in ("given", "changes") and item.type in WHOLE_NUMBERS:
            names[item.name] = Range(*WHOLE_NUMBERS[item.type])
        elif item.size is None:
            names.pop(item.name, None)  # a float, or computed: nothing is learned of it from needs
    return names


def _value(reader: Reader, item: Item) -> Range:
    """What is known of the register of an item."""
    if item.size is not None:
        return reader.names[f"addr({item.name})"]
    known = reader.names.get(item.name, ANY)
    if item.value is None or item.type not in ("i8", "i16", "i32", "u8", "u16", "u32"):
        return known if item.type in WHOLE_NUMBERS else ANY
    return reader.range_of(item.value).narrowed(known.low, known.high)


def _array(reader: Reader, item: Item) -> Array:
    assert item.size is not None
    size, over = reader.range_of(item.size), reader.range_of(item.over) if item.over is not None else None
    least = 0 if size.low == -INFINITY else max(0, int(size.low))
    beyond = 0 if over is None or over.low == -INFINITY else max(0, int(over.low))
    return Array(least * BYTES[item.type], size.high * BYTES[item.type], beyond)


def _symbol(reader: Reader, kernel: Kernel, item: Item) -> Residue:
    """What placing an array guarantees of its address."""
    memory = kernel.core.memory
    align = reader.range_of(item.align).exact if item.align is not None else 1
    align = max(align or 1, BYTES[item.type], 1 if item.bank is not None else ALIGN)
    found = Residue.of(None, 0, lowest_bit(align))
    bank = reader.range_of(item.bank).exact if item.bank is not None else None
    around = memory.banks * memory.bank_width
    if bank is None or lowest_bit(around) != around:
        return found
    # the first byte is in the bank: its address is bank * width, and up to width - 1 more
    period = Residue.of(None, bank * memory.bank_width, around)
    return period if align >= memory.bank_width and around >= align else found
