"""A core, as data: frozen attrs classes, one for each part of a core file.

Reading, checking and changing core files is :mod:`vliwsim.description.corefile`; this module only says what a valid
core is. Registers of all clusters share one numbering, cluster after cluster in file order: on a core with clusters
g and h of 24 registers, g0 is 0 and h0 is 24. Latencies and busy times are in beats, sizes and addresses in bytes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from functools import cached_property

import attrs


@attrs.frozen
class Cluster:
    """One register file: ``registers`` of 32 bits, ports counted per beat."""

    name: str
    registers: int
    read_ports: int
    write_ports: int


@attrs.frozen
class Slot:
    """One place of a bundle. ``name`` is ``cluster.unit`` (``g.mem``).

    ``classes``: the operation classes it executes. ``crossing``: names of the operands (``a b c base step to``) that
    may come over a link, empty for none. ``busy``: beats the unit is taken by an operation, by class or by operation
    name (the operation's own entry wins); 1, a pipelined unit, where nothing is said.
    """

    name: str
    classes: tuple[str, ...]
    crossing: tuple[str, ...] = ()
    busy: Mapping[str, int] = attrs.field(factory=dict, hash=False)

    @property
    def cluster(self) -> str:
        return self.name.split(".")[0]

    @property
    def unit(self) -> str:
        return self.name.split(".")[1]


@attrs.frozen
class Latency:
    """Beats from issue to the first bundle that can read the result: by operation, else by class, else ``otherwise``.

    ``classes`` includes ``update`` where the file gives it (base updates and the register of a ``count``).
    """

    otherwise: int = 1
    classes: Mapping[str, int] = attrs.field(factory=dict, hash=False)
    operations: Mapping[str, int] = attrs.field(factory=dict, hash=False)

    def of_class(self, name: str) -> int:
        return self.classes.get(name, self.otherwise)

    def of(self, operation: str, operation_class: str) -> int:
        found = self.operations.get(operation)
        return self.of_class(operation_class) if found is None else found


@attrs.frozen
class Link:
    """An ordered cluster pair: registers of ``source`` read by slots of ``reader``.

    ``operands`` a bundle; with ``shared`` one register read by several operations counts once; ``fresh`` says what
    happens to a register that landed in this very beat: ``ok``, ``stall`` or ``reject``.
    """

    source: str
    reader: str
    operands: int
    shared: bool = False
    fresh: str = "ok"


@attrs.frozen
class Branch:
    """``latency`` in issue indices (delay slots = latency - 1); may branches overlap in flight; penalty in cycles."""

    latency: int = 1
    overlap: bool = True
    taken_penalty: int = 0


@attrs.frozen
class Issue:
    """``rule``: ``exposed`` or ``interlocked``. ``early``, for an early read: ``old`` value, ``warn``, ``reject``."""

    rule: str = "exposed"
    early: str = "old"


@attrs.frozen
class WaitRegion:
    """Bytes ``start`` to ``start + bytes`` (end excluded) cost ``cycles`` more an access."""

    name: str
    start: int
    bytes: int
    cycles: int


@attrs.frozen
class Memory:
    """Data memory: ``size`` bytes; ``banks`` of ``bank_width`` bytes, interleaved."""

    size: int = 65536
    endianness: str = "little"
    banks: int = 1
    bank_width: int = 4
    broadcast: bool = False
    conflict: str = "stall"
    misaligned: str = "reject"
    waits: tuple[WaitRegion, ...] = ()


@attrs.frozen
class Words:
    """Code: operation words of ``bits``, fetched in groups of ``group`` words.

    ``straddle``: may a bundle cross a group boundary (else it is padded). ``straddle_freeze``: cycles a taken branch
    pays when the bundle at its target straddles.
    """

    bits: int = 64
    group: int = 8
    straddle: bool = True
    straddle_freeze: int = 0

    @property
    def bytes(self) -> int:
        return self.bits // 8


@attrs.frozen
class Interrupt:
    """``service``: beats of the service routine."""

    service: int = 0


@attrs.frozen
class Core:
    """A whole core. Built and checked by :mod:`vliwsim.description.corefile`; never built unchecked outside tests."""

    name: str
    summary: str
    clusters: tuple[Cluster, ...]
    slots: tuple[Slot, ...]
    latency: Latency
    links: tuple[Link, ...] = ()
    guards: tuple[str, ...] = ()
    zero_registers: tuple[str, ...] = ()
    branch: Branch = Branch()
    issue: Issue = Issue()
    memory: Memory = Memory()
    words: Words = Words()
    interrupt: Interrupt = Interrupt()
    operations: tuple[str, ...] = ()
    """Operation files: shipped families by name, a user's own by path (already made absolute)."""

    def evolve(self, changes: Mapping[str, object] | Sequence[str]) -> Core:
        """This core with some values changed (``{"latency.load": 5}``); raises CoreError, see :mod:`.corefile`."""
        from vliwsim.description.corefile import evolve

        return evolve(self, changes)

    @cached_property
    def interlocked(self) -> bool:
        return self.issue.rule == "interlocked"

    @cached_property
    def register_names(self) -> tuple[str, ...]:
        """Every register's name by its number."""
        return tuple(f"{c.name}{k}" for c in self.clusters for k in range(c.registers))

    @cached_property
    def register_numbers(self) -> Mapping[str, int]:
        """The inverse of :attr:`register_names`."""
        return {name: number for number, name in enumerate(self.register_names)}

    @cached_property
    def register_clusters(self) -> tuple[int, ...]:
        """For every register number, the index of its cluster in :attr:`clusters`."""
        return tuple(k for k, c in enumerate(self.clusters) for _ in range(c.registers))

    @cached_property
    def slot_clusters(self) -> tuple[int, ...]:
        """For every slot index, the index of its cluster."""
        names = [c.name for c in self.clusters]
        return tuple(names.index(s.cluster) for s in self.slots)

    @cached_property
    def guard_numbers(self) -> tuple[int, ...]:
        """Numbers of the registers that may guard, in the order of :attr:`guards`."""
        return tuple(self.register_numbers[name] for name in self.guards)

    @cached_property
    def link_table(self) -> Mapping[tuple[int, int], Link]:
        """Links by (source cluster index, reader cluster index)."""
        names = [c.name for c in self.clusters]
        return {(names.index(link.source), names.index(link.reader)): link for link in self.links}

    def busy(self, slot: int, operation: str, operation_class: str) -> int:
        """Beats ``operation`` keeps the unit of slot index ``slot``; at least 1."""
        table = self.slots[slot].busy
        return table.get(operation, table.get(operation_class, 1))
