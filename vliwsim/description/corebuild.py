"""A whole core from its plain form, every mistake at once.

The plain form is what a core file says after deltas and changes: nested tables, but slots under one table by their full
names, in slot order. Parts are structured by :mod:`vliwsim.description.coreparts`; here stands what concerns several.
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

import attrs

from vliwsim.description.core import (
    Branch,
    Cluster,
    Core,
    Interrupt,
    Issue,
    Latency,
    Link,
    Memory,
    Slot,
    WaitRegion,
    Words,
)
from vliwsim.description.coreparts import (
    CLASSES,
    IDENTIFIER,
    MOST_FINDINGS,
    OPERATION,
    Check,
    Finding,
    Refused,
    described,
    matching,
    several,
    structure,
    text,
    unknown_key,
)
from vliwsim.description.operation_names import OperationNames, shipped_operations
from vliwsim.description.toml_places import KeyPath, listed, nearest, shown

PARTS = ("cluster", "slot", "latency", "link", "guards", "branch", "issue", "memory", "words", "interrupt")
KEYS = ("name", "summary", "base", "remove", "operations", "zero_registers", *PARTS)
"""Everything that may stand at the top of a core file, in the order of ``isa/README.md``."""

MOST_REGISTERS = 4096
MOST_SLOTS = 64
MOST_REGIONS = 64
MOST_ENTRIES = 512
"""Entries of a table: beyond the most that a core can have in any, those of ``latency`` for classes of one's own."""

_NAME = re.compile(r"[a-z][a-z0-9_-]{0,39}")
_RANGE = re.compile(r"([a-z][0-9]{1,5})(?:\.\.([a-z][0-9]{1,5}))?")

Table = Mapping[str, object]


def build_core(plain: Table) -> tuple[Core, list[Finding]]:
    """The core and what is wrong with it; with findings, the core is not to be used."""
    return _Builder(plain).build()


def slot_path(name: str) -> KeyPath:
    """The key path of a slot's table."""
    return ("slot", *name.split(".", 1))


class _Builder:
    def __init__(self, plain: Table) -> None:
        self.plain = plain
        self.findings: list[Finding] = []

    def build(self) -> tuple[Core, list[Finding]]:
        unknown = [key for key in self.plain if key not in KEYS]
        self.findings += [unknown_key((key,), KEYS) for key in unknown[:MOST_FINDINGS]]
        clusters = self.clusters()
        operations = self.value("operations", several(_operations_entry, "operation files", 1), ())
        slots = self.slots(clusters)
        core = Core(
            name=self.value("name", matching(_NAME, "a name in lower case, such as pair7"), "core"),
            summary=self.value("summary", text(200), ""),
            clusters=clusters,
            slots=slots,
            latency=self.latency(),
            links=self.links(clusters),
            branch=self.part(Branch, "branch"),
            issue=self.part(Issue, "issue"),
            memory=self.memory(),
            words=self.part(Words, "words"),
            interrupt=self.part(Interrupt, "interrupt"),
            operations=operations,
        )
        core = attrs.evolve(core, guards=self.guards(core), zero_registers=self.zero_registers(core))
        self.judge_classes(core)
        return core, self.findings

    # Values and tables

    def add(self, name: str, path: KeyPath, found: str, allowed: str = "", remedy: str = "") -> None:
        self.findings.append(Finding(name, path, found, allowed, remedy))

    def suspect(self, path: KeyPath) -> bool:
        """Is something already wrong at ``path``, or in or around it?"""
        return any(f.path[: len(path)] == path or path[: len(f.path)] == f.path for f in self.findings)

    def value(
        self, key: str, check: Check, otherwise: object, path: KeyPath | None = None, table: Table | None = None
    ) -> Any:
        """The checked value of a key, or ``otherwise``."""
        path = path or (key,)
        table = self.plain if table is None else table
        if key not in table:
            if key == "operations":
                self.add("missing-key", path, "no operations", "an array of operation families", listed(CLASSES))
            return otherwise
        try:
            return check(table[key])
        except Refused as why:
            self.findings += [f._replace(path=(*path, *f.path)) for f in why.findings]
            return otherwise

    def table(self, key: str, most: int = MOST_ENTRIES) -> Table:
        """The table under ``key``, empty where there is none."""
        found = self.plain.get(key, {})
        if not isinstance(found, dict):
            self.add("wrong-type", (key,), described(found), "a table")
            return {}
        return self.limited(found, (key,), most)

    def limited(self, table: dict[str, object], path: KeyPath, most: int = MOST_ENTRIES) -> dict[str, object]:
        """The first entries of a table; no core has more, and a hostile file shall not take long to refuse."""
        if len(table) > most:
            self.add("out-of-range", path, f"{len(table)} entries", f"at most {most}")
        return dict(itertools.islice(table.items(), most))

    def part(self, kind: type, key: str) -> Any:
        return structure(kind, self.plain.get(key, {}), (key,), self.findings) or kind()

    # Clusters and slots

    def clusters(self) -> tuple[Cluster, ...]:
        made = []
        for name, table in self.table("cluster").items():
            path = ("cluster", name)
            if not re.fullmatch("[a-z]", name):
                self.add("bad-name", path, shown(name), "one lower-case letter", "[cluster.g]")
                continue
            made.append(structure(Cluster, table, path, self.findings, name=name) or Cluster(name, 1024, 1, 1))
        total = sum(cluster.registers for cluster in made)
        if not made and not self.suspect(("cluster",)):
            self.add("missing-key", ("cluster",), "no cluster", "at least one", "[cluster.g]")
        if total > MOST_REGISTERS and not self.suspect(("cluster",)):
            self.add("out-of-range", ("cluster",), f"{total} registers in all", f"at most {MOST_REGISTERS}")
        return tuple(made)

    def slots(self, clusters: Iterable[Cluster]) -> tuple[Slot, ...]:
        names = [cluster.name for cluster in clusters]
        made = []
        for name, table in self.table("slot", MOST_SLOTS).items():
            path = slot_path(name)
            cluster, _, unit = name.partition(".")
            if not unit:
                self.add("wrong-type", path, described(table), "a table for each slot", f"[slot.{cluster}.sum]")
                continue
            if cluster not in names:
                if not self.suspect(("cluster", cluster)):
                    self.add("unknown-cluster", path, shown(cluster), f"a cluster of this core: {listed(names)}")
            elif not IDENTIFIER.fullmatch(unit):
                self.add("bad-name", path, shown(unit), "an identifier in lower case", f"[slot.{cluster}.sum]")
            else:
                made.append(structure(Slot, table, path, self.findings, name=name) or Slot(name, ("control",)))
        if not made and not self.suspect(("slot",)):
            self.add("missing-key", ("slot",), "no slot", "at least one", "[slot.g.flow]")
        elif not self.suspect(("slot",)) and not any("control" in slot.classes for slot in made):
            allowed = "at least one slot with the class control: without it no program could end"
            self.add("never-halts", ("slot",), "no slot executes control", allowed)
        return tuple(made)

    def links(self, clusters: Iterable[Cluster]) -> tuple[Link, ...]:
        names = [cluster.name for cluster in clusters]
        made = []
        for source, readers in self.table("link").items():
            if not isinstance(readers, dict):
                self.add("wrong-type", ("link", source), described(readers), "[link.SOURCE.READER] tables")
                continue
            for reader, table in self.limited(readers, ("link", source)).items():
                path = ("link", source, reader)
                strange = [end for end in (source, reader) if end not in names and not self.suspect(("cluster", end))]
                for end in strange:
                    self.add("unknown-cluster", path, shown(end), f"a cluster of this core: {listed(names)}")
                if source == reader and not strange:
                    self.add("bad-name", path, f"a link from {source} to itself", "two different clusters")
                link = structure(Link, table, path, self.findings, source=source, reader=reader)
                made += [link] if link and source in names and reader in names else []
        order = {name: k for k, name in enumerate(names)}
        return tuple(sorted(made, key=lambda link: (order[link.source], order[link.reader])))

    # Latencies and classes

    def latency(self) -> Latency:
        table = dict(self.table("latency"))
        own = {key: table.pop(key) for key in ("otherwise", "operations") if key in table}
        findings: list[Finding] = []
        made = structure(Latency, {"classes": table} | own, ("latency",), findings)
        # "classes" is no key of the file: what it holds stands in [latency] itself
        for f in findings:
            self.findings.append(f._replace(path=("latency", *f.path[2:])) if f.path[1:2] == ("classes",) else f)
        assert made is not None
        return made

    def judge_classes(self, core: Core) -> None:
        """Class and operation names in slots, ``busy`` and latencies: in all that is written, well or badly."""
        own = any(entry.endswith(".toml") for entry in core.operations)
        names = OperationNames(() if self.suspect(("operations",)) else core.operations)
        for slot in core.slots:
            path = slot_path(slot.name)
            table = self.plain["slot"][slot.name]  # type: ignore[index]
            classes = _strings(table.get("classes")) if isinstance(table, dict) else []
            for k, word in classes:
                if IDENTIFIER.fullmatch(word) and word not in CLASSES and not own:
                    self.add(
                        "unknown-class", (*path, "classes", k), shown(word), listed(CLASSES), nearest(word, CLASSES)
                    )
            self.judge_busy(table, (*path, "busy"), [word for _, word in classes], names)
        latency = self.plain.get("latency")
        latency = dict(itertools.islice(latency.items(), MOST_ENTRIES)) if isinstance(latency, dict) else {}
        known = (*CLASSES, "update", "otherwise", "operations")
        for word in latency:
            if word not in known and not (own and IDENTIFIER.fullmatch(word)):
                remedy = "branch.latency" if word == "branch" else nearest(word, known)
                self.add("unknown-class", ("latency", word), shown(word), listed(known), remedy)
        for word in _keys(latency.get("operations")):
            if OPERATION.fullmatch(word) and word not in names:
                self.unknown_operation(("latency", "operations", word), word, (), "", names)

    def judge_busy(self, table: object, path: KeyPath, classes: Sequence[str], names: OperationNames) -> None:
        for word in _keys(table.get("busy") if isinstance(table, dict) else None):
            if OPERATION.fullmatch(word) and word not in classes and (word in CLASSES or word not in names):
                self.unknown_operation((*path, word), word, classes, "a class of this slot", names)

    def unknown_operation(
        self, path: KeyPath, word: str, classes: Sequence[str], what: str, names: OperationNames
    ) -> None:
        if not names.entries:  # no files that could be asked
            return
        allowed = f"{what} ({listed(classes)}) or " if what else ""
        remedy = nearest(word, [*classes, *names.all()])
        self.add("unknown-operation", path, shown(word), f"{allowed}the name of an operation of this core", remedy)

    # Registers

    def guards(self, core: Core) -> tuple[str, ...]:
        table = self.table("guards")
        for key in table:
            if key != "registers":
                self.findings.append(unknown_key(("guards", key), ("registers",)))
        return self.registers(core, table, "registers", ("guards", "registers"), ranges=True)

    def zero_registers(self, core: Core) -> tuple[str, ...]:
        return self.registers(core, self.plain, "zero_registers", ("zero_registers",), ranges=False)

    def registers(self, core: Core, table: Table, key: str, path: KeyPath, ranges: bool) -> tuple[str, ...]:
        """Register names, ranges unfolded, in register order, each once."""
        known = core.register_numbers
        allowed = "registers of this core: " + listed(f"{c.name}0..{c.name}{c.registers - 1}" for c in core.clusters)
        chosen: set[int] = set()

        def check(entry: object) -> object:
            if ranges and entry == "all":
                chosen.update(known.values())
                return entry
            if not isinstance(entry, str):
                raise Refused(Finding("wrong-type", (), described(entry), "the name of a register"))
            parts = _RANGE.fullmatch(entry)
            ends = [end for end in parts.groups() if end] if parts else []
            if not ends or (len(ends) > 1 and not ranges):
                form = 'a register such as "g16"' + (', a range such as "g16..g23", or "all"' if ranges else "")
                raise Refused(Finding("bad-name", (), shown(entry), form))
            unknown = [end for end in ends if end not in known]
            if unknown and not self.suspect(("cluster",)):
                raise Refused(Finding("unknown-register", (), listed(unknown), allowed))
            if not unknown:
                first, last = known[ends[0]], known[ends[-1]]
                if first > last or ends[0][0] != ends[-1][0]:
                    raise Refused(Finding("bad-name", (), shown(entry), "a range upwards in one cluster"))
                chosen.update(range(first, last + 1))
            return entry

        entries = several(check, "registers", 0, MOST_REGISTERS)
        self.value(key, lambda given: entries(["all"] if ranges and given == "all" else given), (), path, table)
        return tuple(core.register_names[number] for number in sorted(chosen))

    # Memory

    def memory(self) -> Memory:
        table = dict(self.table("memory"))
        regions = table.pop("wait", {})
        made = structure(Memory, table, ("memory",), self.findings)
        assert made is not None
        if not isinstance(regions, dict):
            self.add("wrong-type", ("memory", "wait"), described(regions), "[memory.wait.NAME] tables")
            regions = {}
        regions = self.limited(regions, ("memory", "wait"), MOST_REGIONS)
        waits = []
        for name, region in regions.items():
            path = ("memory", "wait", name)
            if not IDENTIFIER.fullmatch(name):
                self.add("bad-name", path, shown(name), "an identifier in lower case")
            wait = structure(WaitRegion, region, path, self.findings, name=name)
            if wait and not self.suspect(path):
                waits.append(wait)
                if wait.start + wait.bytes > made.size and not self.suspect(("memory", "size")):
                    end = f"bytes {wait.start} to {wait.start + wait.bytes}"
                    self.add("outside-memory", path, end, f"inside the memory of {made.size} bytes")
        waits.sort(key=lambda wait: wait.start)
        for one, other in itertools.pairwise(waits):
            if other.start < one.start + one.bytes:
                found = f"it begins at {other.start}, inside {one.name} ({one.start} to {one.start + one.bytes})"
                self.add("overlap", ("memory", "wait", other.name), found, "regions that do not overlap")
        return attrs.evolve(made, waits=tuple(waits))


def _strings(value: object) -> list[tuple[int, str]]:
    """The strings of what should be an array of strings, with their indices."""
    return [(k, v) for k, v in enumerate(value) if isinstance(v, str)][:64] if isinstance(value, list) else []


def _keys(value: object) -> list[str]:
    """The first keys of what should be a table."""
    return list(value)[:MOST_FINDINGS] if isinstance(value, dict) else []


def _operations_entry(entry: object) -> object:
    """A shipped family, or the path of a file of the user's own."""
    shipped = shipped_operations()
    allowed = f"a shipped family ({listed(shipped)}) or the path of a .toml file"
    if not isinstance(entry, str):
        raise Refused(Finding("wrong-type", (), described(entry), allowed))
    if entry.endswith(".toml"):
        try:
            there = Path(entry).is_file()
        except (OSError, ValueError):
            there = False
        if not there:
            raise Refused(Finding("unknown-operations", (), f"no file {shown(entry)}", allowed))
    elif entry not in shipped:
        raise Refused(Finding("unknown-operations", (), shown(entry), allowed, nearest(entry, shipped)))
    return entry


def most(findings: list[Finding]) -> list[Finding]:
    """The findings to report, in the order they were made, without repetition."""
    return list(dict.fromkeys(findings))[:MOST_FINDINGS]
