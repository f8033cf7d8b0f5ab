"""Operations, as data: one class for a row of an operation table, and the set a core has.

The meaning's language lives in :mod:`vliwsim.description.language`; reading and checking the tables in
:mod:`vliwsim.description.tables`.
"""

from __future__ import annotations

import enum
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, NamedTuple

import attrs

from vliwsim.description.values import Value

if TYPE_CHECKING:
    from vliwsim.description.language.meaning import Meaning


class Role(enum.Enum):
    """What an operand is to its operation."""

    RESULT = "result"  # written
    SOURCE = "source"  # read
    INOUT = "inout"  # read and written (of a control operation: written, with class update, only when it branches)
    STICKY = "sticky"  # a second result that is ORed into its register when it lands
    ADDRESS = "address"  # a memory address form
    TARGET = "target"  # a label or a register that holds a code address
    CONSTANT = "constant"  # an immediate, never a register


class Operand(NamedTuple):
    """``type`` is a value type's name (``i32``, ``i16x2``, ``f32``…; ``i64``/``u64`` are register pairs).

    ``half``: reads one chosen half of a register, ``type`` then has 16 bits.
    """

    name: str
    role: Role
    type: str
    half: bool = False
    pair: bool = False


class Access(NamedTuple):
    """The one memory access of an operation: value ``type``, ``bytes`` (1, 2, 4, 8), load or store."""

    type: str
    bytes: int
    store: bool


class Kind(enum.Enum):
    """How the machine treats an operation."""

    COMPUTE = "compute"
    LOAD = "load"
    STORE = "store"
    BRANCH = "branch"  # any operation with a target operand
    HALT = "halt"


@attrs.frozen(eq=False)
class Operation:
    """One operation. Equality is identity: a core's operation set holds one object a name.

    ``inputs``: what :meth:`compiled` takes, in order: the names of SOURCE, INOUT and CONSTANT operands (and of a
    TARGET's nothing) in operand order, then ``loaded`` for a load, then ``link`` where the meaning uses it.
    ``outputs``: what it gives, in order: the names of RESULT, INOUT and STICKY operands in operand order, then
    ``stored`` for a store, then ``taken`` for a branch. One output is returned bare, several as a tuple, none as None.
    ``count``: the one kind of branch with an INOUT operand, whose register must be defined and is updated when taken.
    """

    name: str
    code: int
    operation_class: str
    operands: tuple[Operand, ...]
    kind: Kind
    access: Access | None
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    summary: str
    does: str
    examples: tuple[tuple[tuple[object, ...], tuple[object, ...]], ...]
    family: str
    file: str
    meaning: Meaning

    @property
    def count(self) -> bool:
        return self.kind is Kind.BRANCH and any(o.role is Role.INOUT for o in self.operands)

    def compiled(self, halves: tuple[int | None, ...] = ()) -> Callable[..., object]:
        """The fast function over raw unsigned values; see :meth:`Meaning.compiled`.

        ``halves``: for each of ``inputs``, which half of the raw register value it reads (None: not a half operand;
        for an immediate given to a half operand pass None too, its value is the 16 bits themselves). An
        :class:`~vliwsim.description.values.Undefined` that is computed with raises ``UndefinedOperand``; one that is
        only passed on is passed on.
        """
        return self.meaning.compiled(halves)

    def evaluate(self, inputs: Sequence[Value], halves: tuple[int | None, ...] = ()) -> tuple[Value, ...]:
        """The slow, exact twin of :meth:`compiled` that also follows undefined bytes lane by lane; always a tuple."""
        return self.meaning.evaluate(inputs, halves)


@attrs.frozen(eq=False)
class OperationSet:
    """The operations of a core, by name and by code. ``digest`` is a hex hash of the tables' contents."""

    by_name: Mapping[str, Operation]
    by_code: Mapping[int, Operation]
    digest: str
