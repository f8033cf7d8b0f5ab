"""Slot assignment: which unit of the core carries out each operation of a bundle.

Pins are fixed. The rest is a bipartite matching of operations and slots that asks for the fewest crossing operands: a
greedy pass settles almost every bundle, a maximum matching of least cost (networkx, imported only then) the others, and
where a link would carry too much a bounded search looks for another one. The result depends on nothing but the bundle.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

from vliwsim.description.core import Core
from vliwsim.program.assembly.operands import Ready

BUSY_COST = 64
"""What a slot whose unit is still busy costs, in crossings: it is taken only when no other way is left."""
MOST_TRIES = 20_000
"""Steps of the search for an assignment that the links can carry."""


class Crowd(NamedTuple):
    """Operations (by index in the bundle) that have only ``slots`` to share, fewer than they are."""

    operations: tuple[int, ...]
    slots: tuple[int, ...]


class NoSlots(Exception):
    """A bundle has no assignment, because of ``crowds``."""

    def __init__(self, crowds: list[Crowd]) -> None:
        super().__init__(crowds)
        self.crowds = crowds


class SlotChooser:
    """Chooses slots on one core. Results are remembered by what they depend on."""

    def __init__(self, core: Core) -> None:
        self.core = core
        self._fits: dict[tuple[object, ...], tuple[tuple[int, int], ...]] = {}
        self._matched: dict[tuple[object, ...], dict[int, int]] = {}

    def fitting(self, ready: Ready) -> tuple[tuple[int, int], ...]:
        """(crossing operands, slot) for every slot that can carry out ``ready``, best first."""
        clusters = self.core.register_clusters
        key = (
            ready.operation.operation_class,
            *[clusters[register] for register, _, _ in ready.writes],
            None,
            *[(clusters[register], operand) for register, operand in ready.reads],
        )
        found = self._fits.get(key)
        if found is None:
            fits = [(cost, k) for k in range(len(self.core.slots)) if (cost := self.cost(ready, k)) is not None]
            found = self._fits[key] = tuple(sorted(fits))
        return found

    def cost(self, ready: Ready, slot: int) -> int | None:
        """Crossing operands of ``ready`` in ``slot``; None where it cannot stand."""
        if ready.operation.operation_class not in self.core.slots[slot].classes:
            return None
        clusters, home = self.core.register_clusters, self.core.slot_clusters[slot]
        if any(clusters[register] != home for register, _, _ in ready.writes):
            return None
        cost = 0
        for register, operand in ready.reads:
            source = clusters[register]
            if source != home:
                link = self.core.link_table.get((source, home))
                if link is None or not link.operands or operand not in self.core.slots[slot].crossing:
                    return None
                cost += 1
        return cost

    def choose(self, bundle: Sequence[Ready], busy: frozenset[int] = frozenset()) -> list[int]:
        """A slot index for each operation of a bundle.

        busy: slots whose unit is not free in this beat as far as the section shows; they are avoided.

        Raises :class:`NoSlots` when there are none.
        """
        chosen: list[int | None] = [ready.pin for ready in bundle]
        free = [k for k, slot in enumerate(chosen) if slot is None]
        if not free:
            return [slot for slot in chosen if slot is not None]
        pinned = {slot for slot in chosen if slot is not None}
        options: dict[int, list[tuple[int, int]]] = {}
        for k in free:
            fits = [(cost, slot) for cost, slot in self.fitting(bundle[k]) if slot not in pinned]
            if busy:
                fits = sorted((cost + BUSY_COST * (slot in busy), slot) for cost, slot in fits)
            options[k] = fits
        matched = _greedy(options)
        if matched is None:
            matched = self._matching(options)
            if len(matched) < len(free):
                raise NoSlots(_crowds(options, matched))
        if not self._carried(bundle, chosen, matched):
            matched = self._search(bundle, chosen, options) or matched
        return _merged(chosen, matched)

    def _matching(self, options: dict[int, list[tuple[int, int]]]) -> dict[int, int]:
        """As :func:`_matching`, remembered: schedules repeat themselves."""
        key = tuple([(k, *fits) for k, fits in options.items()])
        found = self._matched.get(key)
        if found is None:
            found = self._matched[key] = _matching(options)
        return found

    def _carried(self, bundle: Sequence[Ready], chosen: list[int | None], slots: dict[int, int]) -> bool:
        """Whether the links carry the crossing operands of an assignment; a partial one is judged as far as it goes."""
        places = [
            (ready, slot if slot is not None else slots.get(k)) for k, (ready, slot) in enumerate(zip(bundle, chosen))
        ]
        load = link_load(self.core, [(ready, slot) for ready, slot in places if slot is not None])
        return all(len(carried) <= self.core.link_table[pair].operands for pair, carried in load.items())

    def _search(
        self, bundle: Sequence[Ready], chosen: list[int | None], options: dict[int, list[tuple[int, int]]]
    ) -> dict[int, int] | None:
        """The first assignment that the links can carry, fewest options first; None when none is found."""
        order = sorted(options, key=lambda k: (len(options[k]), k))
        slots: dict[int, int] = {}
        tries = 0

        def extend(at: int) -> bool:
            nonlocal tries
            if at == len(order):
                return True
            for _, slot in options[order[at]]:
                tries += 1
                if tries > MOST_TRIES:
                    return False
                if slot in slots.values():
                    continue
                slots[order[at]] = slot
                if self._carried(bundle, chosen, slots) and extend(at + 1):
                    return True
                del slots[order[at]]
            return False

        return slots if extend(0) else None


def link_load(core: Core, placed: Sequence[tuple[Ready, int]]) -> dict[tuple[int, int], list[tuple[int, int]]]:
    """What each link carries: (index in ``placed``, register) of every operand that counts, in order.

    Operands between clusters without a link are left out.
    """
    clusters, links = core.register_clusters, core.link_table
    load: dict[tuple[int, int], list[tuple[int, int]]] = {}
    if not links:
        return load
    for k, (ready, slot) in enumerate(placed):
        home = core.slot_clusters[slot]
        for register, _ in ready.reads:
            source = clusters[register]
            if source == home or (source, home) not in links:
                continue
            carried = load.setdefault((source, home), [])
            if not links[source, home].shared or all(register != other for _, other in carried):
                carried.append((k, register))
    return load


def _merged(chosen: list[int | None], slots: dict[int, int]) -> list[int]:
    return [slots[k] if slot is None else slot for k, slot in enumerate(chosen)]


def _greedy(options: dict[int, list[tuple[int, int]]]) -> dict[int, int] | None:
    """Each operation, fewest options first, takes its best free slot; None unless none costs more than it must."""
    taken: set[int] = set()
    slots: dict[int, int] = {}
    for k in sorted(options, key=lambda k: (len(options[k]), k)) if len(options) > 1 else options:
        for cost, slot in options[k]:
            if slot not in taken:
                if cost > options[k][0][0]:
                    return None
                taken.add(slot)
                slots[k] = slot
                break
        else:
            return None
    return slots


def _matching(options: dict[int, list[tuple[int, int]]]) -> dict[int, int]:
    """A maximum matching of least cost, low slots preferred."""
    import networkx

    graph = networkx.Graph()
    most = 1 + max((cost for fits in options.values() for cost, _ in fits), default=0)
    graph.add_nodes_from(options)
    for k, fits in options.items():
        for cost, slot in fits:
            graph.add_edge(k, -1 - slot, weight=(most - cost) * 4096 - slot)
    pairs = networkx.max_weight_matching(graph, maxcardinality=True)
    return dict(sorted((max(a, b), -1 - min(a, b)) for a, b in pairs))


def _crowds(options: dict[int, list[tuple[int, int]]], matched: dict[int, int]) -> list[Crowd]:
    """Operations with fewer slots than they are: all that unmatched ones can reach by changing places with others."""
    user = {slot: k for k, slot in matched.items()}
    crowds: list[tuple[set[int], set[int]]] = []
    for first in [k for k in options if k not in matched]:
        reached, slots = [first], set[int]()
        for k in reached:
            for _, slot in options[k]:
                if slot not in slots:
                    slots.add(slot)
                    reached.append(user[slot])
        operations = set(reached)
        for crowd in [crowd for crowd in crowds if crowd[1] & slots]:
            crowds.remove(crowd)
            operations |= crowd[0]
            slots |= crowd[1]
        crowds.append((operations, slots))
    return [Crowd(tuple(sorted(operations)), tuple(sorted(slots))) for operations, slots in crowds]
