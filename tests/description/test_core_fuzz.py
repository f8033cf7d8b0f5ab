"""Mutated core files and changes: a core or a CoreError, never anything else, never long."""

from __future__ import annotations

import random
import re
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from vliwsim.description.core import Core
from vliwsim.description.corefile import core_names, evolve, load_core
from vliwsim.description.places import isa_folder
from vliwsim.problems import CoreError

TOKEN = re.compile(r'"[^"\n]*"|[\w.]+|[^\w\s]|\s+')
SPICE = [
    *("", "0", "-1", "1", "true", "1e9", "0x10", "99999999999999999999", "inf", "nan", "1979-05-27"),
    *('""', '"g0"', '"all"', '"g0..g99"', '"pair7"', '"../x.toml"', '"x.toml"'),
    *("[]", "{}", "{a=1}", "[[", "]]", "[", "]", "=", ".", ",", "#", '"', "'''"),
    *("\n", "\r", "\0", "\ufeff", "é"),
    *("base", "remove", "slot", "cluster", "latency", "operations", "g", "control"),
]


def mutated(text: str, chance: random.Random, others: list[str]) -> str:
    """``text`` with one to four mutations of tokens, lines or characters."""
    for _ in range(chance.randint(1, 4)):
        kind = chance.randrange(6)
        if kind < 3:
            tokens = TOKEN.findall(text)
            at = chance.randrange(len(tokens) + 1)
            width = chance.choice([0, 1, 1, 1, 2, 5])
            new = chance.choice([*SPICE, *chance.sample(tokens, min(3, len(tokens)))])
            text = "".join([*tokens[:at], new, *tokens[at + width :]])
        elif kind < 5:
            lines = text.split("\n")
            at = chance.randrange(len(lines))
            source = chance.choice([text, *others]).split("\n")
            lines[at : at + chance.choice([0, 1, 1, 4])] = chance.sample(source, min(chance.randint(0, 3), len(source)))
            text = "\n".join(lines)
        else:
            at = chance.randrange(len(text) + 1)
            text = (
                text[:at] + chr(chance.choice([0, 10, 34, 39, 46, 91, 93, 123, 125, 0x2028, 0x1F600])) + text[at + 1 :]
            )
    return text


def attempt(make: Callable[[], Core], placed: bool = False) -> bool:
    """Is a core made? One that is comes back the same from its description; one that is not has problems to read."""
    try:
        core = make()
    except CoreError as why:
        problems = why.problems
    else:
        assert evolve(core, {}) == core
        return True
    assert problems
    assert all(str(problem) and problem.found for problem in problems)
    assert not placed or all(problem.place for problem in problems)
    return False


def test_mutated_files(tmp_path: Path, long: bool) -> None:
    texts = [(isa_folder() / "cores" / f"{name}.toml").read_text(encoding="utf-8") for name in core_names()]
    texts.append('base = "pair7"\nremove = ["slot.g.flow", "guards"]\n[slot.h.flow]\nclasses = ["control"]\n')
    file = tmp_path / "core.toml"
    chance = random.Random(7)
    good = 0
    for _ in range(20_000 if long else 400):
        text = mutated(chance.choice(texts), chance, texts)
        file.write_bytes(text.encode("utf-8", "surrogatepass"))
        began = time.process_time()
        good += attempt(lambda: load_core(str(file)), placed=True)
        assert time.process_time() - began < 20
    assert good > 10


def test_mutated_changes(long: bool) -> None:
    base = load_core("ring16")
    texts = [
        "latency.load=5", "slot.g.mem.busy.load=2", 'remove=["slot.g.flow"]', 'guards.registers=["g1..g4"]',
        "link.g.h.fresh=stall", "memory.wait.w={start=0,bytes=4,cycles=1}", 'operations=["integer", "control"]',
        'slot.g.more={classes=["load"], busy={load=2}}', "branch={latency=2}", "cluster.g.registers=30",
    ]  # fmt: skip
    chance = random.Random(8)
    good = 0
    for _ in range(30_000 if long else 600):
        changes = [mutated(chance.choice(texts), chance, texts) for _ in range(chance.randint(1, 3))]
        good += attempt(lambda changes=changes: base.evolve(changes))  # type: ignore[misc]
    assert good > 10


KEYS = """latency.load latency latency.operations slot slot.g slot.g.mem slot.g.mem.busy slot.g.mem.classes
slot.g.mem.crossing cluster link link.g link.g.h guards guards.registers memory memory.wait memory.wait.w words branch
operations remove name summary zero_registers issue interrupt x.y.z""".split()

VALUES = [
    *(None, 0, -1, 1.5, float("nan"), True, "", "x", b"x", 10**5000),
    *([], [[]], [None], ["g1", 2, {}], ("a",), range(3), set(), object()),
    *({}, {"a": {}}, {"g": {"mem": 5}}, {1: 2}, {"busy": {"a": {"b": {}}}}),
]


@pytest.mark.parametrize("key", KEYS)
def test_any_python_value_in_a_change(key: str) -> None:
    for value in VALUES:
        for changes in ({key: value}, {key: value, key + ".more": value}, {key + ".more": value, key: value}):
            attempt(lambda changes=changes: load_core("pair7", changes))  # type: ignore[misc]
