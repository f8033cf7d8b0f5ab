"""Loops in which whole strips of passes can be judged before they are run.

A loop whose contexts form one cycle, and in which an address register is only ever moved on by constants, reads and
writes within bounds that are known for any number of passes ahead. Such a loop has a second copy of its contexts, the
trusted one: before it is entered for so many passes, memory is judged once for all their accesses; inside, accesses are
not judged again, and passes are counted once a strip.

This is loop versioning with strip-mining (D. Bacon, S. Graham and O. Sharp, Compiler transformations for
high-performance computing, ACM Computing Surveys 26, 1994).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, NamedTuple

from vliwsim.machine.parts import Part, Reach
from vliwsim.program.code import Mode

if TYPE_CHECKING:
    from vliwsim.native.contexts import Contexts, Step

SIGN = 1 << 31


class Walk(NamedTuple):
    """What one address register, and perhaps another added to it, can reach in a loop.

    In each pass the register moves by ``down`` (at most 0) to ``up`` bytes, or within a ring of ``ring`` bytes.
    Accesses begin at ``low`` bytes from it or later and end before ``high``. ``align``: the largest of them, bytes.
    ``store``: they are stores, else loads.
    """

    register: int
    added: int | None
    ring: int
    down: int
    up: int
    low: int
    high: int
    align: int
    store: bool


class Strip(NamedTuple):
    """A loop with a trusted copy. ``head``: where its strips begin; ``cycle``: its contexts from there on.

    ``walks``: what must be judged ahead. ``trusted``: (context, part) of the accesses that then need no judgement.
    """

    head: int
    cycle: tuple[int, ...]
    walks: tuple[Walk, ...]
    trusted: frozenset[tuple[int, int]]


def strip_of(walker: Contexts, steps: Sequence[Step], cycle: Sequence[int]) -> Strip | None:
    """The strip of a loop, its head first; None if no access of it can be judged ahead."""
    moves = _Moves(walker, [steps[k] for k in cycle])
    found: dict[tuple[int, int | None, bool], list[tuple[int, int, int]]] = {}
    trusted = set()
    for k in cycle:
        for j, part in enumerate(steps[k].prepared.parts):
            access, reach = part.operation.access, part.reach
            if access is None or reach is None:
                continue
            added = moves.added(reach, access.bytes)
            if added is None:
                continue
            register, offset = added
            found.setdefault((reach.base, register, access.store), []).append((offset, access.bytes, k))
            trusted.add((k, j))
    if not found:
        return None
    walks = tuple(
        Walk(
            base, added, *moves.ways(base),
            low=min(offset for offset, _, _ in some), high=max(offset + size for offset, size, _ in some),
            align=max(size for _, size, _ in some), store=store,
        )
        for (base, added, store), some in sorted(found.items(), key=lambda item: (item[0][0], str(item[0][1:])))
    )  # fmt: skip
    return Strip(cycle[0], tuple(cycle), walks, frozenset(trusted))


class _Moves:
    """How a loop moves its registers."""

    def __init__(self, walker: Contexts, steps: Sequence[Step]) -> None:
        self.first_constant, self.constants = walker.ready.first_constant, walker.ready.constants
        self.written: dict[int, list[tuple[Part, int]]] = {}
        for step in steps:
            for j, flight in step.new:
                place = step.prepared.parts[j], flight.number
                self.written.setdefault(walker.register(flight), []).append(place)

    def constant(self, index: int) -> int | None:
        """The number an operand-file place holds for ever, with its sign; None for a register."""
        if index < self.first_constant:
            return None
        value = self.constants[index - self.first_constant]
        return value - 2 * SIGN if value >= SIGN else value

    def step(self, part: Part, number: int) -> tuple[int, int] | None:
        """(bytes, ring) by which a part moves the register it writes as write ``number``; None if it does more."""
        reach = part.reach
        if reach is None or reach.update != number:
            return None
        by = self.constant(reach.step)
        return None if by is None else (by, reach.ring)

    def steps(self, register: int) -> list[tuple[int, int]] | None:
        """The moves of one register in a pass; None if it is not only moved on."""
        found = [self.step(*place) for place in self.written.get(register, ())]
        known = [one for one in found if one is not None]
        if len(known) < len(found) or len({ring for _, ring in known}) > 1:
            return None
        return known

    def ways(self, register: int) -> tuple[int, int, int]:
        """Ring, and the most that a register moves down and up in a pass, bytes."""
        steps = self.steps(register) or []
        return (
            steps[0][1] if steps else 0,
            sum(by for by, _ in steps if by < 0),
            sum(by for by, _ in steps if by > 0),
        )

    def added(self, reach: Reach, size: int) -> tuple[int | None, int] | None:
        """A register and bytes that an address adds to its base; None where the address cannot be known ahead."""
        steps = self.steps(reach.base) if reach.base < self.first_constant else None
        if steps is None or any(by % size or 0 < ring < size for by, ring in steps):
            return None
        if reach.mode is Mode.AFTER:
            return None, 0
        offset = self.constant(reach.step)
        if offset is None:
            still = not steps and reach.step not in self.written
            return (reach.step, 0) if still else None
        if offset % size or (steps and steps[0][1]):
            return None
        return None, offset
