"""Interrupts: where one may be taken without changing what the kernel computes.

While an interrupt is served everything in flight lands. A bundle is safe if on every path onward no register with a
result in flight is read, or gets another result, before that result would land; with a branch in flight none is taken.
"""

from __future__ import annotations

from typing import NamedTuple

from vliwsim.flow.graph import Graph

SAFE, SHIELDED, UNSAFE = "safe", "shielded", "unsafe"


class Reason(NamedTuple):
    """Why a bundle is unsafe: instruction ``instruction`` of ``bundle`` touches ``register`` ``beats`` beats on."""

    bundle: int
    instruction: int
    register: int
    beats: int


class Interrupts(NamedTuple):
    """For each bundle that is reached ``safe``, ``shielded`` (always a branch in flight) or ``unsafe``, with why.

    ``longest``: beats of the longest stretch in which none can be taken safely, None where a loop has no end to it;
    ``stretch``: the bundles it goes through.
    """

    bundles: dict[int, str]
    reasons: dict[int, Reason]
    longest: int | None
    stretch: tuple[int, ...]


def interrupts_of(graph: Graph) -> Interrupts:
    """Where interrupts may be taken in a completely walked graph."""
    bundles: dict[int, str] = {}
    reasons: dict[int, Reason] = {}
    points: set[int] = set()
    latency = graph.ready.core.branch.latency
    for index, context in enumerate(graph.contexts):
        beat = graph.beats[index]
        if beat is None or beat.did == "fork":
            continue
        if context.behind < latency:
            bundles.setdefault(context.at, SHIELDED)
            continue
        reason = _unsafe(graph, index)
        if reason is None:
            points.add(index)
            if bundles.get(context.at) != UNSAFE:
                bundles[context.at] = SAFE
        else:
            bundles[context.at] = UNSAFE
            reasons.setdefault(context.at, reason)
    longest, stretch = _longest(graph, points)
    return Interrupts(dict(sorted(bundles.items())), reasons, longest, stretch)


def _unsafe(graph: Graph, index: int) -> Reason | None:
    """The first use of something in flight at context ``index`` before it lands, on any path onward."""
    sites = graph.ready.sites
    lands: dict[int, int] = {}
    for flight in graph.contexts[index].flights:
        if flight.beats:
            register = sites[flight.number].write.register
            lands[register] = max(lands.get(register, 0), flight.beats)
    until = max(lands.values(), default=0)
    here = {index}
    passed = 0
    while here and passed < until:
        here = _settled(graph, here)
        following: set[int] = set()
        for context in sorted(here):
            found = _touches(graph, context, lands, passed)
            if found:
                return found
            following.update(s for s in graph.successors(context) if s is not None)
        here, passed = following, passed + 1
    return None


def _settled(graph: Graph, contexts: set[int]) -> set[int]:
    """The contexts that pass a beat, of some that may still fork."""
    found, seen = set[int](), set(contexts)
    ahead = list(contexts)
    while ahead:
        index = ahead.pop()
        beat = graph.beats[index]
        if beat is not None and beat.did == "fork":
            new = {s for s in graph.successors(index) if s is not None} - seen
            seen |= new
            ahead.extend(new)
        elif beat is not None:
            found.add(index)
    return found


def _touches(graph: Graph, index: int, lands: dict[int, int], passed: int) -> Reason | None:
    beat, at = graph.beats[index], graph.contexts[index].at
    assert beat is not None
    for k, (part, on) in enumerate(zip(graph.ready[at].parts, beat.guards)):
        guard = part.instruction.guard
        read = [guard.register] if guard else []
        if on is not False:
            read += [r.register for r in part.effects.reads]
            for write in part.effects.writes:
                if passed + write.latency <= lands.get(write.register, 0):
                    return Reason(at, k, write.register, passed)
        for register in read:
            if passed < lands.get(register, 0):
                return Reason(at, k, register, passed)
    return None


def _longest(graph: Graph, points: set[int]) -> tuple[int | None, tuple[int, ...]]:
    """Beats of the longest way through contexts that are no ``points``, and its bundles."""
    from networkx import DiGraph, dag_longest_path, find_cycle, is_directed_acyclic_graph

    ways: DiGraph[int] = DiGraph()
    for index in range(len(graph.contexts)):
        beat = graph.beats[index]
        if index in points or beat is None:
            continue
        ways.add_node(index)
        for target in graph.successors(index):
            if target is not None and target not in points:
                # a fork takes no time: what comes behind it does
                ways.add_edge(index, target, weight=int(beat.did != "fork"))
    if not ways:
        return 0, ()
    if not is_directed_acyclic_graph(ways):
        return None, _bundles(graph, [edge[0] for edge in find_cycle(ways)])
    path = dag_longest_path(ways)
    return sum(graph.beats[i].did != "fork" for i in path), _bundles(graph, path)


def _bundles(graph: Graph, path: list[int]) -> tuple[int, ...]:
    return tuple(dict.fromkeys(graph.contexts[index].at for index in path))
