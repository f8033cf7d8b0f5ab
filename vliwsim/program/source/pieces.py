"""Pieces of source text with their places, and how a line is cut into them."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import NamedTuple


class Piece(NamedTuple):
    """Some text of one line; line and column count from 1."""

    text: str
    line: int
    column: int

    @property
    def where(self) -> tuple[int, int, int]:
        """(line, column, length), as :meth:`Complaints.add` takes it."""
        return self.line, self.column, len(self.text)

    def part(self, start: int, end: int | None = None) -> Piece:
        """Characters ``start`` to ``end`` (excluded) without the blanks around them."""
        text = self.text[start:end]
        bare = text.strip()
        return Piece(bare, self.line, self.column + start + len(text) - len(text.lstrip()))

    def cut(self, mark: str) -> Iterator[Piece]:
        """The parts between the marks, without the blanks around them."""
        start = 0
        for text in self.text.split(mark):
            yield self.part(start, start + len(text))
            start += len(text) + len(mark)


_OF_INTEREST = re.compile(r"[\[\](){},]|(?<![\w.])(?:if|on|to|item|with)(?![\w.])")
_OPEN = {"[": "]", "(": ")", "{": "}"}
_TOKEN = re.compile(r"\s*(?:(0[xXbB]\w+|\d+(?:\.\d+)?|[A-Za-z_]\w*)|(\*\*|//|<<|>>|[-+*/%&|^~])|(\())")


def without_comment(text: str) -> str:
    """The line up to its ``#``; one inside double quotes is no comment."""
    if "#" not in text:
        return text
    if '"' not in text:
        return text[: text.index("#")]
    quoted = False
    for k, character in enumerate(text):
        if character == '"':
            quoted = not quoted
        elif character == "#" and not quoted:
            return text[:k]
    return text


class Unbalanced(Exception):
    """A bracket without its partner; ``column`` counts from 0 in the text."""

    def __init__(self, bracket: str, column: int) -> None:
        super().__init__(bracket)
        self.bracket, self.column = bracket, column


def cut_call(text: str) -> tuple[list[int], list[tuple[str, int]]]:
    """Where the top-level commas of a statement are, and its top-level ``if``, ``on``, ``to``, ``item``, ``with``.

    Raises :class:`Unbalanced`.
    """
    commas: list[int] = []
    tails: list[tuple[str, int]] = []
    closing: list[tuple[str, int]] = []
    for match in _OF_INTEREST.finditer(text):
        found = match.group()
        if found in _OPEN:
            closing.append((_OPEN[found], match.start()))
        elif found in "])}":
            if not closing or closing[-1][0] != found:
                raise Unbalanced(found, match.start())
            closing.pop()
        elif not closing:
            if found == ",":
                commas.append(match.start())
            else:
                tails.append((found, match.start()))
    if closing:
        raise Unbalanced(text[closing[-1][1]], closing[-1][1])
    return commas, tails


def closing_bracket(text: str, start: int) -> int:
    """The index behind the bracket that closes the one at ``start``; raises :class:`Unbalanced`."""
    depth: list[str] = []
    for k in range(start, len(text)):
        character = text[k]
        if character in _OPEN:
            depth.append(_OPEN[character])
        elif character in "])}":
            if depth[-1] != character:
                raise Unbalanced(character, k)
            depth.pop()
            if not depth:
                return k + 1
    raise Unbalanced(text[start], start)


def expression_end(text: str, start: int) -> int:
    """The index behind the longest expression of values and operators that begins at ``start``.

    A stamp is followed by a mnemonic without any mark between them: an expression goes on as long as operators stand
    between its values. Equals ``start`` when there is none. Raises :class:`Unbalanced`.
    """
    end = at = start
    wants_value = True
    while match := _TOKEN.match(text, at):
        value, operator, bracket = match.groups()
        if wants_value:
            if bracket:
                at = closing_bracket(text, match.end() - 1)
            elif value:
                at = match.end()
                if text[at : at + 1] == "(" and not value[0].isdigit():
                    at = closing_bracket(text, at)
            elif operator in "+-~":
                at = match.end()
                continue
            else:
                break
            end, wants_value = at, False
        elif operator and operator != "~":
            at, wants_value = match.end(), True
        else:
            break
    return end
