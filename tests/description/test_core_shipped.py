"""The five shipped cores: they load, they differ, and every parameter is exercised by at least one."""

from __future__ import annotations

import itertools
import re
from pathlib import Path

import attrs
import pytest

from vliwsim.description.core import Core
from vliwsim.description.corebuild import KEYS
from vliwsim.description.corefile import core_names, load_core
from vliwsim.description.coreparts import CLASSES, RULES
from vliwsim.description.places import isa_folder, programs_folder

CORES = {name: load_core(name) for name in core_names()}
FORTY = Path(__file__).parent / "cores" / "forty.toml"


def test_the_five() -> None:
    assert list(CORES) == ["float3", "lone2", "lone4", "pair7", "ring16"]


@pytest.mark.parametrize("name", CORES)
def test_a_core_is_called_as_its_file_and_by_its_slots(name: str) -> None:
    core = CORES[name]
    assert core.name == name
    assert core.summary
    assert len(core.slots) == int(re.sub(r"\D", "", name))


def test_the_reference_is_as_the_design_says() -> None:
    """Section 3.1."""
    core = CORES["pair7"]
    assert [attrs.astuple(cluster) for cluster in core.clusters] == [("g", 24, 10, 6), ("h", 24, 10, 6)]
    assert " ".join(slot.name for slot in core.slots) == "g.sum g.mul g.mem g.flow h.sum h.mul h.mem"
    assert not core.interlocked
    assert {name: core.latency.of_class(name) for name in (*CLASSES, "update")} == (
        dict.fromkeys((*CLASSES, "update"), 1) | {"load": 4, "multiply": 3}
    )
    assert core.branch.latency == 4
    assert {(link.source, link.reader): link.operands for link in core.links} == {("h", "g"): 2, ("g", "h"): 1}
    # what the energy kernel of section 4 needs: g20 guards, second sources cross, even and odd words in different banks
    assert "g20" in core.guards
    assert "b" in core.slots[0].crossing
    assert core.memory.banks >= 2
    assert core.memory.bank_width == 4
    assert not core.memory.waits
    assert core.branch.overlap
    assert core.issue.early == "old"


def test_registers_are_numbered_cluster_after_cluster() -> None:
    core = CORES["ring16"]
    assert core.register_names[0] == "g0"
    assert core.register_names[24] == core.clusters[1].name + "0"
    assert all(core.register_names[core.register_numbers[name]] == name for name in core.register_names)
    assert core.register_clusters == tuple(k for k in range(4) for _ in range(24))
    assert core.slot_clusters == tuple(k for k in range(4) for _ in range(4))


def test_the_ring_links_neighbours_only() -> None:
    core = CORES["ring16"]
    ring = [cluster.name for cluster in core.clusters]
    around = set(itertools.pairwise([*ring, ring[0]]))
    assert {(link.source, link.reader) for link in core.links} == around | {(b, a) for a, b in around}


def test_every_class_is_executed_somewhere_and_every_core_can_halt() -> None:
    assert {word for core in CORES.values() for slot in core.slots for word in slot.classes} == set(CLASSES)
    for core in CORES.values():
        assert any("control" in slot.classes for slot in core.slots)


def settings_of(core: Core) -> set[tuple[str, object]]:
    """(parameter, value) of everything a core sets that differs from the default, for parameters that have one."""
    out: set[tuple[str, object]] = set()
    parts = [
        core.branch,
        core.issue,
        core.memory,
        core.words,
        core.interrupt,
        *core.links,
        *core.slots,
        *core.memory.waits,
    ]
    for part in parts:
        for field in attrs.fields(type(part)):
            value = getattr(part, field.name)
            default = field.default.factory() if isinstance(field.default, attrs.Factory) else field.default  # type: ignore[arg-type]
            if value != default and field.name != "name":
                out.add((f"{type(part).__name__}.{field.name}", str(value)))
    return out


def test_every_parameter_is_exercised() -> None:
    exercised = {name for core in CORES.values() for name, _ in settings_of(core)}
    for kind, keys in RULES.items():
        if kind.__name__ in ("Cluster", "Latency"):
            continue
        for key in keys:
            assert f"{kind.__name__}.{key}" in exercised, f"{kind.__name__}.{key} has its default on every core"
    for kind, field in (("Cluster", "registers"), ("Cluster", "read_ports"), ("Cluster", "write_ports")):
        assert len({getattr(cluster, field) for core in CORES.values() for cluster in core.clusters}) > 2, (kind, field)
    assert any(core.zero_registers for core in CORES.values())
    assert any(core.latency.of_class("update") > 1 for core in CORES.values())
    assert any(core.latency.operations for core in CORES.values())
    assert {core.issue.rule for core in CORES.values()} == {"exposed", "interlocked"}
    assert {core.memory.endianness for core in CORES.values()} == {"little", "big"}
    assert {link.fresh for core in CORES.values() for link in core.links} == {"ok", "stall", "reject"}


def test_the_core_of_forty_samples() -> None:
    """Common practice, no source: two multipliers, two memory slots, two adders, two side slots."""
    core = load_core(str(FORTY))
    assert [len([slot for slot in core.slots if slot.cluster == name]) for name in "gh"] == [4, 4]
    assert {name: core.latency.of_class(name) for name in (*CLASSES, "update")} == (
        dict.fromkeys((*CLASSES, "update"), 1) | {"load": 5, "multiply": 2}
    )
    assert core.branch.latency == 6
    counts = {
        name: sum(name in slot.classes for slot in core.slots) for name in ("multiply", "load", "store", "control")
    }
    assert counts == {"multiply": 2, "load": 2, "store": 2, "control": 2}
    assert all("arithmetic" in slot.classes for slot in core.slots if slot.unit in ("add", "side"))


def test_the_readme_explains_every_key_and_word() -> None:
    text = (isa_folder() / "README.md").read_text(encoding="utf-8")
    for key in (*KEYS, *(key for keys in RULES.values() for key in keys if key != "classes"), *CLASSES, "classes"):
        assert f"`{key}`" in text, key
    for word in ("ok", "stall", "reject", "old", "warn", "exposed", "interlocked", "little", "big", "split", "all"):
        assert f'`"{word}"`' in text, word


def test_shipped_folders() -> None:
    assert (isa_folder() / "cores" / "pair7.toml").is_file()
    assert programs_folder().is_dir()
