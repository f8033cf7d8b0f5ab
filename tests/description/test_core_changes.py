"""Deltas on a base, ``--set``, ``evolve`` and the digest."""

from __future__ import annotations

import copy
import pickle
import subprocess
import sys
from pathlib import Path

import attrs
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vliwsim.description.corefile import core_digest, core_names, describe, evolve, load_core
from vliwsim.problems import CoreError


def names(changes: object, core: str = "pair7") -> list[tuple[str, str]]:
    with pytest.raises(CoreError) as caught:
        load_core(core, changes)  # type: ignore[arg-type]
    return [(problem.name, problem.key) for problem in caught.value.problems]


# Changes


@pytest.mark.parametrize(
    ("change", "look"),
    [
        ("latency.load=5", lambda core: core.latency.of("lw", "load") == 5),
        ("latency.load = 5 # slower", lambda core: core.latency.of("lw", "load") == 5),
        ("latency.shift=2", lambda core: core.latency.of("sll", "shift") == 2),
        ("latency.update=2", lambda core: core.latency.of_class("update") == 2),
        ("latency.otherwise=2", lambda core: core.latency.of("add", "arithmetic") == 2),
        ('latency.operations."mul.half"=2', lambda core: core.latency.of("mul.half", "multiply") == 2),
        ("latency.operations.mul.half=2", lambda core: core.latency.of("mul.half", "multiply") == 2),
        ("slot.g.mem.busy.load=2", lambda core: core.busy(2, "lw", "load") == 2),
        ("slot.g.mul.busy.mul.half=3", lambda core: core.busy(1, "mul.half", "multiply") == 3),
        ('slot.g.mem.crossing=["base", "a"]', lambda core: core.slots[2].crossing == ("base", "a")),
        ("cluster.g.registers=32", lambda core: core.register_numbers["h0"] == 32),
        ("link.h.g.operands=3", lambda core: core.link_table[1, 0].operands == 3),
        ("link.h.g.fresh=stall", lambda core: core.link_table[1, 0].fresh == "stall"),
        ("link.h.g.shared=true", lambda core: core.link_table[1, 0].shared),
        ('guards.registers=["g20..g21", "g3"]', lambda core: core.guards == ("g3", "g20", "g21")),
        ("guards.registers=all", lambda core: len(core.guards) == 48),
        ("branch.latency=6", lambda core: core.branch.latency == 6),
        ("branch.overlap=false", lambda core: not core.branch.overlap),
        ("issue.rule=interlocked", lambda core: core.interlocked),
        ("issue.rule='interlocked'", lambda core: core.interlocked),
        ("memory.size=0x1000", lambda core: core.memory.size == 4096),
        ("memory.wait.far={start=8, bytes=8, cycles=2}", lambda core: [w.start for w in core.memory.waits] == [8]),
        ("words.bits=96", lambda core: core.words.bytes == 12),
        ("interrupt.service=7", lambda core: core.interrupt.service == 7),
        ('zero_registers=["h0"]', lambda core: core.zero_registers == ("h0",)),
        ('operations=["integer", "control"]', lambda core: core.operations == ("integer", "control")),
        ('remove=["slot.h.mem"]', lambda core: [slot.name for slot in core.slots][-1] == "h.mul"),
        ('remove=["slot.h", "link", "guards"]', lambda core: len(core.slots) == 4 and not core.links),
        ('slot.h.extra={classes=["control"]}', lambda core: [s.name for s in core.slots[7:]] == ["h.extra"]),
        ('slot.h={extra={classes=["control"]}}', lambda core: [s.name for s in core.slots[7:]] == ["h.extra"]),
        ('slot={h={more={classes=["load"], busy={lw=2}}}}', lambda core: [1 for s in core.slots[7:] if s.busy]),
        ('slot={h={more={classes=["load"], busy={mul.half=2}}}}', lambda core: [1 for s in core.slots[7:] if s.busy]),
        ("name=other", lambda core: core.name == "other"),
    ],
)  # fmt: skip
def test_a_change(change: str, look: object) -> None:
    assert callable(look)
    assert not look(load_core("pair7"))
    assert look(load_core("pair7", [change]))
    assert look(load_core("pair7", change))
    assert look(evolve(load_core("pair7"), [change]))


@pytest.mark.parametrize(
    ("change", "name", "key"),
    [
        ("latency.load", "bad-change", ""),
        ("", "bad-change", ""),
        ("=5", "bad-change", ""),
        ("latency.load=", "bad-change", ""),
        ("latency.load=5 6", "bad-change", ""),
        ("latency.load=5\nlatency.store=2", "bad-change", ""),
        ("latency load=5", "bad-change", ""),
        ("a=" + "[" * 5000, "bad-change", ""),
        ("a=" + "9" * 5000, "bad-change", ""),
        ("base=lone2", "bad-change", ""),
        ("latency.laod=5", "unknown-class", "latency.laod"),
        ("latency.load=0", "out-of-range", "latency.load"),
        ("latency.load=x", "wrong-type", "latency.load"),
        ("latency=5", "wrong-type", "latency"),
        ("latency.load.more=5", "wrong-type", "latency.load"),
        ("cluster.g.register=5", "unknown-key", "cluster.g.register"),
        ("cluster.g.registers=20", "unknown-register", "guards.registers[0]"),
        ("cluster.k.registers=20", "missing-key", "cluster.k.read_ports"),
        ("slot.g.sum=5", "wrong-type", "slot.g.sum"),
        ("slot.g=5", "wrong-type", "slot.g"),
        ("slot=5", "wrong-type", "slot"),
        ("memroy.size=5", "unknown-key", "memroy"),
        ('remove=["slot.g.sun"]', "nothing-to-remove", "remove[0]"),
        ('remove=["cluster.h"]', "unknown-cluster", "slot.h.sum"),
        ('operations=["absent.toml"]', "unknown-operations", "operations[0]"),
    ],
)
def test_a_bad_change(change: str, name: str, key: str) -> None:
    assert (name, key) in names([change])
    assert (name, key) in [*names([change, "latency.store=2"])]


def test_all_bad_changes_at_once_and_the_later_of_two_wins() -> None:
    assert names(["latency.load=0", "nonsense", "issue.rule=1", "latency.load=999", "branch.latency=2"]) == [
        ("bad-change", ""),
        ("out-of-range", "latency.load"),
        ("wrong-type", "issue.rule"),
    ]
    assert load_core("pair7", ["latency.load=9", "latency.load=2"]).latency.classes["load"] == 2


def test_changes_as_a_mapping() -> None:
    core = load_core("pair7").evolve(
        {"latency.load": np.int64(5), "guards.registers": ("g1",), "branch": {"overlap": False, "latency": 2}}
    )
    assert (core.latency.classes["load"], core.guards, core.branch.overlap, core.branch.latency) == (
        5,
        ("g1",),
        False,
        2,
    )
    assert type(core.latency.classes["load"]) is int
    assert core.latency.classes["multiply"] == 3
    assert names({"latency.load": True}) == [("wrong-type", "latency.load")]
    assert names({"latency.load": None}) == [("wrong-type", "latency.load")]
    assert names({"latency load": 5, 7.5: 1}) == [("bad-change", ""), ("unknown-key", "7")]
    assert names({"latency.load": "5"}) == [("wrong-type", "latency.load")]


def test_a_change_leaves_the_original_alone() -> None:
    core = load_core("pair7")
    before = copy.deepcopy(core)
    core.evolve({"latency.load": 9, "slot.g.mem.busy.load": 2, "latency.operations.mul.half": 2})
    assert core == before


def test_a_user_s_operation_file_by_change(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "mine.toml").write_text("[blend]\nclass = 'blend'\ndoes = 'd = a'\n")
    monkeypatch.chdir(tmp_path)
    core = load_core("pair7", ['operations=["integer", "mine.toml"]', "latency.blend=2"])
    assert core.operations == ("integer", str(tmp_path / "mine.toml"))
    monkeypatch.chdir("/")
    assert core.evolve({"latency.load": 2}).operations == core.operations


# Deltas


def test_a_delta(tmp_path: Path) -> None:
    (tmp_path / "wide.toml").write_text(
        'base = "pair7"\nremove = ["slot.g.flow", "link.g.h"]\n'
        "[cluster.g]\nregisters = 40\n"
        '[slot.g.early]\nclasses = ["load"]\n[slot.h.flow]\nclasses = ["control"]\n[slot.g.late]\nclasses = ["shift"]\n'
        "[latency]\nload = 6\n"
    )
    core, base = load_core(tmp_path / "wide.toml"), load_core("pair7")
    assert core.name == "wide"
    assert [cluster.registers for cluster in core.clusters] == [40, 24]
    assert core.clusters[0].read_ports == base.clusters[0].read_ports
    # the base's slots in their order, then the new ones in file order
    assert [slot.name for slot in core.slots] == (
        ["g.sum", "g.mul", "g.mem", "h.sum", "h.mul", "h.mem", "g.early", "h.flow", "g.late"]
    )
    assert [(link.source, link.reader) for link in core.links] == [("h", "g")]
    assert core.latency.classes == {"load": 6, "multiply": 3}


def test_a_delta_of_a_delta_may_rename_itself(tmp_path: Path) -> None:
    (tmp_path / "one.toml").write_text('base = "pair7"\nname = "first"\n[latency]\nload = 6\n')
    (tmp_path / "two.toml").write_text('base = "one.toml"\nname = "second"\n[latency]\nstore = 2\n')
    core = load_core(str(tmp_path / "two.toml"))
    assert (core.name, core.latency.classes) == ("second", {"load": 6, "multiply": 3, "store": 2})


def test_an_array_of_a_delta_replaces_that_of_its_base(tmp_path: Path) -> None:
    (tmp_path / "few.toml").write_text('base = "pair7"\n[guards]\nregisters = ["g3"]\n')
    assert load_core(str(tmp_path / "few.toml")).guards == ("g3",)


def test_slots_of_a_file_keep_its_order_across_clusters(tmp_path: Path) -> None:
    text = 'operations = ["control"]\n'
    for name in "gh":
        text += f"[cluster.{name}]\nregisters = 4\nread_ports = 2\nwrite_ports = 1\n"
    order = ["g.b", "h.a", "g.a", "h.b"]
    text += "".join(f'[slot.{name}]\nclasses = ["control"]\n' for name in order)
    (tmp_path / "mixed.toml").write_text(text)
    core = load_core(str(tmp_path / "mixed.toml"))
    assert [slot.name for slot in core.slots] == order
    assert [slot.name for slot in core.evolve({"latency.load": 2}).slots] == order


# Back to plain data


@pytest.mark.parametrize("name", core_names())
def test_a_described_core_is_that_core_again(name: str) -> None:
    core = load_core(name)
    assert evolve(core, {}) == core
    assert load_core("lone2", {key: value for key, value in describe(core).items()} | {
        "remove": ["cluster", "slot", "latency", "guards", "memory.wait", "zero_registers"],
    }) == core  # fmt: skip
    assert pickle.loads(pickle.dumps(core)) == core


def test_a_description_has_the_shape_of_a_file() -> None:
    plain = describe(load_core("pair7"))
    assert plain["slot"]["g"]["mem"] == {"classes": ["load", "store", "arithmetic"], "crossing": ["a"], "busy": {}}
    assert plain["link"]["h"]["g"] == {"operands": 2, "shared": False, "fresh": "ok"}
    assert plain["guards"] == {"registers": ["g16..g23", "h16..h23"]}
    assert plain["latency"] == {"otherwise": 1, "load": 4, "multiply": 3, "operations": {}}
    assert describe(load_core("lone4"))["guards"] == {"registers": ["all"]}
    assert describe(load_core("lone2"))["memory"]["wait"] == {"slow": {"start": 0x6000, "bytes": 0x2000, "cycles": 3}}


def test_all_guards_stay_all_when_registers_change() -> None:
    assert len(load_core("lone4").evolve({"cluster.g.registers": 12}).guards) == 12


# Digest

CHANGES = st.fixed_dictionaries(
    {},
    optional={
        "latency.load": st.integers(1, 255),
        "latency.operations.mul.half": st.integers(1, 255),
        "slot.g.mem.busy.load": st.integers(1, 255),
        "cluster.g.registers": st.integers(24, 1024),
        "link.h.g.fresh": st.sampled_from(["ok", "stall", "reject"]),
        "branch.overlap": st.booleans(),
        "memory.banks": st.integers(1, 1024),
        "words.bits": st.integers(4, 32).map(lambda k: 8 * k),
        "guards.registers": st.lists(st.sampled_from(["g1", "g2..g5", "h3", "all"]), unique=True),
    },
)


@settings(deadline=None, max_examples=60)
@given(CHANGES, CHANGES)
def test_equal_digests_are_equal_cores(one: dict[str, object], other: dict[str, object]) -> None:
    base = load_core("pair7")
    left, right = base.evolve(one), base.evolve(other)
    assert (core_digest(left) == core_digest(right)) == (left == right)
    # any order of changes, in one step or several, by any way
    again = base
    for key in reversed(one):
        again = again.evolve({key: one[key]})
    assert again == left
    assert load_core("pair7", one) == left


def test_every_parameter_counts_in_the_digest() -> None:
    base = load_core("pair7")
    changed = [
        "cluster.h.read_ports=9", "cluster.h.write_ports=5", 'slot.g.sum.classes=["shift", "arithmetic"]',
        "slot.g.sum.crossing=[]", "slot.g.sum.busy.shift=2", "latency.otherwise=2", "latency.shift=2",
        "latency.operations.mul=2", "link.g.h.operands=2", "link.g.h.shared=true", "link.g.h.fresh=stall",
        'guards.registers=["g16"]', "branch.latency=5", "branch.overlap=false", "branch.taken_penalty=1",
        "issue.rule=interlocked", "issue.early=warn", "memory.size=4096", "memory.endianness=big", "memory.banks=2",
        "memory.bank_width=8", "memory.broadcast=true", "memory.conflict=reject", "memory.misaligned=split",
        "memory.wait.w={start=0,bytes=4,cycles=1}", "words.bits=72", "words.group=5", "words.straddle=false",
        "words.straddle_freeze=1", "interrupt.service=1", 'zero_registers=["g0"]', 'operations=["integer", "control"]',
        'remove=["slot.h.mem"]', 'slot.h.more={classes=["load"]}',
    ]  # fmt: skip
    digests = {core_digest(base), *(core_digest(base.evolve([change])) for change in changed)}
    assert len(digests) == len(changed) + 1
    assert core_digest(base, "a") != core_digest(base, "b")


def test_names_and_folders_do_not_count_in_the_digest(tmp_path: Path) -> None:
    base = load_core("pair7")
    assert core_digest(base.evolve({"name": "other", "summary": "x"})) == core_digest(base)
    digests = []
    for folder in (tmp_path / "a", tmp_path / "b"):
        folder.mkdir()
        (folder / "mine.toml").write_text("[blend]\nclass = 'blend'\ndoes = 'd = a'\n")
        digests.append(core_digest(base.evolve({"operations": ["integer", str(folder / "mine.toml")]})))
    assert digests[0] == digests[1] != core_digest(base)


def test_the_digest_does_not_depend_on_the_process() -> None:
    program = (
        "from vliwsim.description.corefile import *\n"
        "print(*[core_digest(load_core(name, {'latency.load': 7, 'latency.shift': 2})) for name in core_names()])"
    )
    runs = {
        subprocess.run(
            [sys.executable, "-c", program], env={"PYTHONHASHSEED": seed}, capture_output=True, text=True, check=True
        ).stdout
        for seed in ("1", "2")
    }
    here = [core_digest(load_core(name, {"latency.shift": 2, "latency.load": 7})) for name in core_names()]
    assert runs == {" ".join(here) + "\n"}


def test_cores_are_frozen() -> None:
    with pytest.raises(attrs.exceptions.FrozenInstanceError):
        load_core("pair7").name = "x"  # type: ignore[misc]
