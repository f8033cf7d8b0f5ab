"""Decoded programs: what the decoder produces and every later room works on.

Addresses of code are byte addresses of operation words: word i stands at ``i * core.words.bytes``. A position counts
bundles in program order, an idle word of k beats counting k.
"""

from __future__ import annotations

import enum
from collections.abc import Mapping
from functools import cached_property
from typing import NamedTuple

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import Operation, Role


class Register(NamedTuple):
    """A register operand: its number in the core, and for a half operand which half (0 low, 1 high).

    A pair is named by its even register.
    """

    number: int
    half: int | None = None


class Immediate(NamedTuple):
    """A constant operand, as the raw unsigned 32-bit value the operation receives (16-bit for a half operand).

    As a target it is the byte address of a bundle.
    """

    value: int


class Label(NamedTuple):
    """A code address not yet placed; only between the assembler and the encoder, never in decoded code."""

    name: str


class Mode(enum.Enum):
    """How an address operand makes its address and what it leaves in the base."""

    OFFSET = "offset"  # [base + step]: address base + step, base unchanged
    AFTER = "after"  # [base then +step]: address base, then base becomes base + step
    BEFORE = "before"  # [+step then base]: base becomes base + step, and that is the address


class Address(NamedTuple):
    """An address operand. ``ring`` is the size in bytes of a power-of-two ring (AFTER only), 0 for none.

    In a ring of N bytes the base becomes ``base & ~(N - 1) | (base + step) & (N - 1)``.
    """

    base: int
    mode: Mode
    step: Register | Immediate
    ring: int = 0


Place = Register | Immediate | Address | Label


class Guard(NamedTuple):
    """On when the register is not 0, or with ``negated`` when it is 0."""

    register: int
    negated: bool = False


class Instruction(NamedTuple):
    """One operation in a bundle: its slot index in the core, guard, and one place an operand of the operation.

    ``targets``: of a branch to a register, the only places it may go to, where the source names them; in decoded code
    immediates, in order of address.
    """

    operation: Operation
    slot: int
    places: tuple[Place, ...]
    guard: Guard | None = None
    targets: tuple[Immediate | Label, ...] = ()


def indirect(instruction: Instruction) -> int | None:
    """The register that a branch takes its target from; None for anything else."""
    for operand, place in zip(instruction.operation.operands, instruction.places):
        if operand.role is Role.TARGET and isinstance(place, Register):
            return place.number
    return None


class Bundle(NamedTuple):
    """One bundle, or an idle word of ``beats`` empty bundles (then ``instructions`` is empty).

    ``address``: byte address of its first word. ``position``: in program order. ``words``: operation words it takes,
    extensions included. ``straddles``: its words cross a fetch-group boundary. Instructions stand in slot order, those
    of one slot as written.
    """

    address: int
    position: int
    instructions: tuple[Instruction, ...] = ()
    beats: int = 1
    words: int = 1
    straddles: bool = False


@attrs.frozen
class Program:
    """Decoded code for one core, in program order; execution enters at the first bundle.

    ``code_bytes`` is the encoded size, padding included.
    """

    core: Core
    bundles: tuple[Bundle, ...]
    code_bytes: int
    labels: Mapping[str, int] = attrs.field(factory=dict)
    """Label name → byte address, for people; the machine does not use it."""

    @cached_property
    def index_at(self) -> Mapping[int, int]:
        """Bundle index by byte address."""
        return {bundle.address: k for k, bundle in enumerate(self.bundles)}

    @cached_property
    def index_at_position(self) -> Mapping[int, int]:
        """Bundle index by program-order position of its first beat."""
        return {bundle.position: k for k, bundle in enumerate(self.bundles)}
