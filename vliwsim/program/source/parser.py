"""The parser: lines of a source file to a tree, every malformed line told, none fatal."""

from __future__ import annotations

import re

from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.header import HEADER_WORDS, header_line, let_line, name_line
from vliwsim.program.source.pieces import Piece, Unbalanced, cut_call, expression_end, without_comment
from vliwsim.program.source.tree import Call, Idle, Label, Node, Repeat, Stamp, Tree

BODY_WORDS = ("repeat", "end", "idle")
OPERAND_WORDS = ("if", "not", "on", "then", "in", "ring", "to", "item", "with", "of")
"""Words inside a statement; like those that begin a line they cannot be labels."""
DEEPEST_REPEAT = 8
"""Levels of nested ``repeat``."""

_LABEL = re.compile(r"\s*([A-Za-z_]\w*)\s*:")
_WORD = re.compile(r"\s*([A-Za-z_][\w.]*)")
_QUICK_STAMP = re.compile(r"\s*@(\d+)(?=\s+[A-Za-z]|\s*$)")
_REPEAT_AS = re.compile(r"\s+as(?:\s+|$)")
_OF = re.compile(r"\s+of\s+")
_VARIABLE = re.compile(r"[A-Za-z_]\w*\Z")


def parse(lines: list[str], complaints: Complaints) -> Tree:
    """The tree of a source file; what is wrong goes to ``complaints``."""
    parser = _Parser(complaints)
    for number, text in enumerate(lines, 1):
        bare = without_comment(text)
        if not bare or bare.isspace():
            continue
        try:
            parser.line(bare, number)
        except Unbalanced as bracket:
            parser.unbalanced(bracket, Piece(bare, number, 1))
    parser.finish()
    return parser.tree


class _Parser:
    def __init__(self, complaints: Complaints) -> None:
        self.complaints = complaints
        self.tree = Tree()
        self.in_body = False
        self.blocks: list[tuple[Repeat, Piece]] = []
        self.target: list[Node] = self.tree.body

    def line(self, text: str, number: int) -> None:
        """One line without its comment."""
        start = 0
        if (match := _LABEL.match(text)) and match[1] not in HEADER_WORDS:
            self.label(Piece(match[1], number, match.start(1) + 1))
            start = match.end()
            if text[start:].isspace() or start == len(text):
                return
        rest = Piece(text, number, 1).part(start)
        if rest.text[0] == "@":
            self.body_line(rest)
            return
        word = _WORD.match(rest.text)
        first = word[1] if word else ""
        if first == "let":
            if let := let_line(rest, self.complaints):
                self.place_definition(let, rest)
        elif first == "name":
            if name := name_line(rest, self.complaints):
                self.place_definition(name, rest)
        elif first in HEADER_WORDS:
            if self.in_body:
                allowed = "header lines before the first label; behind it only let and name"
                self.complaints.add(
                    "late-header", (number, rest.column, len(first)), f"{first} behind a label", allowed
                )
            header_line(first, rest, self.tree, self.complaints)
        elif first in BODY_WORDS or self.in_body:
            self.body_line(rest)
        else:
            self.unknown_header(rest, first)

    def place_definition(self, node: Node, rest: Piece) -> None:
        """A ``let`` or ``name`` line, in the header or in the body."""
        if self.blocks:
            self.complaints.add(
                "in-repeat", (rest.line, rest.column), "a definition inside a repeat", "let and name outside of it"
            )
        elif self.in_body:
            self.target.append(node)
        else:
            (self.tree.lets if type(node).__name__ == "Let" else self.tree.names).append(node)  # type: ignore[arg-type]

    def unknown_header(self, rest: Piece, first: str) -> None:
        near = self.complaints.nearest(first, HEADER_WORDS) if first else ""
        remedy = near or "a label such as start: above the first operation"
        found = f"{first or rest.text} before the first label"
        where = (rest.line, rest.column, len(first) or 1)
        self.complaints.add("unknown-header-word", where, found, " ".join(HEADER_WORDS), remedy)

    def label(self, name: Piece) -> None:
        self.in_body = True
        if name.text in BODY_WORDS or name.text in OPERAND_WORDS:
            self.complaints.add("bad-name", name.where, f"a label called {name.text}", "a word without a meaning here")
        if self.blocks:
            self.complaints.add("in-repeat", name.where, f"label {name.text} inside a repeat", "labels outside of it")
            return
        self.target.append(Label(name))

    def body_line(self, rest: Piece) -> None:
        """Statements: an optional stamp, then operations, ``repeat``, ``end`` or ``idle``."""
        if not self.in_body:
            remedy = "start: above this line"
            self.complaints.add("no-label", (rest.line, rest.column), "code before the first label", "a label", remedy)
            self.in_body = True
            self.target.append(Label(Piece("", rest.line, rest.column)))
        if rest.text[0] == "@":
            rest = self.stamp(rest)
            if not rest.text:
                return
        start = 0
        for part in rest.text.split(";") if ";" in rest.text else (rest.text,):
            piece = rest.part(start, start + len(part))
            start += len(part) + 1
            if piece.text:
                self.statement(piece)

    def stamp(self, rest: Piece) -> Piece:
        """Take the stamp off the front of ``rest``."""
        text = rest.text
        end = match.end() if (match := _QUICK_STAMP.match(text)) else expression_end(text, 1)
        if end == 1 or text[1].isspace():
            end = 1
            self.target.append(Stamp(Piece("", rest.line, rest.column)))
            self.complaints.add("bad-stamp", (rest.line, rest.column), "@ without a beat", "@ and an expression", "@0")
        else:
            self.target.append(Stamp(rest.part(1, end)))
        return rest.part(end)

    def statement(self, piece: Piece) -> None:
        word = _WORD.match(piece.text)
        if not word:
            found = f"{piece.text[:20]}"
            self.complaints.add("bad-statement", piece.where, found, "an operation, repeat, end or idle")
            return
        first = word[1]
        if first == "repeat":
            self.repeat(piece)
        elif first in ("end", "idle"):
            if len(piece.text) > len(first):
                where = (piece.line, piece.column + len(first))
                self.complaints.add("left-over", where, f"{piece.text[len(first) :].strip()} behind {first}", first)
            if first == "end":
                self.end(piece)
            else:
                self.target.append(Idle(piece))
        else:
            try:
                self.call(piece, word.end())
            except Unbalanced as bracket:
                self.unbalanced(bracket, piece)

    def unbalanced(self, bracket: Unbalanced, piece: Piece) -> None:
        where = (piece.line, piece.column + bracket.column)
        self.complaints.add("unbalanced", where, f"{bracket.bracket} without its partner", "brackets in pairs")

    def repeat(self, piece: Piece) -> None:
        head = piece.part(len("repeat"))
        match = _REPEAT_AS.search(head.text)
        count = head.part(0, match.start()) if match else head
        variable = head.part(match.end()) if match else None
        if not count.text or (variable is not None and not _VARIABLE.match(variable.text)):
            self.complaints.add("bad-repeat", piece.where, piece.text, "repeat COUNT as NAME", "repeat 3 as i")
            variable = None
        node = Repeat(count, variable, [])
        self.blocks.append((node, piece))
        if len(self.blocks) > DEEPEST_REPEAT:
            found = f"{len(self.blocks)} repeats in one another"
            self.complaints.add("too-deep", piece.where, found, f"at most {DEEPEST_REPEAT}")
        else:
            self.target.append(node)
        self.target = node.body

    def end(self, piece: Piece) -> None:
        if not self.blocks:
            self.complaints.add("end-alone", piece.where, "end without repeat", "one end for each repeat")
            return
        self.blocks.pop()
        self.target = self.blocks[-1][0].body if self.blocks else self.tree.body

    def call(self, piece: Piece, start: int) -> None:
        """An operation: mnemonic, operands between commas, then ``if on to item with``, in any order."""
        text = piece.text
        try:
            commas, tails = cut_call(text[start:])
        except Unbalanced as bracket:
            raise Unbalanced(bracket.bracket, bracket.column + start) from None
        end = start + tails[0][1] if tails else len(text)
        mnemonic = piece.part(0, start)
        operands: list[Piece] = []
        if not text[start:end].isspace() and end > start:
            at = start
            for comma in commas:
                if start + comma < end:
                    operands.append(piece.part(at, start + comma))
                    at = start + comma + 1
            operands.append(piece.part(at, end))
        guard = pin = item = targets = None
        others: list[tuple[Piece, Piece]] = []
        negated = False
        for k, (word, where) in enumerate(tails):
            stop = start + tails[k + 1][1] if k + 1 < len(tails) else len(text)
            value = piece.part(start + where + len(word), stop)
            if {"if": guard, "on": pin, "to": targets, "item": item}.get(word):
                self.complaints.add("twice", (piece.line, piece.column + start + where), f"{word} twice", f"one {word}")
            elif word == "on":
                pin = value
            elif word == "to":
                targets = tuple(value.cut(","))
            elif word == "item":
                item = value
            elif word == "with":
                others += self.other(value)
            else:
                negated = value.text.split(None, 1)[:1] == ["not"]
                guard = value.part(3) if negated else value
        if others and not item:
            self.complaints.add("no-item", others[0][0].where, "with without item", "item N with REGISTER of M")
        self.target.append(Call(mnemonic, tuple(operands), guard, negated, pin, item, tuple(others), targets))

    def other(self, value: Piece) -> list[tuple[Piece, Piece]]:
        """``REGISTER of EXPRESSION`` behind ``with``."""
        match = _OF.search(value.text)
        if not match:
            self.complaints.add("unclear-item", value.where, f"with {value.text}", "with REGISTER of N", "with g2 of 1")
            return []
        return [(value.part(0, match.start()), value.part(match.end()))]

    def finish(self) -> None:
        for _, piece in self.blocks:
            self.complaints.add("repeat-open", piece.where, "repeat without its end", "one end for each repeat", "end")
