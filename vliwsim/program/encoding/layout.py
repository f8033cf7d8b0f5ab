"""Where every field of an operation word stands: computed from the core, drawn by :func:`picture`.

A word, from bit 0 up::

    last | extended | slot | operation | guard | the operation's own operand fields | immediate

Widths come from the core's numbers of slots and registers, positions from the widths; the numeric codes of operations
are in the operation tables. So one core has one layout for ever, whatever operations it has or lacks. What an operation
does with the bits above the header is its :class:`Format`, built when first asked for.

Code points of the fields:

last        1 in the last operation of a bundle
extended    1 when the next word is an extension: 32 bits of immediate, zeros above
slot        index of the slot in the core
operation   the code of the tables; 0 is an idle word, whose bits above this field count its beats (0: padding)
guard       0 none; 1 + 2 r on when register r is not 0; 2 + 2 r on when it is 0
register    the register's number; one code more, the number of registers, is *immediate* where that may stand
half        0 the low half, 1 the high one; 0 beside an immediate
mode        0 ``[base + step]``, 1 ``[base then +step]``, 2 ``[+step then base]``, 3 ``[base then +step in ring N]``
ring        the base-2 logarithm of N, 1 to 31; it is there in mode 3 only, in the lowest bits of the immediate
constant    a constant operand of a type of up to 8 bits: that many bits, unsigned or two's complement as the type says
immediate   two's complement; 0 when the operation has none here
"""

from __future__ import annotations

from functools import cached_property, lru_cache
from typing import NamedTuple

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import Operand, Operation, OperationSet, Role
from vliwsim.problems import CoreError, OperationError, problem
from vliwsim.program.code import Mode

CODE_BITS = 10
IMMEDIATE_BITS = 32
BEAT_BITS = 24
RING_BITS = 5
OWN_BITS = 8
"""Constants of a type of up to so many bits have a field of their own; a wider one takes the immediate."""
MOST_OPERATIONS = 64
"""The most operations a bundle may hold, legal or not."""

MODES = (Mode.OFFSET, Mode.AFTER, Mode.BEFORE)
"""Address modes without a ring by their code."""

RING_MODE = 3
"""The code of :attr:`Mode.AFTER` in a ring."""


class Field(NamedTuple):
    """``width`` bits of a word from bit ``low`` up."""

    name: str
    low: int
    width: int

    @property
    def end(self) -> int:
        """The first bit above the field."""
        return self.low + self.width

    @property
    def mask(self) -> int:
        """The largest value the field holds."""
        return (1 << self.width) - 1

    def take(self, word: int) -> int:
        """The field's value in ``word``."""
        return word >> self.low & self.mask


class AddressFields(NamedTuple):
    """The fields of an address operand, in this order."""

    mode: Field
    base: Field
    step: Field


class Part(NamedTuple):
    """The fields of one operand: a register, perhaps with a half; an address; a narrow constant; of a wide one none.

    ``immediate``: the register (or ``step``) field may hold the code for an immediate. ``value_bits``: width of an
    immediate given here, 16 or 32.
    """

    operand: Operand
    register: Field | None = None
    half: Field | None = None
    address: AddressFields | None = None
    immediate: bool = False
    value_bits: int = 32
    constant: Field | None = None
    limits: tuple[int, int] | None = None
    """Of a constant, the least and greatest value of its type."""

    def allows(self, value: int) -> bool:
        """Whether a raw 32-bit value is one of the constant's type; of anything else, always."""
        if self.limits is None:
            return True
        low, high = self.limits
        return low <= (value - (1 << 32) if low < 0 and value >> 31 else value) <= high

    @property
    def fields(self) -> tuple[Field, ...]:
        """The part's fields from the low bits up."""
        if self.address is not None:
            return (self.address.mode, self.address.base, self.address.step)
        return tuple(field for field in (self.register, self.half, self.constant) if field is not None)


class Format(NamedTuple):
    """How one operation uses the bits above the header: a part for each operand, then the short immediate.

    ``immediate`` has width 0 where no bit is left (every immediate then takes an extension word) or none is possible.
    ``ring``: of an operation with an address, where a ring's size is in mode 3; ``ring_immediate`` is what is then left
    of the immediate.
    """

    operation: Operation
    parts: tuple[Part, ...]
    immediate: Field
    ring: Field | None = None
    ring_immediate: Field | None = None

    @property
    def fields(self) -> tuple[Field, ...]:
        """Operand fields and, where there is one, the short immediate, from the low bits up."""
        fields = tuple(field for part in self.parts for field in part.fields)
        return (*fields, self.immediate) if self.immediate.width else fields

    @property
    def needs(self) -> int:
        """The least number of bits of a word that holds the operand fields."""
        return self.immediate.low if self.ring is None else self.ring.end


def may_be_immediate(operand: Operand) -> bool:
    """Whether a register operand may be an immediate instead (of an address operand, its step)."""
    return operand.role in (Role.ADDRESS, Role.TARGET) or (operand.role is Role.SOURCE and not operand.pair)


def slot_bits(core: Core) -> int:
    """Width of the slot field."""
    return (len(core.slots) - 1).bit_length()


def longest_idle(core: Core) -> int:
    """The most beats one idle word counts: what the bits above the operation code hold, at most 2**24 - 1."""
    return (1 << min(BEAT_BITS, core.words.bits - 2 - slot_bits(core) - CODE_BITS)) - 1


def constant_limits(operand: Operand) -> tuple[int, int]:
    """Least and greatest value of a constant operand's type (``u5``, ``i32``)."""
    bits = int(operand.type[1:])
    return (0, (1 << bits) - 1) if operand.type[0] == "u" else (-1 << bits - 1, (1 << bits - 1) - 1)


def takes_immediate(operand: Operand) -> bool:
    """Whether a constant operand is the operation's one immediate, rather than in a field of its own."""
    return operand.role is Role.CONSTANT and int(operand.type[1:]) > OWN_BITS


@attrs.frozen(eq=False, slots=False)
class Layout:
    """The layout of a core's words. ``formats`` fills as operations are asked for."""

    core: Core
    operations: OperationSet
    formats: dict[str, Format] = attrs.field(factory=dict, repr=False)

    @cached_property
    def header(self) -> tuple[Field, ...]:
        """The fields every operation word has, from bit 0 up."""
        registers = len(self.core.register_names)
        widths = {
            "last": 1,
            "extended": 1,
            "slot": slot_bits(self.core),
            "operation": CODE_BITS,
            "guard": (2 * registers).bit_length(),
        }
        fields: list[Field] = []
        for name, width in widths.items():
            fields.append(Field(name, fields[-1].end if fields else 0, width))
        return tuple(fields)

    @cached_property
    def slot(self) -> Field:
        return self.header[2]

    @cached_property
    def code(self) -> Field:
        return self.header[3]

    @cached_property
    def guard(self) -> Field:
        return self.header[4]

    @cached_property
    def beats(self) -> Field:
        """The beat count of an idle word."""
        return Field("beats", self.code.end, longest_idle(self.core).bit_length())

    @cached_property
    def immediate_code(self) -> int:
        """The code that says *immediate* in a register field."""
        return len(self.core.register_names)

    @cached_property
    def pair_starts(self) -> tuple[bool, ...]:
        """For every register number, whether a pair may be named by it: even in its cluster, with a register behind."""
        return tuple(
            local % 2 == 0 and local + 1 < cluster.registers
            for cluster in self.core.clusters
            for local in range(cluster.registers)
        )

    def format_of(self, operation: Operation) -> Format:
        """The format of ``operation``; raises :class:`CoreError` when it does not fit the core's words."""
        found = self.formats.get(operation.name)
        if found is None:
            found = self._build(operation)
            if found.needs > self.core.words.bits:
                raise self._too_narrow()
            self.formats[operation.name] = found
        return found

    def _build(self, operation: Operation) -> Format:
        """A format whose operand fields may still reach beyond the word."""
        constants = sum(takes_immediate(operand) for operand in operation.operands)
        if constants > 1:
            raise OperationError(
                problem(
                    "two-constants",
                    f"{operation.name} has {constants} constant operands of more than {OWN_BITS} bits",
                    "one immediate an operation",
                    "a narrower type for one of them, or a register operand",
                )
            )
        low = self.guard.end
        parts: list[Part] = []
        for operand in operation.operands:
            part = self._part(operand, low, constants > 0)
            parts.append(part)
            low = max([low, *(field.end for field in part.fields)])
        wanted = constants > 0 or any(part.immediate for part in parts)
        ring = Field("ring", low, RING_BITS)
        immediate = self._immediate(low, wanted)
        if not any(part.address for part in parts):
            return Format(operation, tuple(parts), immediate)
        return Format(operation, tuple(parts), immediate, ring, self._immediate(ring.end, wanted))

    def _immediate(self, low: int, wanted: bool) -> Field:
        """A short immediate of all bits from ``low`` up, at most 32."""
        room = max(0, self.core.words.bits - low)
        return Field("immediate", low, min(IMMEDIATE_BITS, room) if wanted else 0)

    def _part(self, operand: Operand, low: int, constant: bool) -> Part:
        """The fields of ``operand`` from bit ``low`` up; ``constant``: another operand is the immediate already."""
        registers = len(self.core.register_names)
        immediate = may_be_immediate(operand) and not constant
        narrow, wide = (registers - 1).bit_length(), registers.bit_length()
        if operand.role is Role.CONSTANT:
            limits = constant_limits(operand)
            if takes_immediate(operand):
                return Part(operand, immediate=True, limits=limits)
            return Part(operand, constant=Field(operand.name, low, int(operand.type[1:])), limits=limits)
        if operand.role is Role.ADDRESS:
            mode = Field("mode", low, 2)
            base = Field("base", mode.end, narrow)
            step = Field("step", base.end, wide if immediate else narrow)
            return Part(operand, address=AddressFields(mode, base, step), immediate=immediate)
        register = Field(operand.name, low, wide if immediate else narrow)
        half = Field(f"{operand.name} half", register.end, 1) if operand.half else None
        return Part(operand, register, half, None, immediate, 16 if operand.half else 32)

    def check(self) -> None:
        """Raise :class:`CoreError` unless every operation of the core fits; builds all of them."""
        for operation in self.operations.by_name.values():
            self.format_of(operation)

    def _too_narrow(self) -> CoreError:
        """The complaint names the widest operation, so that one change of ``words.bits`` is enough."""
        needs = {name: self._build(operation).needs for name, operation in self.operations.by_name.items()}
        widest = max(needs, key=lambda name: needs[name])
        return CoreError(
            problem(
                "words-too-narrow",
                f"words.bits = {self.core.words.bits}, and {widest} needs {needs[widest]} bits",
                f"words of at least {needs[widest]} bits",
                f"words.bits = {-(-needs[widest] // 8) * 8}, or fewer registers",
                key="words.bits",
            )
        )


@lru_cache(maxsize=8)
def layout(core: Core, operations: OperationSet) -> Layout:
    """The layout of ``core``'s words; its formats are built as they are asked for.

    Raises :class:`CoreError` when a word has no room for the header or for a 32-bit extension.
    """
    found = Layout(core, operations)
    least = max(IMMEDIATE_BITS, found.guard.end)
    if core.words.bits < least or core.words.bits % 8:
        raise CoreError(
            problem(
                "words-too-narrow",
                f"words.bits = {core.words.bits}",
                f"a multiple of 8, at least {least} (header {found.guard.end} bits, extension words 32)",
                f"words.bits = {-(-max(least, core.words.bits) // 8) * 8}",
                key="words.bits",
            )
        )
    return found
