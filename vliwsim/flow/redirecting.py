"""Step 5 of a context's beat, redirect: where each branch that lands leads, and the contexts that follow."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from vliwsim.description.operations import Kind
from vliwsim.flow.beat import Beat, Moment
from vliwsim.flow.context import Context, Flight, Turn, normal
from vliwsim.flow.landing import judge_landing
from vliwsim.flow.values import Condition, Knowledge


def redirect(now: Moment, issued: list[Turn], halts: Condition | None) -> Beat:
    context, prepared = now.context, now.prepared
    for k, one in enumerate(issued):
        for other in issued[k + 1 :]:
            if now.knowledge.possible(one.on, other.on):
                now.find("two-redirects", [one.site, other.site], not one.on and not other.on)
    judge_branches(now)
    turns = [*context.turns, *issued]
    successors: list[Context | None] = []
    if halts is not None:
        for turn in turns:
            if now.knowledge.possible(turn.on, halts):
                at_halt = [now.here(k) for k, p in enumerate(prepared.parts) if p.operation.kind is Kind.HALT]
                now.find("branch-past-halt", [turn.site, *at_halt], not turn.on and not halts)
        drain(now, halts)
        successors.append(None)
        if not halts:
            return now.beat("issue", successors)
        if not learn_opposite(now, halts):
            return now.beat("issue", successors)
    landing = [t for t in turns if t.bundles == 1]
    flying = [t for t in turns if t.bundles > 1]
    for turn in landing:
        successors += taken(now, turn, flying)
    if all(turn.on for turn in landing):
        successors += not_taken(now, landing, flying)
    return now.beat("issue", successors)


def drain(now: Moment, halts: Condition) -> None:
    """Judge what lands behind a ``halt``."""
    kept = now.knowledge
    now.knowledge = Knowledge(kept.facts, kept.implied)
    if now.knowledge.learn(sorted(halts)):
        by_beat: dict[int, list[Flight]] = {}
        for flight in now.flights:
            on = now.knowledge.settle(flight.on)
            if on is not None:
                by_beat.setdefault(flight.beats, []).append(flight._replace(on=on))
        for _, flights in sorted(by_beat.items()):
            judge_landing(now, flights, not halts)
    now.knowledge = kept


def taken(now: Moment, turn: Turn, flying: Sequence[Turn]) -> list[Context]:
    knowledge = Knowledge(now.knowledge.facts, now.knowledge.implied)
    if not knowledge.learn(sorted(turn.on)):
        return []
    found: list[Context] = []
    for target in turn.targets or ():
        if target < 0:
            now.find("ran-off-the-end", [turn.site], True, detail="a branch goes where no bundle begins")
        else:
            found += some(later(now, target, 0, flying, False, knowledge))
    return found


def not_taken(now: Moment, landing: Sequence[Turn], flying: Sequence[Turn]) -> list[Context]:
    knowledge = Knowledge(now.knowledge.facts, now.knowledge.implied)
    for turn in landing:
        if len(turn.on) == 1 and not knowledge.learn(item.opposite for item in turn.on):
            return []
    at, within = now.context.at, now.context.within + 1
    if within >= now.prepared.bundle.beats:
        at, within = at + 1, 0
    if at >= len(now.ready.program.bundles):
        now.find("ran-off-the-end", [], True, detail="the program ends without halt")
        return []
    return some(later(now, at, within, flying, False, knowledge))


def judge_branches(now: Moment) -> None:
    branches = [k for k, part in enumerate(now.prepared.parts) if part.branches]
    crowded = len(branches) > 1 or now.context.behind < now.core.branch.latency
    if branches and crowded and not now.core.branch.overlap:
        now.find("branch-overlap", [now.here(k) for k in branches], True)
    for k in branches:
        part, on = now.prepared.parts[k], now.guard(k)
        if part.uses_link and part.link is None and on is not None:
            now.find("link-nowhere", [now.here(k)], not on)


def learn_opposite(now: Moment, condition: Condition) -> bool:
    """Go on where ``condition`` does not hold; False if it then cannot go on."""
    return len(condition) > 1 or now.knowledge.learn(item.opposite for item in condition)


def some(context: Context | None) -> list[Context]:
    return [] if context is None else [context]


def later(
    now: Moment, at: int, within: int, turns: Iterable[Turn], waited: bool, knowledge: Knowledge | None = None
) -> Context | None:
    """The context of the next beat. With ``knowledge`` given a bundle has issued, else the same bundle waits."""
    issued = knowledge is not None
    busy = {slot: beats - 1 for slot, beats in now.context.busy}
    behind = now.context.behind
    if issued:
        for part in now.prepared.parts:
            slot = part.instruction.slot
            busy[slot] = max(busy.get(slot, 0), part.effects.busy - 1)
        has_branch = any(part.branches for part in now.prepared.parts)
        behind = 1 if has_branch else min(behind + 1, now.core.branch.latency)
        turns = [t._replace(bundles=t.bundles - 1) for t in turns]
    flights = [f._replace(beats=f.beats - 1) for f in now.flights]
    return normal(
        at,
        within,
        flights,
        turns,
        [(s, n) for s, n in busy.items() if n > 0],
        behind,
        now.values,
        knowledge or now.knowledge,
        waited,
    )
