"""Hazards: what stops the machine, with the operations behind it.

The order in which hazards are judged within a beat is that of the phases of :mod:`vliwsim.machine.beat`; the names and
what each allows stand in :data:`ALLOWED`.
"""

from __future__ import annotations

from typing import NamedTuple

ALLOWED = {
    "lands-twice": "one result a register a beat",
    "write-ports": "as many results a cluster a beat as it has write ports",
    "undefined-used": "a defined value at a guard, a count, a branch's condition or target, and an address",
    "written-twice": "one operation a bundle that names a register as result, updated base or count register",
    "slot-taken": "one operation a slot a bundle",
    "slot-class": "an operation class that the slot executes",
    "guard-register": "one of the registers that the core allows as guard",
    "busy": "a slot whose unit is free",
    "read-ports": "as many registers read of a cluster a bundle as it has read ports",
    "links": "operands that a link carries, in number and place; results in the slot's own cluster",
    "fresh": "a register over a link one beat after it landed, or later",
    "early-read": "a register with no result in flight",
    "indirect-target": "one of the places that the branch names behind to",
    "misaligned": "an address that is a multiple of the access's size",
    "out-of-array": "addresses inside the arrays and scratch, for a read also in what their `over` declares",
    "store-twice": "one store a byte a beat",
    "bank-conflict": "one access a bank a beat",
    "two-redirects": "one taken branch a bundle",
    "ran-off-the-end": "a bundle at the next address",
    "branch-overlap": "a branch with no other in flight",
    "link-nowhere": "a word one branch latency behind a call, to return to",
    "branch-past-halt": "halt with no taken branch in flight",
}
"""Every hazard's stable name, in the order of judgement, and what is allowed instead."""


class Cause(NamedTuple):
    """One operation behind a hazard: instruction ``instruction`` of bundle ``bundle``, issued in beat ``beat``."""

    bundle: int
    instruction: int
    beat: int


class Hazard(NamedTuple):
    """``name`` at ``beat`` and ``cycle``, with bundle index ``bundle`` at the point of issue (``halt``'s in drain).

    ``found`` says what happened in terms of registers, clusters, slots and addresses; ``causes`` are the operations
    behind it, earliest first (none only where nothing is there to execute).
    """

    name: str
    beat: int
    cycle: int
    bundle: int
    found: str
    causes: tuple[Cause, ...]

    @property
    def allowed(self) -> str:
        return ALLOWED[self.name]


class HazardMet(Exception):
    """Carries a :class:`Hazard` out of the phase that met it. Inner to the machine; runs end with an Outcome."""

    def __init__(self, hazard: Hazard) -> None:
        self.hazard = hazard
        super().__init__(hazard)
