"""Answers as lines of tinted pieces, and how they become text.

A tint belongs to a value: a result and everything that reads it share one, made from the register and what it holds.
"""

from __future__ import annotations

import re
import zlib
from collections.abc import Iterable, Sequence

from vliwsim.description.values import Value, parts

TINTS = ("#d7875f", "#87af5f", "#5fafd7", "#d787af", "#afaf5f", "#5fafaf", "#af87d7", "#d7af5f", "#87afd7", "#5faf87")
"""Colours of values, alike in brightness so that none seems to matter more."""

Piece = tuple[str, str]
"""(style, text): the style is empty, ``faint``, ``wrong``, or ``tint0``, ``tint1``…"""
Line = list[Piece]

_WORD = re.compile(r"[A-Za-z_]\w*(?:\.(?:lo|hi))?")


def tint(register: int, value: Value) -> str:
    """The style of a value in a register."""
    bits, unknown = parts(value)
    if unknown:
        return "faint"
    return f"tint{zlib.crc32(f'{register}:{bits}'.encode()) % len(TINTS)}"


def plain(line: Iterable[Piece]) -> str:
    """A line without its tints."""
    return "".join(text for _, text in line).rstrip()


def length(line: Iterable[Piece]) -> int:
    return sum(len(text) for _, text in line)


def joined(items: Sequence[Line], separator: str, room: int) -> Line:
    """As many items as fit into ``room`` characters, then how many more there are."""
    out: Line = []
    for k, item in enumerate(items):
        left = len(items) - k - 1
        spare = len(f"{separator}… {left} more") if left else 0
        needed = (len(separator) if out else 0) + length(item)
        if length(out) + needed + spare > room and out:
            return [*out, ("faint", f"{separator}… {len(items) - k} more")]
        if not out and needed + spare > room:
            more = f"{separator}… {left} more" if left else ""
            return [*clipped(item, max(1, room - len(more))), ("faint", more)]
        out += [("faint", separator), *item] if out else item
    return out


def clipped(line: Line, room: int) -> Line:
    """The line, cut with an ellipsis where it is longer than ``room``."""
    if length(line) <= room:
        return line
    out: Line = []
    left = max(1, room - 1)
    for style, text in line:
        if left <= 0:
            break
        out.append((style, text[:left]))
        left -= len(text)
    return [*out, ("faint", "…")]


def wrapped(text: str, room: int, indent: int = 2) -> list[Line]:
    """Plain text in lines of at most ``room`` characters."""
    import textwrap

    pad = " " * indent
    return [[("", row)] for row in textwrap.wrap(text, max(20, room), initial_indent=pad, subsequent_indent=pad)]


def tinted(text: str, styles: dict[str, str]) -> Line:
    """An operation with every word behind its name that has a style in it."""
    out: Line = []
    at = 0
    for match in _WORD.finditer(text, text.find(" ") + 1 or len(text)):
        style = styles.get(match[0].partition(".")[0])
        if style:
            out += [("", text[at : match.start()]), (style, match[0])]
            at = match.end()
    return [piece for piece in (*out, ("", text[at:])) if piece[1]]
