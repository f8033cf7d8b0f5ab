"""Spoilt meanings: whatever the text, it is accepted or refused with problems, soon, and never with a traceback."""

from __future__ import annotations

import os
import random
import time

import pytest

from tests.description.language_help import agree, meaning
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations
from vliwsim.problems import OperationError

TRIES = int(os.environ.get("VLIWSIM_SPOILT", "1500"))
FAMILIES = sorted(path.stem for path in (isa_folder() / "operations").glob("*.toml"))
PIECES = [
    "(", ")", "[", "]", ";", "\n", " ", ",", ":", "k", "a", "0", "-1", "2**127", "<<", ">>", "//", "%", "*", "~",
    " if ", " else ", " not ", " and ", "wrap(", "sat(", "bits(", "concat(", "iterate(9, a, ", "round(",
    "mem[at, i32]", "taken", "halt", "1.5", "1e300", "0x", "'", "\"", "\\", "lambda", "for k", ".re", ".im", "==",
    "=", ":=", "link", "@", "**", "é", "\0", "#", "99999999999999999999999999999999999999999", "sqrt(", "as_float(",
    "float_to_int(a, i32, floor)",
]  # fmt: skip


def spoil(text: str, draw: random.Random) -> str:
    for _ in range(draw.randrange(1, 4)):
        at = draw.randrange(len(text) + 1)
        to = min(len(text), at + draw.randrange(6))
        kind = draw.randrange(4)
        if kind == 0:
            text = text[:at] + text[to:]
        elif kind == 1:
            text = text[:at] + draw.choice(PIECES) + text[at:]
        elif kind == 2:
            text = text[:at] + draw.choice(PIECES) + text[to:]
        else:
            start = draw.randrange(len(text) + 1)
            text = text[:at] + text[start : start + draw.randrange(1, 12)] + text[to:]
    return text


@pytest.mark.parametrize("block", range(2))
def test_spoilt_meanings(block: int) -> None:
    sound = [
        (", ".join(_written(operand) for operand in operation.operands), operation.does)
        for operation in load_operations(FAMILIES).by_name.values()
    ]
    for seed in range(block, TRIES, 2):
        draw = random.Random(seed)
        operands, does = draw.choice(sound)
        if draw.randrange(8) == 0:
            operands = spoil(operands, draw)
        else:
            does = spoil(does, draw)
        start = time.process_time()
        told = ""
        try:
            made = meaning(operands, does)
            made.compiled()
        except OperationError as error:
            told = str(error)
        else:
            agree(made, draw, 3)
        assert len(told) < 20_000
        assert time.process_time() - start < 20, does  # against hanging, no benchmark


def _written(operand) -> str:
    role = {"inout": "inout ", "sticky": "sticky ", "constant": "const "}.get(operand.role.value, "")
    if operand.role.value in ("address", "target"):
        return f"{operand.name}:{operand.role.value}"
    return f"{operand.name}:{role}{operand.type}{'.half' * operand.half}"
