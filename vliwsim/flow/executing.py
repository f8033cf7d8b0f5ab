"""Step 4 of a context's beat, execute: results take off, branches are issued."""

from __future__ import annotations

from vliwsim.description.operations import Kind
from vliwsim.flow.beat import NAMED, UNKNOWN, Moment
from vliwsim.flow.context import Flight, Turn
from vliwsim.flow.values import ALWAYS, Condition, Constant, both


def execute(now: Moment) -> tuple[list[Turn], Condition | None]:
    """Results take off; the branches issued, and the condition that the bundle halts."""
    turns: list[Turn] = []
    halts: list[Condition] = []
    started: list[Flight] = []
    for k, part in enumerate(now.prepared.parts):
        on = now.guard(k)
        if on is None:
            continue
        if part.operation.kind is Kind.HALT:
            halts.append(on)
        brings, since = now.follow.result(now, part)
        if part.branches:
            taken = both(on, now.follow.taken(now, part))
            taken = None if taken is None else now.knowledge.settle(taken)
            if taken is not None:
                turns.append(Turn(now.core.branch.latency, now.here(k), taken, targets(now, k, taken)))
            if part.operation.count:
                on = taken
        if on is None:
            continue
        for write, number in zip(part.effects.writes, part.numbers, strict=True):
            value = None
            if write.register in now.follow.index:
                value = brings if write.what in ("result", "count") and brings is not None else now.fresh_identity()
            started.append(Flight(write.latency, number, on, value, since if write.what == "count" else None))
    now.flights += started
    if not halts:
        return turns, None
    return turns, ALWAYS if any(not h for h in halts) else halts[0]


def targets(now: Moment, k: int, taken: Condition) -> tuple[int, ...] | None:
    """The bundles that branch ``k`` may go to if ``taken``, -1 where none begins; None where that is not known."""
    part = now.prepared.parts[k]
    if part.target_register is None:
        return (-1 if part.target is None else part.target,)
    address, begins = now.value(part.target_register), now.ready.program.index_at
    if not isinstance(address, Constant):
        now.find("indirect-target", [now.here(k)], False, detail=NAMED if part.targets else UNKNOWN)
        return None if part.targets is None else tuple(sorted(begins.get(place, -1) for place in part.targets))
    if part.targets is None or address.bits in part.targets:
        return (begins.get(address.bits, -1),)
    now.find("indirect-target", [now.here(k)], not taken, detail=f"{address.bits:#x}")
    return ()
