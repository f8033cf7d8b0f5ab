"""Step 1, land: results due become visible; and what is still in flight."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

from vliwsim.description.values import Undefined, Value
from vliwsim.machine.hazards import Cause
from vliwsim.machine.issued import stop
from vliwsim.machine.prepared import Preparation
from vliwsim.machine.state import State


def land(ready: Preparation, state: State) -> None:
    """Step 1: results due become visible, or the first of ``lands-twice`` and ``write-ports`` and none does."""
    due = state.flight.pop(state.beat, [])
    numbers = [n for batch, _ in due for n in batch]
    judge_landing(ready, state, numbers)
    zero = {ready.core.register_numbers[name] for name in ready.core.zero_registers}
    landings = [(ready.sites[n].write, value) for batch, values in due for n, value in zip(batch, values, strict=True)]
    for write, value in sorted(landings, key=lambda landing: landing[0].what == "sticky"):
        if write.register in zero:
            continue
        if write.what == "sticky":
            value = either(state.operands[write.register], value)
        state.operands[write.register] = value
    state.landed = frozenset(write.register for write, _ in landings)


def either(one: Value, other: Value) -> Value:
    """The OR of two values; undefined as a whole where either is."""
    if isinstance(one, Undefined) or isinstance(other, Undefined):
        return Undefined(0, 0b1111)
    return one | other


def judge_landing(ready: Preparation, state: State, numbers: Sequence[int]) -> None:
    """Raise the first hazard of results landing together, given their write numbers."""
    core, sites = ready.core, ready.sites
    seen: dict[int, int] = {}
    for n in numbers:
        write = sites[n].write
        if write.what == "sticky":
            continue
        if write.register in seen:
            both = [seen[write.register], n]
            raise stop(
                "lands-twice",
                state,
                state.at,
                f"two results reach {core.register_names[write.register]}",
                (landing_cause(ready, state, k) for k in both),
            )
        seen[write.register] = n
    for index, cluster in enumerate(core.clusters):
        here = [n for n in numbers if core.register_clusters[sites[n].write.register] == index]
        if len(here) > cluster.write_ports:
            raise stop(
                "write-ports",
                state,
                state.at,
                f"{len(here)} results land in cluster {cluster.name}, which has {cluster.write_ports} write ports",
                (landing_cause(ready, state, n) for n in here),
            )


def landing_cause(ready: Preparation, state: State, number: int) -> Cause:
    """The operation whose result ``number`` lands in this beat."""
    site = ready.sites[number]
    return Cause(site.bundle, site.instruction, state.beat - site.write.latency)


def pending(ready: Preparation, state: State) -> dict[int, list[tuple[int, int]]]:
    """Registers with results in flight: number → (write number, landing beat) of each."""
    found: dict[int, list[tuple[int, int]]] = {}
    for beat, batches in state.flight.items():
        for numbers, _ in batches:
            for n in numbers:
                found.setdefault(ready.sites[n].write.register, []).append((n, beat))
    return found


def in_flight_causes(ready: Preparation, flights: Iterable[tuple[int, int]]) -> Iterator[Cause]:
    """The operations behind results in flight."""
    for n, beat in flights:
        site = ready.sites[n]
        yield Cause(site.bundle, site.instruction, beat - site.write.latency)
