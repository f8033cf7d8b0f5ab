"""Step 2, hold: whether and why a bundle of an interlocked core waits in this beat."""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.description.values import Undefined
from vliwsim.machine.hazards import Cause
from vliwsim.machine.issued import stop
from vliwsim.machine.landing import pending
from vliwsim.machine.operands import guards_on, input_values
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation, Prepared
from vliwsim.machine.state import State


def wait(ready: Preparation, state: State, prepared: Prepared) -> str | None:
    """Step 2, interlocked cores: why the bundle waits in this beat (``hold``, ``fresh``), or None if it may issue."""
    out = pending(ready, state)
    if any(p.instruction.guard and p.instruction.guard.register in out for p in prepared.parts):
        return "hold"
    on = guards_on(ready, state, prepared)
    judge_written_twice(ready, state, prepared, on)
    for part in prepared.parts:
        registers = [r.register for r in part.effects.reads] + [w.register for w in part.effects.writes]
        if any(register in out for register in registers):
            return "hold"
        if state.busy_until[part.instruction.slot] > state.beat:
            return "hold"
    if not fits_ports(ready, state, prepared, on):
        return "hold"
    if not state.waited_fresh and any(
        link.fresh == "stall" and register in state.landed for _, register, link in prepared.fresh
    ):
        return "fresh"
    return None


def judge_written_twice(ready: Preparation, state: State, prepared: Prepared, on: Sequence[bool]) -> None:
    """Two guard-on operations of one bundle may not name one register as result, updated base or ``count`` register."""
    named: dict[int, int] = {}
    for k, part in enumerate(prepared.parts):
        if not on[k]:
            continue
        for write in part.effects.writes:
            if write.what == "sticky":
                continue
            other = named.setdefault(write.register, k)
            if other != k:
                raise stop(
                    "written-twice",
                    state,
                    prepared.index,
                    f"two operations of the bundle write {ready.core.register_names[write.register]}",
                    [Cause(prepared.index, k, state.beat), Cause(prepared.index, other, state.beat)],
                )


def fits_ports(ready: Preparation, state: State, prepared: Prepared, on: Sequence[bool]) -> bool:
    """Whether the bundle's results fit the write ports beside those in flight; a bundle that could never fit does."""
    core = ready.core
    own: dict[tuple[int, int], int] = {}
    for k, part in enumerate(prepared.parts):
        if not on[k]:
            continue
        for write in part.effects.writes:
            if write.what == "count" and not counts_down(state, part):
                continue
            key = write.latency, core.register_clusters[write.register]
            own[key] = own.get(key, 0) + 1
    if any(count > core.clusters[cluster].write_ports for (_, cluster), count in own.items()):
        return True
    for (latency, cluster), count in own.items():
        beside = sum(
            core.register_clusters[ready.sites[n].write.register] == cluster
            for numbers, _ in state.flight.get(state.beat + latency, [])
            for n in numbers
        )
        if count + beside > core.clusters[cluster].write_ports:
            return False
    return True


def counts_down(state: State, part: Part) -> bool:
    """Whether a ``count`` branches; an undefined one is taken not to."""
    values = input_values(state, part)
    return not isinstance(values[0], Undefined) and bool(part.operation.evaluate(values, part.halves)[-1])
