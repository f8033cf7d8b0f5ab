"""The graph of a program's contexts, walked from its entry: lazily, a beat when asked for, or all of it."""

from __future__ import annotations

from collections import Counter, deque
from collections.abc import Iterator, Sequence
from typing import NamedTuple

from vliwsim.flow.context import Context
from vliwsim.flow.step import Beat, Stepper
from vliwsim.machine.prepared import Preparation
from vliwsim.program.code import Program

MOST_CONTEXTS = 20_000
"""Contexts an eager walk makes before it gives up."""


class Edge(NamedTuple):
    """How a context was first reached: from context ``parent`` (an index), by a beat that ``did``."""

    parent: int
    did: str


class Graph:
    """Contexts by index, each made once. ``contexts[0]`` is the entry; ``beats[i]`` is None until context i is stepped.

    ``facts``: (register number, is it nonzero) of the inputs, known before the first beat.
    """

    def __init__(self, program: Program, facts: Sequence[tuple[int, bool]] = ()) -> None:
        self.ready = Preparation(program, to_run=False)
        self.stepper = Stepper(self.ready)
        self.contexts: list[Context] = []
        self.beats: list[Beat | None] = []
        self.reached: list[Edge | None] = []
        self._index: dict[Context, int] = {}
        self._successors: dict[int, tuple[int | None, ...]] = {}
        self._add(self.stepper.entry(facts), None)

    def _add(self, context: Context, edge: Edge | None) -> int:
        index = self._index.get(context)
        if index is None:
            index = self._index[context] = len(self.contexts)
            self.contexts.append(context)
            self.beats.append(None)
            self.reached.append(edge)
        return index

    def beat(self, index: int) -> Beat:
        """What context ``index`` does in its beat; stepped when first asked for."""
        found = self.beats[index]
        if found is None:
            found = self.beats[index] = self.stepper.step(self.contexts[index])
        return found

    def successors(self, index: int) -> tuple[int | None, ...]:
        """Contexts that context ``index`` leads to, None for the end of the program."""
        found = self._successors.get(index)
        if found is None:
            beat = self.beat(index)
            edge = Edge(index, beat.did)
            found = tuple(None if c is None else self._add(c, edge) for c in beat.successors)
            self._successors[index] = found
        return found

    def walk(self, cap: int = MOST_CONTEXTS) -> bool:
        """Step every context, breadth first; False if there are more than ``cap``."""
        ahead = deque(range(len(self.contexts)))
        stepped: set[int] = set()
        while ahead:
            index = ahead.popleft()
            if index in stepped:
                continue
            stepped.add(index)
            if len(self.contexts) > cap:
                return False
            ahead.extend(s for s in self.successors(index) if s is not None and s not in stepped)
        return True

    def crowded_bundle(self) -> int:
        """The bundle index with the most contexts."""
        return Counter(context.at for context in self.contexts).most_common(1)[0][0]

    def path(self, index: int) -> tuple[int, ...]:
        """Context indices from the entry to ``index`` along which it was first reached, both ends included."""
        way = [index]
        while (edge := self.reached[way[-1]]) is not None:
            way.append(edge.parent)
        return tuple(reversed(way))

    def findings(self) -> Iterator[tuple[int, Beat]]:
        """(context index, beat) of every stepped context that breaks, or may break, a rule."""
        for index, beat in enumerate(self.beats):
            if beat is not None and beat.findings:
                yield index, beat
