"""One beat of a context, on every data it may meet: the contexts it leads to and the rules it may break.

The phases are those of :mod:`vliwsim.machine.beat`, a module each as there, with conditions in place of data.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from vliwsim.description.core import Core
from vliwsim.flow.beat import Beat, Fork, Moment
from vliwsim.flow.context import Context, normal
from vliwsim.flow.executing import execute
from vliwsim.flow.follow import Follow
from vliwsim.flow.landing import land
from vliwsim.flow.reading import read
from vliwsim.flow.redirecting import later, redirect
from vliwsim.flow.values import Constant, Knowledge, Known, Literal
from vliwsim.flow.waiting import wait
from vliwsim.machine.prepared import Preparation


class Stepper:
    """Steps contexts of one program."""

    def __init__(self, ready: Preparation) -> None:
        self.ready = ready
        self.core: Core = ready.core
        self.follow = Follow(ready)

    def entry(self, facts: Sequence[tuple[int, bool]] = ()) -> Context:
        """The context before the first beat; ``facts``: (register number, is it nonzero) known of the inputs."""
        registers = self.follow.registers
        values: list[Known] = list(range(len(registers)))
        for name in self.core.zero_registers:
            if self.core.register_numbers[name] in registers:
                values[registers.index(self.core.register_numbers[name])] = Constant(0)
        knowledge = Knowledge()
        knowledge.learn(Literal(registers.index(r), nonzero) for r, nonzero in facts if r in registers)
        context = normal(0, 0, (), (), (), self.core.branch.latency, values, knowledge, False)
        assert context is not None
        return context

    def step(self, context: Context) -> Beat:
        """One beat of ``context``, or a fork of it."""
        try:
            return one_beat(Moment(self.ready, self.follow, context))
        except Fork as fork:
            return Beat("fork", tuple(c for c in _sides(context, fork.item) if c is not None), ())


def _sides(context: Context, item: Literal) -> Iterable[Context | None]:
    for side in (item, item.opposite):
        knowledge = context.knowledge
        if knowledge.learn([side]):
            yield normal(
                context.at,
                context.within,
                context.flights,
                context.turns,
                context.busy,
                context.behind,
                context.values,
                knowledge,
                context.waited,
            )


def one_beat(now: Moment) -> Beat:
    """The phases in their order."""
    context = now.context
    land(now, [f for f in context.flights if f.beats == 0])
    cause = wait(now) if now.core.interlocked else None
    if cause:
        waited = context.waited or cause == "fresh"
        return now.beat(cause, [later(now, context.at, context.within, context.turns, waited)])
    if not read(now):
        return now.beat("issue", [])
    conditions = [now.guard(k) for k in range(len(now.prepared.parts))]
    now.guards = tuple(None if on else on is not None for on in conditions)
    turns, halts = execute(now)
    return redirect(now, turns, halts)
