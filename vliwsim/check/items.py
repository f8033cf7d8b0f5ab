"""Said intent: does each operand come from the item of the loop that the source says.

A tagged operation works on one item, counted from the newest: ``item 4`` in a loop is the item that entered four passes
ago; in front of the loop the count is that of its first pass, behind it that of its last. Results carry their item, in
flight and in registers, and every branch back to the loop's label makes all of them one older.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import NamedTuple

from vliwsim.check.spread import Spread
from vliwsim.flow.graph import Graph
from vliwsim.program.kernel import ItemTag

Carried = tuple[int, int]
"""(loop, age): the loop is named by its first bundle's index, -1 where the program has none."""

LEFT_OVER = (-2, 0)
"""Of a register whose new value did not come, its guard being off: of no item."""

Tags = frozenset[Carried]
NONE: Tags = frozenset()

LABELLED = "loop"


class Wrong(NamedTuple):
    """An operand of another item than is said: ages, or None where it is of another loop's."""

    context: int
    bundle: int
    instruction: int
    register: int
    found: int
    wanted: int
    loop: int


class Loops:
    """Which loop a bundle's tags count in: the innermost around it, else the next behind it, else the last before."""

    def __init__(self, graph: Graph) -> None:
        first_last: dict[int, int] = {}
        for index, beat in enumerate(graph.beats):
            if beat is None:
                continue
            at = graph.contexts[index].at
            for target in graph.successors(index):
                if target is not None and beat.did == "issue" and self.is_back(graph, index, target):
                    first = graph.contexts[target].at
                    first_last[first] = max(first_last.get(first, at), at)
        self.ranges = sorted(first_last.items())

    @staticmethod
    def is_back(graph: Graph, source: int, target: int) -> bool:
        """Whether a beat of ``source`` that issues goes back to the first beat of the bundle of ``target``."""
        here, there = graph.contexts[source], graph.contexts[target]
        if there.within or graph.beats[source] is None:
            return False
        last = here.within + 1 >= graph.ready.program.bundles[here.at].beats
        return there.at < here.at or (there.at == here.at and last)

    def of(self, bundle: int) -> int:
        around = [first for first, last in self.ranges if first <= bundle <= last]
        if around:
            return around[-1]
        behind = [first for first, _ in self.ranges if first > bundle]
        return behind[0] if behind else self.ranges[-1][0] if self.ranges else -1


class Items:
    """The domain of item tags."""

    def __init__(self, graph: Graph, tags: Sequence[Sequence[ItemTag | None]]) -> None:
        self.graph, self.tags = graph, tags
        self.loops = Loops(graph)
        self.oldest = 2 + max(
            [0, *(age for bundle in tags for tag in bundle if tag for age in (tag.age, *(a for _, a in tag.others)))]
        )

    def entry(self, register: int) -> Tags:
        return NONE

    def join(self, one: Tags, other: Tags) -> Tags:
        return one | other

    def maybe(self, old: Tags, new: Tags) -> Tags:
        return new | {LEFT_OVER} if new else old

    def sticky(self, old: Tags, new: Tags) -> Tags:
        return NONE

    def issue(self, context: int, registers: Sequence[Tags]) -> Mapping[int, Tags]:
        at = self.graph.contexts[context].at
        sent: dict[int, Tags] = {}
        for k, part in enumerate(self.graph.ready[at].parts):
            tag = self.tags[at][k] if at < len(self.tags) and k < len(self.tags[at]) else None
            for write, number in zip(part.effects.writes, part.numbers, strict=True):
                sent[number] = NONE
                if tag and write.what == "result":
                    sent[number] = frozenset([(self.loops.of(at), tag.age)])
        return sent

    def along(self, source: int, target: int, values: list[Tags]) -> list[Tags]:
        beat = self.graph.beats[source]
        assert beat is not None
        if beat.did != "issue" or not Loops.is_back(self.graph, source, target):
            return values
        loop = self.graph.contexts[target].at
        return [self._older(tags, loop) for tags in values]

    def _older(self, tags: Tags, loop: int) -> Tags:
        if not tags:
            return tags
        return frozenset((of, min(age + 1, self.oldest) if of == loop else age) for of, age in tags)

    def wrong(self, context: int, registers: Sequence[Tags]) -> Iterator[Wrong]:
        """Operands of the bundle of a context that are of another item than is said."""
        beat, at = self.graph.beats[context], self.graph.contexts[context].at
        assert beat is not None
        for k, (part, on) in enumerate(zip(self.graph.ready[at].parts, beat.guards)):
            tag = self.tags[at][k] if at < len(self.tags) and k < len(self.tags[at]) else None
            if tag is None or on is False:
                continue
            loop, others = self.loops.of(at), dict(tag.others)
            guard = part.instruction.guard
            reads = [r.register for r in part.effects.reads] + ([guard.register] if guard else [])
            for register in dict.fromkeys(reads):
                wanted = others.get(register, tag.age)
                for of, age in sorted(registers[register]):
                    if of == loop and age != wanted:
                        yield Wrong(context, at, k, register, age, wanted, loop)


def right_beats(spread: Spread[Tags], domain: Items, bundle: int, instruction: int) -> list[int]:
    """Bundles of the program where all tagged operands of an instruction are of the items it says."""
    graph = spread.graph
    tag = domain.tags[bundle][instruction]
    assert tag is not None
    loop, others = domain.loops.of(bundle), dict(tag.others)
    part = graph.ready[bundle].parts[instruction]
    guard = part.instruction.guard
    registers = [r.register for r in part.effects.reads] + ([guard.register] if guard else [])
    carried = [
        r
        for r in dict.fromkeys(registers)
        if any(of == loop for read in spread.read if read is not None for of, _ in read[r])
    ]
    good: dict[int, bool] = {}
    for index, read in enumerate(spread.read):
        if read is None or not carried:
            continue
        at = graph.contexts[index].at
        fits = all(
            (r in others or any(c == (loop, tag.age) for c in read[r]))  # what is carried may not be there in pass 1
            and all(c == (loop, others.get(r, tag.age)) or c[0] != loop for c in read[r])
            for r in carried
        )
        good[at] = good.get(at, True) and fits
    return [at for at, fits in sorted(good.items()) if fits and domain.loops.of(at) == loop]
