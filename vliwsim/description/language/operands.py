"""The ``operands`` line of an operation: ``"d:i32, a:i16.half, acc:inout i32, at:address, n:const u5"``."""

from __future__ import annotations

import keyword
import re

from vliwsim.description.language.faults import Fault
from vliwsim.description.language.types import TYPES, constant_type
from vliwsim.description.operations import Operand, Role

MOST = 8
_NAME = re.compile(r"[a-z][a-z0-9_]*\Z", re.ASCII)
_ROLES = {"inout": Role.INOUT, "sticky": Role.STICKY, "const": Role.CONSTANT}

RESERVED = frozenset(
    """
    mem link loaded stored taken halt k sum concat min max abs bits clz ctz popcount clmul tdiv trem round iterate
    wrap uwrap sat usat unsigned signed sqrt fma fmin fmax float_to_int int_to_float as_float classify
    half_up half_even half_away floor ceiling truncate
    """.split()
)
"""Words of the language: no operand or local name."""


def name_fault(name: str) -> str:
    """What is wrong with ``name`` as the name of an operand or local, or ``""``."""
    if not _NAME.match(name) or len(name) > 24:
        return f"{name!r} is no name"
    if name in RESERVED or name in TYPES or keyword.iskeyword(name):
        return f"{name!r} is a word of the language"
    return ""


def parse_operands(text: str) -> tuple[Operand, ...]:
    """The operands in order; a plain operand is a SOURCE until the meaning is seen to assign it.

    Raises :class:`Fault` (``part`` operands) at the first mistake.
    """
    if len(text) > 400:
        raise Fault("bad-operand", f"{len(text)} characters", "at most 400", part="operands")
    operands: list[Operand] = []
    at = 0
    for piece in text.split(",") if text.strip() else []:
        column = at + len(piece) - len(piece.lstrip()) + 1
        operands.append(_operand(piece.strip(), column))
        at += len(piece) + 1
        if operands[-1].name in [operand.name for operand in operands[:-1]]:
            raise Fault(
                "bad-operand", f"two operands {operands[-1].name}", "each name once", column=column, part="operands"
            )
    for role in (Role.ADDRESS, Role.TARGET):
        if sum(operand.role is role for operand in operands) > 1:
            raise Fault("bad-operand", f"two {role.value} operands", "at most one", part="operands")
    if len(operands) > MOST:
        raise Fault("bad-operand", f"{len(operands)} operands", f"at most {MOST}", part="operands")
    return tuple(operands)


def _operand(piece: str, column: int) -> Operand:
    def fault(found: str, allowed: str) -> Fault:
        return Fault("bad-operand", found, allowed, column=column, part="operands")

    name, colon, rest = (part.strip() for part in piece.partition(":"))
    if not colon:
        raise fault(f"{piece!r}", "name:type, with commas between, such as d:i32, a:i16.half, at:address")
    if wrong := name_fault(name):
        raise fault(wrong, "small letters, digits and _, beginning with a letter, not a word of the language")
    words = rest.split()
    if words in (["address"], ["target"]):
        return Operand(name, Role(words[0]), "u32")
    role = Role.SOURCE
    if words and words[0] in _ROLES:
        role = _ROLES[words.pop(0)]
    said_pair = bool(words) and words[0] == "pair"
    if said_pair:
        words.pop(0)
    if len(words) != 1:
        raise fault(f"{rest!r}", "address, target, or [inout|sticky|const|pair] and a type")
    kind, dot, half = words[0].partition(".")
    if role is Role.CONSTANT:
        if constant_type(kind) is None or dot or said_pair:
            raise fault(f"constant of type {words[0]!r}", "u1…u32 or i1…i32")
        return Operand(name, role, kind)
    if kind not in TYPES:
        raise fault(f"type {kind!r}", ", ".join(TYPES))
    if dot and (half != "half" or TYPES[kind].width != 16 or role is not Role.SOURCE):
        raise fault(f"{rest!r}", "i16.half or u16.half, for an operand that is only read")
    if said_pair and not TYPES[kind].pair:
        raise fault(f"pair of {kind}", "i64 or u64, which take a pair of registers")
    if role is Role.STICKY and TYPES[kind].pair:
        raise fault("a sticky pair", "a sticky result in one register")
    return Operand(name, role, kind, bool(dot), TYPES[kind].pair)
