"""LLVM's text form, written a line at a time."""

from __future__ import annotations

from collections.abc import Iterable

UNLIKELY = ", !prof !0"
"""Behind a conditional branch whose first side is hardly ever taken; needs :data:`METADATA`."""

METADATA = '!0 = !{!"branch_weights", i32 1, i32 1048576}\n'


def number(value: int, width: int) -> str:
    """A constant of ``width`` bits, as LLVM wants it: the signed number with these bits."""
    value &= (1 << width) - 1
    return str(value - (1 << width) if value >> width - 1 and width > 1 else value)


class Text:
    """Lines of one function. Values are named ``%vN``, blocks as asked for."""

    def __init__(self) -> None:
        self.lines: list[str] = []
        self.count = 0

    def put(self, line: str) -> None:
        self.lines.append("  " + line)

    def block(self, name: str) -> None:
        self.lines.append(f"{name}:")

    def name(self) -> str:
        self.count += 1
        return f"%v{self.count}"

    def label(self, what: str) -> str:
        self.count += 1
        return f"{what}.{self.count}"

    def let(self, code: str) -> str:
        """A new value."""
        name = self.name()
        self.lines.append(f"  {name} = {code}")
        return name

    # the operators used everywhere

    def select(self, test: str, kind: str, yes: str, no: str) -> str:
        return yes if yes == no else self.let(f"select i1 {test}, {kind} {yes}, {kind} {no}")

    def compare(self, how: str, kind: str, one: str, other: str) -> str:
        return self.let(f"icmp {how} {kind} {one}, {other}")

    def invert(self, test: str) -> str:
        return self.let(f"xor i1 {test}, true")

    def either(self, tests: Iterable[str]) -> str | None:
        """The or of truths; None of none."""
        found: str | None = None
        for test in tests:
            found = test if found is None else self.let(f"or i1 {found}, {test}")
        return found

    def both(self, *tests: str | None) -> str | None:
        """The and of truths, None standing for one that holds."""
        found: str | None = None
        for test in tests:
            if test is not None:
                found = test if found is None else self.let(f"and i1 {found}, {test}")
        return found

    def resize(self, code: str, old: int, new: int, signed: bool) -> str:
        """The value in ``new`` bits."""
        if old == new:
            return code
        how = "trunc" if new < old else "sext" if signed else "zext"
        return self.let(f"{how} i{old} {code} to i{new}")
