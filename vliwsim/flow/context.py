"""One pipeline context, and its normal form: two moments with equal contexts go on alike."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import NamedTuple

from vliwsim.flow.values import Condition, Constant, Identity, Implied, Knowledge, Known, Literal


class Flight(NamedTuple):
    """A result that lands in ``beats`` beats (0: in this one) if ``on`` holds; write number ``number``.

    ``value``: what it brings to a register whose values are followed, else None. ``since``: of a ``count``'s update,
    the value it was counted down from.
    """

    beats: int
    number: int
    on: Condition
    value: Known | None
    since: Known | None = None


class Turn(NamedTuple):
    """A branch in flight: the bundle after ``bundles`` more comes from ``target`` if ``on`` holds.

    ``targets`` are bundle indices, one of which it is, -1 where no bundle begins; None where that is not known.
    ``site``: (bundle, instruction) that issued it.
    """

    bundles: int
    site: tuple[int, int]
    on: Condition
    targets: tuple[int, ...] | None


class Context(NamedTuple):
    """At the start of a beat, before anything lands.

    ``at``: bundle index, ``within``: beats of its idle word already issued. ``busy``: (slot, beats still taken).
    ``behind``: bundles since the last branch issued, at most the branch latency. ``values``: of the registers that are
    followed, in order. ``facts``: (identity, is it nonzero), ``implied``: (identity, what holds where it is not zero).
    ``waited``: the bundle has had its wait for a fresh operand.
    """

    at: int
    within: int
    flights: tuple[Flight, ...]
    turns: tuple[Turn, ...]
    busy: tuple[tuple[int, int], ...]
    behind: int
    values: tuple[Known, ...]
    facts: tuple[tuple[Identity, bool], ...]
    implied: tuple[tuple[Identity, Implied], ...]
    waited: bool = False

    @property
    def knowledge(self) -> Knowledge:
        return Knowledge(dict(self.facts), dict(self.implied))


def normal(
    at: int,
    within: int,
    flights: Iterable[Flight],
    turns: Iterable[Turn],
    busy: Iterable[tuple[int, int]],
    behind: int,
    values: Sequence[Known],
    knowledge: Knowledge,
    waited: bool,
) -> Context | None:
    """The context with identities numbered in order of use and only live knowledge kept; None if it contradicts itself.

    Conditions that are known to hold are dropped, results and branches that are known to be off too.
    """
    kept_flights = [(f, on) for f in flights if (on := knowledge.settle(f.on)) is not None]
    kept_turns = [(t, on) for t in turns if (on := knowledge.settle(t.on)) is not None]
    kept_flights.sort(key=lambda item: (item[0].beats, item[0].number))
    kept_turns.sort(key=lambda item: (item[0].bundles, item[0].site))
    numbers: dict[Identity, Identity] = {}

    def renumbered(value: Known) -> Known:
        if isinstance(value, Constant):
            return value
        if knowledge.facts.get(value) is False:
            return Constant(0)
        return numbers.setdefault(value, len(numbers))

    def maybe(value: Known | None) -> Known | None:
        return None if value is None else renumbered(value)

    def condition(on: Condition) -> Condition:
        return frozenset(Literal(numbers.setdefault(i.value, len(numbers)), i.nonzero) for i in sorted(on))

    new_values = tuple(renumbered(value) for value in values)
    new_flights = tuple(
        Flight(f.beats, f.number, condition(on), maybe(f.value), maybe(f.since)) for f, on in kept_flights
    )
    new_turns = tuple(Turn(t.bundles, t.site, condition(on), t.targets) for t, on in kept_turns)
    facts = tuple(sorted((numbers[v], nonzero) for v, nonzero in knowledge.facts.items() if v in numbers))
    implied = []
    for old, new in numbers.items():
        if knowledge.facts.get(old) is None:
            kept = [Literal(numbers[i.value], i.nonzero) for i in _told(old, knowledge, numbers)]
            if kept:
                implied.append((new, tuple(sorted(kept))))
    return Context(
        at,
        within,
        new_flights,
        new_turns,
        tuple(sorted(busy)),
        behind,
        new_values,
        facts,
        tuple(sorted(implied)),
        waited,
    )


def _told(value: Identity, knowledge: Knowledge, kept: Mapping[Identity, Identity]) -> set[Literal]:
    """What follows for the ``kept`` identities where ``value`` is not zero, through those that are not kept."""
    found: set[Literal] = set()
    ahead, seen = [value], {value}
    while ahead:
        for item in knowledge.implied.get(ahead.pop(), ()):
            if item.value in kept:
                if knowledge.facts.get(item.value) is None:
                    found.add(item)
            elif item.nonzero and item.value not in seen:
                seen.add(item.value)
                ahead.append(item.value)
    return found
