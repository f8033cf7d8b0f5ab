"""One beat of a context, on every data it may meet: the contexts it leads to and the rules it may break.

The phases are those of :mod:`vliwsim.machine.beat`, with conditions in place of data. Where a rule depends on what is
not known, the finding says so (``sure`` is False); where the way on does, the step forks and each side learns its fact.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

import attrs

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind
from vliwsim.flow.context import Context, Flight, Turn, normal
from vliwsim.flow.follow import Follow
from vliwsim.flow.values import ALWAYS, Condition, Constant, Knowledge, Known, Literal, both, literal
from vliwsim.machine.bundle_rules import BUSY, ROUND_ONE
from vliwsim.machine.prepared import Preparation, Prepared

HALTED = -1
"""Stands for the end of the program among successors."""


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
            return _Step(self, context).run()
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


