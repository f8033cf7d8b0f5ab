"""Step 1 of a context's beat, land: results due reach their registers, if their conditions hold."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from vliwsim.flow.beat import Moment
from vliwsim.flow.context import Flight
from vliwsim.flow.values import Condition, Constant, literal


def land(now: Moment, due: Sequence[Flight]) -> None:
    now.landed += [(flight.number, not flight.on) for flight in due]
    judge_landing(now, due)
    for flight in due:
        if now.register(flight) in now.follow.index:
            bring(now, flight)


def judge_landing(now: Moment, due: Sequence[Flight], sure: bool = True) -> None:
    """``lands-twice`` and ``write-ports`` of results that land together, ``sure`` if they land at all."""
    by_register: dict[int, list[Flight]] = {}
    for flight in due:
        if now.ready.sites[flight.number].write.what != "sticky":
            by_register.setdefault(now.register(flight), []).append(flight)
    for register, flights in by_register.items():
        for k, one in enumerate(flights):
            for other in flights[k + 1 :]:
                if now.knowledge.possible(one.on, other.on):
                    both_on = sure and not one.on and not other.on
                    now.find("lands-twice", [now.site(one), now.site(other)], both_on, register=register)
    judge_ports(now, due, sure)


def judge_ports(now: Moment, due: Sequence[Flight], sure: bool) -> None:
    for index, cluster in enumerate(now.core.clusters):
        here = [f for f in due if now.core.register_clusters[now.register(f)] == index]
        if len(here) <= cluster.write_ports or most(f.on for f in here) <= cluster.write_ports:
            continue
        all_on = sure and sum(not f.on for f in here) > cluster.write_ports
        now.find("write-ports", [now.site(f) for f in here], all_on, detail=cluster.name)


def most(conditions: Iterable[Condition]) -> int:
    """An upper bound of how many of the conditions may hold together: literals of one value exclude each other."""
    count, sides = 0, dict[int, list[int]]()
    for on in conditions:
        if len(on) == 1:
            (item,) = on
            sides.setdefault(item.value, [0, 0])[item.nonzero] += 1
        else:
            count += 1
    return count + sum(max(pair) for pair in sides.values())


def bring(now: Moment, flight: Flight) -> None:
    """A result reaches a register whose value is followed."""
    register = now.register(flight)
    if now.core.register_names[register] in now.core.zero_registers:
        return
    index = now.follow.index[register]
    old, new = now.values[index], flight.value
    assert new is not None
    if not flight.on or old == new:
        now.values[index] = new
    elif flight.since is not None and old == flight.since and flight.on == literal(flight.since, True):
        now.values[index] = new  # counted down where not zero, and still the same zero where it is
    elif register in now.follow.addresses and (isinstance(old, Constant) or isinstance(new, Constant)):
        now.values[index] = new if now.decide(flight.on) else old  # so that where the code goes stays known
    else:
        now.values[index] = joined = now.fresh_identity()
        now.joined[joined] = flight.on
