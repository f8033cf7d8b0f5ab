"""Step 4 of a context's beat, execute: results take off, branches are issued."""

from __future__ import annotations

from vliwsim.description.operations import Kind
from vliwsim.flow.beat import Moment
from vliwsim.flow.context import Flight, Turn
from vliwsim.flow.values import ALWAYS, Condition, both


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
                target = now.follow.target(now, part)
                turns.append(Turn(now.core.branch.latency, now.here(k), taken, target))
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
