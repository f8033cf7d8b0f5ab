"""Step 2 of a context's beat, on interlocked cores: whether the bundle waits."""

from __future__ import annotations

from vliwsim.flow.beat import Moment
from vliwsim.flow.context import Flight
from vliwsim.flow.values import Condition, both, literal


def wait(now: Moment) -> str | None:
    parts = now.prepared.parts
    for part in parts:
        if part.instruction.guard and pending(now, part.instruction.guard.register):
            return "hold"
    judge_written_twice(now)
    busy = dict(now.context.busy)
    for part in parts:
        registers = [r.register for r in part.effects.reads] + [w.register for w in part.effects.writes]
        if any(pending(now, register) for register in registers) or part.instruction.slot in busy:
            return "hold"
    if not fits_ports(now):
        return "hold"
    if not now.context.waited:
        for _, register, link in now.prepared.fresh:
            if link.fresh == "stall" and just_landed(now, register):
                return "fresh"
    return None


def pending(now: Moment, register: int) -> bool:
    """Whether a register has a result in flight; forks where that depends on a guard."""
    return any([now.decide(now.knowledge.settle(f.on)) for f in now.flights if now.register(f) == register])


def just_landed(now: Moment, register: int) -> bool:
    due = [f for f in now.context.flights if f.beats == 0 and now.register(f) == register]
    return any([now.decide(f.on) for f in due])


def judge_written_twice(now: Moment) -> None:
    named: list[tuple[int, int, Condition]] = []
    for k, part in enumerate(now.prepared.parts):
        on = now.guard(k)
        if on is None:
            continue
        for register in dict.fromkeys(w.register for w in part.effects.writes if w.what != "sticky"):
            for other, j, other_on in named:
                if other == register and now.knowledge.possible(on, other_on):
                    sure = not on and not other_on
                    now.find("written-twice", [now.here(j), now.here(k)], sure, register=register)
            named.append((register, k, on))


def fits_ports(now: Moment) -> bool:
    """Whether the results fit the ports beside those in flight; forks where guards decide."""
    clusters = now.core.register_clusters
    beside: dict[tuple[int, int], list[Flight]] = {}
    for flight in now.flights:
        beside.setdefault((flight.beats, clusters[now.register(flight)]), []).append(flight)
    own: dict[tuple[int, int], list[int]] = {}
    for k, part in enumerate(now.prepared.parts):
        for write in part.effects.writes:
            own.setdefault((write.latency, clusters[write.register]), []).append(k)
    crowded = [key for key, mine in own.items() if len(mine) + len(beside.get(key, ())) > ports(now, key)]
    if not crowded:
        return True
    counts = {key: sum(now.decide(writes(now, k)) for k in mine) for key, mine in own.items()}
    if any(count > ports(now, key) for key, count in counts.items()):
        return True
    for key in crowded:
        if counts[key] and counts[key] + sum(now.decide(f.on) for f in beside.get(key, ())) > ports(now, key):
            return False
    return True


def ports(now: Moment, key: tuple[int, int]) -> int:
    return now.core.clusters[key[1]].write_ports


def writes(now: Moment, k: int) -> Condition | None:
    """The condition that instruction ``k`` has results: its guard, and for a ``count`` that it branches."""
    part, on = now.prepared.parts[k], now.guard(k)
    if part.operation.count:
        counted = literal(now.value(part.inputs[0].index), True)
        joined = both(on, counted)
        return None if joined is None else now.knowledge.settle(joined)
    return on
