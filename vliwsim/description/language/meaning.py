"""A meaning: the checked tree of one operation, and what is made of it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import cached_property
from typing import TYPE_CHECKING

from vliwsim.description.language.faults import Fault, Faults, Origin, as_problem
from vliwsim.description.language.operands import parse_operands
from vliwsim.description.language.parse import Parsed, parse
from vliwsim.description.language.tree import Assign
from vliwsim.description.language.types import TYPES, ValueType, type_named
from vliwsim.description.operations import Access, Kind, Operand, Role
from vliwsim.description.values import Value
from vliwsim.problems import OperationError

if TYPE_CHECKING:
    from vliwsim.description.language.compile_python import Held

_TAKEN = ValueType("truth", 32, False)


class Meaning:
    """What an operation does. Made by :func:`read_meaning`; checked and compiled on first use.

    ``name``: of the operation. ``operands``, ``inputs``, ``outputs``, ``kind``, ``access``: as in
    :class:`~vliwsim.description.operations.Operation`.
    """

    def __init__(self, name: str, does: str, parsed: Parsed, origin: Origin) -> None:
        self.name = name
        self.does = does
        self.operands: tuple[Operand, ...] = parsed.operands
        self.access: Access | None = parsed.access
        self.kind = _kind(parsed)
        self.inputs = _inputs(parsed)
        self.outputs = _outputs(parsed)
        self._parsed = parsed
        self._origin = origin
        self._functions: dict[tuple[int | None, ...], Callable[..., object]] = {}

    @cached_property
    def statements(self) -> tuple[Assign, ...]:
        """The tree (:mod:`.tree`), with kinds and intervals. Raises :class:`OperationError` where it is refused."""
        from vliwsim.description.language.check.intervals import check

        try:
            check(self._parsed.statements)
        except Faults as faults:
            raise OperationError(as_problem(fault, self.does, self._origin) for fault in faults.faults) from None
        return self._parsed.statements

    @cached_property
    def input_types(self) -> dict[str, ValueType]:
        """The value type of each input."""
        types = {operand.name: type_named(operand.type) for operand in self.operands}
        if self.access:
            types["loaded"] = TYPES[self.access.type]
        types["link"] = TYPES["u32"]
        return {name: types[name] for name in self.inputs}

    @cached_property
    def output_types(self) -> dict[str, ValueType]:
        """The value type of each output; ``taken`` is a truth, 0 or 1."""
        types = {operand.name: type_named(operand.type) for operand in self.operands}
        if self.access:
            types["stored"] = TYPES[self.access.type]
        types["taken"] = _TAKEN
        return {name: types[name] for name in self.outputs}

    def compiled(self, halves: tuple[int | None, ...] = ()) -> Callable[..., object]:
        """The fast function: raw values of :attr:`inputs` in, raw values of :attr:`outputs` out.

        ``halves``: for each input which half of its register it reads, None for no half operand or an immediate of 16
        bits; ``()`` is None for all. One output is given bare, several as a tuple, none as None. Inputs must be in
        range: registers 0 to 2**32 - 1, pairs to 2**64 - 1, ``loaded`` of its size, a constant ``uN`` below 2**N.
        """
        found = self._functions.get(halves)
        if found is None:
            from vliwsim.description.language.compile_python import function

            found = function(self.source(halves), self.name + _half_names(halves))
            self._functions[halves] = found
        return found

    def source(self, halves: tuple[int | None, ...] = ()) -> str:
        """The Python text of :meth:`compiled`."""
        from vliwsim.description.language.compile_python import source

        return source(self.statements, self._held(halves), self.output_types)

    def evaluate(self, inputs: Sequence[Value], halves: tuple[int | None, ...] = ()) -> tuple[Value, ...]:
        """The slow, exact twin of :meth:`compiled` that also follows undefined bytes; always a tuple."""
        from vliwsim.description.language.evaluate import evaluate

        chosen = dict(zip(self.inputs, halves or (None,) * len(self.inputs), strict=True))
        given = dict(zip(self.inputs, inputs, strict=True))
        return tuple(evaluate(self.statements, self.output_types, given, chosen).values())

    def _held(self, halves: tuple[int | None, ...]) -> dict[str, Held]:
        """Where each input's bits are in the raw value given for it."""
        from vliwsim.description.language.compile_python import Held

        held: dict[str, Held] = {}
        operands = {operand.name: operand for operand in self.operands}
        for name, half in zip(self.inputs, halves or (None,) * len(self.inputs), strict=True):
            bits, operand = self.input_types[name].width, operands.get(name)
            if operand is None:
                held[name] = Held(0, bits, bits)
            elif operand.half:
                held[name] = Held(0, 16, 16) if half is None else Held(16 * half, 16, 32)
            elif operand.role is Role.CONSTANT:
                held[name] = Held(0, 32, 32)
            else:
                held[name] = Held(0, bits, max(32, bits))
        return held


def read_meaning(name: str, operands: str, does: str, origin: Origin) -> Meaning:
    """The meaning of an operation from its two texts; raises :class:`OperationError` with all faults of its syntax."""
    try:
        parsed = parse(parse_operands(operands), does)
    except Fault as fault:
        raise OperationError(as_problem(fault, operands if fault.part == "operands" else does, origin)) from None
    except Faults as faults:
        raise OperationError(as_problem(fault, does, origin) for fault in faults.faults) from None
    return Meaning(name, does, parsed, origin)


def _kind(parsed: Parsed) -> Kind:
    if parsed.halt:
        return Kind.HALT
    if any(operand.role is Role.TARGET for operand in parsed.operands):
        return Kind.BRANCH
    if parsed.access is None:
        return Kind.COMPUTE
    return Kind.STORE if parsed.access.store else Kind.LOAD


def _inputs(parsed: Parsed) -> tuple[str, ...]:
    names = [o.name for o in parsed.operands if o.role in (Role.SOURCE, Role.INOUT, Role.CONSTANT)]
    if parsed.access and not parsed.access.store:
        names.append("loaded")
    if parsed.uses_link:
        names.append("link")
    return tuple(names)


def _outputs(parsed: Parsed) -> tuple[str, ...]:
    names = [o.name for o in parsed.operands if o.role in (Role.RESULT, Role.INOUT, Role.STICKY)]
    if parsed.access and parsed.access.store:
        names.append("stored")
    if any(operand.role is Role.TARGET for operand in parsed.operands):
        names.append("taken")
    return tuple(names)


def _half_names(halves: tuple[int | None, ...]) -> str:
    named = ["-" if half is None else ("lo", "hi")[half] for half in halves]
    return " " + " ".join(named) if any(half is not None for half in halves) else ""
