"""A region: the contexts of one translation, breadth first from a seed, and what the translation needs of them."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Mapping

from vliwsim.native.contexts import Context, Contexts, Step
from vliwsim.native.strips import Strip, strip_of

MOST_CONTEXTS = 3000
"""Contexts of a region; the ways beyond lead back to the stepper."""

MOST_ENTRIES = 64

UNROLLED = 8
"""Loops of so many contexts at most are unrolled, to as many."""


class Region:
    """Contexts by index; ``contexts[0]`` is the seed.

    ``undefined``: registers that may be undefined at the seed, as bits. ``entries``: contexts that may be entered, the
    seed and the heads of loops. ``heads``: contexts that loops come back to. ``may``: for every context the registers
    that may be undefined, as bits. ``span``: an upper bound of the cycles from one head to the next;
    ``reach``: of those before the first head and behind the last. ``strips``: by head, the loops with a trusted copy;
    the copies are the contexts from ``own`` on, ``copy`` leads to them, and ``trusted`` has their (context, part) whose
    accesses are not judged. ``thorough``: unroll small loops and run in strips those that can be.
    """

    def __init__(
        self, walker: Contexts, seed: Context, undefined: int, cap: int = MOST_CONTEXTS, thorough: bool = True
    ) -> None:
        self.walker = walker
        self._laps: dict[Context, tuple[int, int, bool]] = {}
        self._walk(seed, cap)
        if thorough:
            self._laps = self._unrolled()
        if self._laps:
            self._walk(seed, cap)
        self.entries = [0, *sorted(self.heads - {0})][:MOST_ENTRIES]
        self.may = self._may_be_undefined(undefined)
        self.chain, self.place = self._chains()
        self.span, self.reach = self._spans()
        self.own = len(self)
        self.strips: dict[int, Strip] = {}
        self.trusted: set[tuple[int, int]] = set()
        self.copy: dict[int, int] = {}
        if thorough:
            self._copy_strips()

    def _walk(self, seed: Context, cap: int) -> None:
        self.index: dict[Context, int] = {seed: 0}
        self.steps: list[Step] = []
        ahead = deque([seed])
        while ahead:
            step = self._lapped(self.walker.step(ahead.popleft()))
            self.steps.append(step)
            for context in step.successors:
                if context not in self.index and len(self.index) < cap:
                    self.index[context] = len(self.index)
                    ahead.append(context)
        self.successors = [[self.index[c] for c in step.successors if c in self.index] for step in self.steps]
        self.heads, self._order = self._search()

    def _unrolled(self) -> dict[Context, tuple[int, int, bool]]:
        """Contexts of small loops: which loop, its laps, and whether a lap begins here.

        In one pass a result in flight is moved from variable to variable at every beat; in some passes one behind the
        other LLVM finds that most of these moves are none.
        """
        found = {}
        for number, loop in enumerate(self._loops()):
            contexts = [self.steps[k].context for k in loop]
            flown = [f.beats + 1 for context in contexts for f in context.flights]
            out = max([0, *flown, *(turn.bundles for context in contexts for turn in context.turns)])
            laps = -(-out // len(loop))
            if len(loop) <= UNROLLED and laps > 1:
                for k in loop:
                    found[self.steps[k].context] = number, laps, k in self.heads
        return found

    def _lapped(self, step: Step) -> Step:
        """The step with its successors in the right lap."""
        here = self._laps.get(step.context._replace(lap=0)) if self._laps else None
        if here is None:
            return step

        led = {}
        for context in step.successors:
            there = self._laps.get(context)
            if there is not None and there[0] == here[0]:
                led[context] = context._replace(lap=(step.context.lap + there[2]) % there[1])
        return _led(step, led)

    def _loops(self) -> list[list[int]]:
        """Sets of contexts that all lead to each other (R. Tarjan, Depth-first search and linear graph algorithms,
        SIAM Journal on Computing 1, 1972)."""
        number, low = [-1] * len(self), [0] * len(self)
        open_: list[int] = []
        inside = [False] * len(self)
        loops: list[list[int]] = []
        stack: list[tuple[int, Iterator[int]]] = []
        count = 0

        def enter(k: int) -> None:
            nonlocal count
            number[k] = low[k] = count
            count += 1
            open_.append(k)
            inside[k] = True
            stack.append((k, iter(self.successors[k])))

        enter(0)
        while stack:
            here, rest = stack[-1]
            following = next(rest, None)
            if following is not None:
                if number[following] < 0:
                    enter(following)
                elif inside[following]:
                    low[here] = min(low[here], number[following])
                continue
            stack.pop()
            if stack:
                low[stack[-1][0]] = min(low[stack[-1][0]], low[here])
            if low[here] == number[here]:
                at = open_.index(here)
                loop, open_ = open_[at:], open_[:at]
                for k in loop:
                    inside[k] = False
                if len(loop) > 1 or here in self.successors[here]:
                    loops.append(loop)
        return loops

    def __len__(self) -> int:
        return len(self.steps)

    def _search(self) -> tuple[set[int], list[int]]:
        """Heads of loops (targets of retreating edges), and the contexts, each behind all it leads to otherwise."""
        heads: set[int] = set()
        order: list[int] = []
        state = [0] * len(self)  # 1 while under way, 2 when done
        stack: list[tuple[int, Iterator[int]]] = [(0, iter(self.successors[0]))]
        state[0] = 1
        while stack:
            here, rest = stack[-1]
            following = next(rest, None)
            if following is None:
                state[here] = 2
                order.append(here)
                stack.pop()
            elif state[following] == 1:
                heads.add(following)
            elif state[following] == 0:
                state[following] = 1
                stack.append((following, iter(self.successors[following])))
        return heads, order

    def _may_be_undefined(self, undefined: int) -> list[int]:
        may = [0] * len(self)
        may[0] = undefined
        ahead = deque([0])
        reached = {0}
        while ahead:
            here = ahead.popleft()
            after = may[here]
            for flight in self.steps[here].due:
                if flight.sure:
                    after &= ~(1 << self.walker.register(flight))
            for following in self.successors[here]:
                joined = may[following] | after
                if joined != may[following] or following not in reached:
                    reached.add(following)
                    may[following] = joined
                    ahead.append(following)
        return may

    def _chains(self) -> tuple[list[int], list[int]]:
        """For every context the first of its chain, and how far behind it stands; a chain is run from its first on."""
        before: list[list[int]] = [[] for _ in self.steps]
        for here, following in enumerate(self.successors):
            for context in following:
                before[context].append(here)
        entries = {*self.entries, *self.heads}
        chain, place = [-1] * len(self), [0] * len(self)

        def begins(context: int) -> bool:
            return context in entries or len(before[context]) != 1 or self.steps[before[context][0]].ways != 1

        for first in range(len(self)):
            if not begins(first):
                continue
            here, far = first, 0
            while True:
                chain[here], place[here] = first, far
                following = self.successors[here]
                if self.steps[here].ways != 1 or len(following) != 1 or begins(following[0]):
                    break
                here, far = following[0], far + 1
        assert -1 not in chain
        return chain, place

    def twin(self, k: int) -> int:
        """The context that trusted context ``k`` is a copy of."""
        first = self.chain[k]
        return next(strip.cycle[k - first] for strip in self.strips.values() if self.copy[strip.head] == first)

    def _copy_strips(self) -> None:
        """Give every loop that is one cycle, and that has something to trust, its copy."""
        for loop in self._loops():
            cycle = self._cycle(loop)
            strip = strip_of(self.walker, self.steps, cycle) if cycle else None
            if strip is None:
                continue
            self.strips[strip.head] = strip
            begins = len(self.steps)
            self.copy.update((k, begins + place) for place, k in enumerate(strip.cycle))
            self.trusted |= {(self.copy[k], part) for k, part in strip.trusted}
            inside = {self.steps[k].context: self.steps[k].context._replace(trusted=True) for k in strip.cycle}
            for place, k in enumerate(strip.cycle):
                step = _led(self.steps[k], inside)._replace(context=inside[self.steps[k].context])
                self.index[step.context] = len(self.steps)
                self.steps.append(step)
                self.may.append(self.may[k])
                self.chain.append(begins)
                self.place.append(place)
        self.successors += [
            [self.index[c] for c in step.successors if c in self.index] for step in self.steps[self.own :]
        ]

    def _cycle(self, loop: list[int]) -> list[int] | None:
        """The contexts of a loop in order, its head first; None where its ways part, or meet other than at one head."""
        inside = set(loop)
        heads = inside & self.heads
        if len(heads) != 1:
            return None
        cycle = [*heads]
        while True:
            ahead = [k for k in self.successors[cycle[-1]] if k in inside]
            if len(ahead) != 1:
                return None
            if ahead[0] == cycle[0]:
                return cycle
            cycle.append(ahead[0])

    def _spans(self) -> tuple[int, int]:
        """The longest way between heads, and of what comes before the first and behind the last, in cycles."""
        core = self.walker.core
        slowest = max((w.cycles for w in core.memory.waits), default=0)
        turning = core.branch.taken_penalty + core.words.straddle_freeze
        none = -1
        to_head, out = [none] * len(self), [0] * len(self)
        for here in self._order:
            step = self.steps[here]
            accesses = sum(p.operation.access is not None for p in step.prepared.parts)
            own = 1 + max(0, accesses - 1) + accesses * slowest
            own += turning * bool(step.landing) + bool(step.prepared.fresh)
            ahead = [0 if f in self.heads else to_head[f] for f in self.successors[here]]
            if max(ahead, default=none) != none:
                to_head[here] = own + max(ahead)
            out[here] = own + max((out[f] for f in self.successors[here] if f not in self.heads), default=0)
        last = max((f.beats for step in self.steps for f in (*step.staying, *(f for _, f in step.new))), default=0)
        return max([1, *(to_head[h] for h in self.heads)]), max(0, *to_head, 0) + max(out) + last + 1


def _led(step: Step, to: Mapping[Context, Context]) -> Step:
    """The step with other successors for some."""

    def led(context: Context | None) -> Context | None:
        return to.get(context, context) if context else None

    return step._replace(
        waiting=led(step.waiting), refreshed=led(step.refreshed), fallen=led(step.fallen),
        turned=tuple(map(led, step.turned)),
    )  # fmt: skip
