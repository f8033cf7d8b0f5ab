"""Step 3 of a context's beat, read: both rounds of rules."""

from __future__ import annotations

from vliwsim.flow.beat import Moment
from vliwsim.flow.values import ALWAYS, Condition
from vliwsim.machine.bundle_rules import BUSY, ROUND_ONE


def read(now: Moment) -> bool:
    """Judge both rounds; False where the bundle cannot issue on any data."""
    prepared, static = now.prepared, now.prepared.static
    busy = dict(now.context.busy)
    taken = [k for k, part in enumerate(prepared.parts) if part.instruction.slot in busy]
    if taken and not (static and (static[0], static[1]) < (taken[0], BUSY)):
        now.find("busy", [now.here(taken[0])], True)
        return False
    if static:
        now.find(ROUND_ONE[static[1]], [now.here(static[0])], True, detail=static[2])
        return False
    for k, register, link in prepared.fresh:
        if link.fresh != "reject":
            continue
        for flight in now.context.flights:
            if flight.beats == 0 and now.register(flight) == register:
                now.find("fresh", [now.here(k), now.site(flight)], not flight.on, register=register)
    for k, part in enumerate(prepared.parts):
        guard, on = part.instruction.guard, now.guard(k)
        if guard:
            judge_early(now, k, guard.register, ALWAYS)
        if on is not None:
            for register in dict.fromkeys(r.register for r in part.effects.reads):
                judge_early(now, k, register, on)
    return True


def judge_early(now: Moment, k: int, register: int, on: Condition) -> None:
    flights = [f for f in now.flights if now.register(f) == register and now.knowledge.possible(on, f.on)]
    if flights:
        sure = not on and any(not f.on for f in flights)
        sites = [now.here(k), *(now.site(f) for f in flights)]
        beats = min(f.beats for f in flights)
        now.find("early-read", sites, sure, register=register, beats=beats)
