"""Values that spread along a graph of contexts: a forward analysis of registers and of what is in flight.

A domain says what an instruction makes of what it reads and how two ways join; landing, flight and paths are the same
for all.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Sequence
from typing import Generic, Protocol, TypeVar

from vliwsim.flow.graph import Graph

V = TypeVar("V")


class Domain(Protocol[V]):
    """One kind of value; ``V`` is immutable and has equality."""

    def entry(self, register: int) -> V:
        """Of a register before the first beat."""
        ...

    def join(self, one: V, other: V) -> V:
        """Of a place that two ways lead to."""
        ...

    def maybe(self, old: V, new: V) -> V:
        """Of a register with ``old`` after ``new`` has landed there, or has not."""
        ...

    def sticky(self, old: V, new: V) -> V:
        """Of a register with ``old`` into which ``new`` is ORed."""
        ...

    def issue(self, context: int, registers: Sequence[V]) -> Mapping[int, V]:
        """What the bundle of a context sends off, by write number; ``registers`` as it reads them."""
        ...

    def along(self, source: int, target: int, values: list[V]) -> list[V]:
        """Values as they arrive in context ``target`` from ``source``."""
        ...


class Spread(Generic[V]):
    """The values of a domain on every context of a walked graph, at rest.

    ``before``: (registers, flights in the context's order) as the beat begins. ``read``: registers after what is due
    has landed; None where the context was never reached.
    """

    def __init__(self, graph: Graph, domain: Domain[V]) -> None:
        self.graph, self.domain = graph, domain
        self.sites = graph.ready.sites
        names, zero = graph.ready.core.register_names, set(graph.ready.core.zero_registers)
        self.fixed = frozenset(k for k, name in enumerate(names) if name in zero)
        count = len(graph.contexts)
        self.before: list[tuple[list[V], list[V]] | None] = [None] * count
        self.read: list[list[V] | None] = [None] * count
        self.before[0] = [domain.entry(k) for k in range(len(names))], []
        self._run()

    def _run(self) -> None:
        ahead, waiting = deque([0]), {0}
        while ahead:
            index = ahead.popleft()
            waiting.discard(index)
            for target, registers, flights in self._leave(index):
                if self._arrive(target, registers, flights) and target not in waiting:
                    waiting.add(target)
                    ahead.append(target)

    def _leave(self, index: int) -> list[tuple[int, list[V], list[V]]]:
        """What a context hands on: (target, registers, flights)."""
        graph, beat = self.graph, self.graph.beats[index]
        before = self.before[index]
        assert before is not None
        if beat is None:
            return []
        context = graph.contexts[index]
        old = {(f.number, f.beats): value for f, value in zip(context.flights, before[1], strict=True)}
        new: Mapping[int, V] = {}
        aged = beat.did != "fork"
        registers = before[0]
        if aged:
            registers = self.read[index] = self.landed(index)
            if beat.guards:
                new = self.domain.issue(index, registers)
        found = []
        for target in graph.successors(index):
            if target is not None:
                flights = []
                for f in graph.contexts[target].flights:
                    if f.number in new and f.beats == self.sites[f.number].write.latency - 1:
                        flights.append(new[f.number])
                    else:
                        flights.append(old[f.number, f.beats + aged])
                arrived = self.domain.along(index, target, [*registers, *flights])
                found.append((target, arrived[: len(registers)], arrived[len(registers) :]))
        return found

    def landed(self, index: int) -> list[V]:
        """The registers of a context after what is due has landed."""
        before = self.before[index]
        assert before is not None
        registers = list(before[0])
        for flight, new in zip(self.graph.contexts[index].flights, before[1], strict=True):
            if flight.beats:
                break
            self.land(registers, flight.number, new, not flight.on)
        return registers

    def land(self, registers: list[V], number: int, new: V, sure: bool) -> None:
        """One result reaches its register."""
        write, domain = self.sites[number].write, self.domain
        if write.register in self.fixed:
            return
        old = registers[write.register]
        if write.what == "sticky":
            new = domain.sticky(old, new)
        registers[write.register] = new if sure else domain.maybe(old, new)

    def _arrive(self, target: int, registers: list[V], flights: list[V]) -> bool:
        known = self.before[target]
        if known is None:
            self.before[target] = list(registers), list(flights)
            return True
        changed = False
        for mine, theirs in zip(known, (registers, flights), strict=True):
            for k, value in enumerate(theirs):
                if value != mine[k]:
                    joined = self.domain.join(mine[k], value)
                    if joined != mine[k]:
                        mine[k] = joined
                        changed = True
        return changed
