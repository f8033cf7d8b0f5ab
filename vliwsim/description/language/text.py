"""Pieces of Python text with what is known of their value: the material of :mod:`.compile_python`."""

from __future__ import annotations

from typing import NamedTuple

NOTHING: frozenset[int] = frozenset()
SOME = frozenset({-1})
"""Passes on an undefined value that is not meant to be a copy: whoever uses it must refuse."""


class Text(NamedTuple):
    """``code`` computes a value; the value meant is that plus ``offset`` (kept apart so that sums can drop it).

    ``atom``: binds closer than any operator. ``passes``: sizes in bytes of undefined values that the code, instead of
    refusing them, would give on untouched.
    """

    code: str
    atom: bool = False
    offset: int = 0
    passes: frozenset[int] = NOTHING

    @property
    def inner(self) -> str:
        """The code without the offset, to stand beside an operator."""
        return self.code if self.atom else f"({self.code})"

    @property
    def bare(self) -> str:
        """Code for the very value, to stand alone."""
        if not self.offset:
            return self.code
        return f"{self.inner} {'-' if self.offset < 0 else '+'} {literal(abs(self.offset))}"

    @property
    def closed(self) -> str:
        """Code for the very value, to stand beside an operator."""
        return f"({self.bare})" if self.offset else self.inner

    def plus(self, number: int) -> Text:
        """The value plus a number."""
        return Text(self.code, self.atom, self.offset + number, SOME if self.passes else NOTHING)

    def settled(self) -> Text:
        """The same value with no offset."""
        return Text(self.bare) if self.offset else self

    def copied(self, bits: int) -> Text:
        """As a copy of ``bits``: undefined values of another size are none."""
        return self.computed() if self.passes - {bits // 8 if bits % 8 == 0 else 0} else self

    def computed(self) -> Text:
        """As a computed value, which passes on no undefined value as a copy."""
        return self._replace(passes=SOME) if self.passes else self


def literal(value: int) -> str:
    """A number as people read it: small ones decimal, masks hexadecimal."""
    if value < 0:
        return f"(-{literal(-value)})"
    return str(value) if value < 1024 else hex(value)


def mask(bits: int) -> str:
    return literal((1 << bits) - 1)
