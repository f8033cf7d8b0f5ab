"""What is known of values that decide: guards, counts, conditions, code addresses.

A value is an identity, not a number: two places that hold the same identity hold the same number. Of an identity it
may be known that it is zero or that it is not, and of some what follows where they are not zero: a ``count`` steps v to
a value D(v) that is v - 1 where v is not zero and v itself where it is, so where D(v) is not zero v is not. That alone
keeps a drained epilogue out of its loop. A comparison with zero and a value that another lets pass tell alike.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import NamedTuple

Identity = int
"""An opaque value, numbered from 0 within a context."""


class Constant(NamedTuple):
    """A value known exactly: 32 raw bits."""

    bits: int


Known = Identity | Constant


class Literal(NamedTuple):
    """``value`` is not zero (``nonzero``), or is zero."""

    value: Identity
    nonzero: bool

    @property
    def opposite(self) -> Literal:
        return Literal(self.value, not self.nonzero)


Condition = frozenset[Literal]
"""All of these hold; the empty condition always does."""

ALWAYS: Condition = frozenset()


def literal(value: Known, nonzero: bool) -> Condition | None:
    """The condition that a value is (not) zero; None where it cannot hold."""
    if isinstance(value, Constant):
        return ALWAYS if (value.bits != 0) == nonzero else None
    return frozenset([Literal(value, nonzero)])


def both(one: Condition | None, other: Condition | None) -> Condition | None:
    """The condition that both hold; None where they exclude each other literally."""
    if one is None or other is None:
        return None
    joined = one | other
    return None if any(item.opposite in joined for item in joined) else joined


Implied = tuple[Literal, ...]
"""What holds where a value is not zero; so where one of these does not, the value is zero."""


class Knowledge:
    """Facts (identity → is it nonzero) and implications (identity → what holds where it is not zero)."""

    def __init__(self, facts: Mapping[Identity, bool] = {}, implied: Mapping[Identity, Implied] = {}) -> None:
        self.facts = dict(facts)
        self.implied = dict(implied)

    def imply(self, value: Identity, literals: Iterable[Literal]) -> None:
        """``value`` is new; where it is not zero, all ``literals`` hold."""
        new = tuple(item for item in literals if self.facts.get(item.value) != item.nonzero)
        if any(item.value in self.facts for item in new):
            self.facts[value] = False
        elif new:
            self.implied[value] = new

    def learn(self, items: Iterable[Literal]) -> bool:
        """Add facts and what follows from them; False where they contradict what is known."""
        ahead = [(item.value, item.nonzero) for item in items]
        while ahead:
            value, nonzero = ahead.pop()
            known = self.facts.get(value)
            if known is not None:
                if known != nonzero:
                    return False
                continue
            self.facts[value] = nonzero
            if nonzero:
                ahead += [(item.value, item.nonzero) for item in self.implied.get(value, ())]
            opposite = Literal(value, not nonzero)
            ahead += [(child, False) for child, literals in self.implied.items() if opposite in literals]
        return True

    def settle(self, condition: Condition) -> Condition | None:
        """The condition without what is known to hold; None where it cannot hold."""
        left = []
        for item in condition:
            known = self.facts.get(item.value)
            if known is None:
                left.append(item)
            elif known != item.nonzero:
                return None
        return frozenset(left)

    def possible(self, *conditions: Condition | None) -> bool:
        """Whether all conditions may hold together, as far as is known."""
        if any(condition is None for condition in conditions):
            return False
        trial = Knowledge(self.facts, self.implied)
        return trial.learn(item for condition in conditions if condition for item in sorted(condition))
