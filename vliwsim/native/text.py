"""LLVM's text form, written a line at a time."""

from __future__ import annotations

from collections.abc import Iterable

UNLIKELY = ", !prof !0"
"""Behind a conditional branch whose first side is hardly ever taken; needs :data:`COMMON`."""

HELD = """\
define internal i1 @held(ptr %status, i64 %from, i64 %to, i8 %want) noinline nounwind {
start:
  %one = insertelement <32 x i8> poison, i8 %want, i32 0
  %all = shufflevector <32 x i8> %one, <32 x i8> poison, <32 x i32> zeroinitializer
  br label %wide
wide:
  %at = phi i64 [%from, %start], [%end, %fine]
  %end = add i64 %at, 32
  %fits = icmp ule i64 %end, %to
  br i1 %fits, label %look, label %narrow
look:
  %place = getelementptr inbounds i8, ptr %status, i64 %at
  %bytes = load <32 x i8>, ptr %place, align 1
  %both = and <32 x i8> %bytes, %all
  %differ = icmp ne <32 x i8> %both, %all
  %bits = bitcast <32 x i1> %differ to i32
  %some = icmp ne i32 %bits, 0
  br i1 %some, label %no, label %fine
fine:
  br label %wide
narrow:
  %last = phi i64 [%at, %wide], [%next, %good]
  %done = icmp uge i64 %last, %to
  br i1 %done, label %yes, label %byte
byte:
  %here = getelementptr inbounds i8, ptr %status, i64 %last
  %status.here = load i8, ptr %here
  %kept = and i8 %status.here, %want
  %good.here = icmp eq i8 %kept, %want
  br i1 %good.here, label %good, label %no
good:
  %next = add i64 %last, 1
  br label %narrow
yes:
  ret i1 true
no:
  ret i1 false
}
"""
"""Whether all bytes of status from %from to before %to have the bits %want."""

METADATA = '!0 = !{!"branch_weights", i32 1, i32 1048576}\n'

COMMON = HELD + METADATA
"""What every module ends with."""


def number(value: int, width: int) -> str:
    """A constant of ``width`` bits, as LLVM wants it: the signed number with these bits."""
    value &= (1 << width) - 1
    return str(value - (1 << width) if value >> width - 1 and width > 1 else value)


class Text:
    """Lines of one function. Values are named ``%vN``, blocks as asked for.

    ``odd``: if not None, collects the truths that a float made is a NaN, which then need not be the canonical one.
    """

    def __init__(self) -> None:
        self.odd: list[str] | None = None
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
        self.count += 1
        name = f"%v{self.count}"
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
