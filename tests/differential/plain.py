"""Plain data for the test model: a core, a program, memory, and what a run gave.

Nothing here comes from the package under test; an adaptor elsewhere turns decoded programs into these classes.
Registers are numbered through all clusters, cluster after cluster. Latencies and busy times are in beats, sizes and
addresses in bytes, freezes and waits in cycles.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

CAUSES = ("bank", "wait", "straddle", "penalty", "hold", "fresh", "interrupt")


class Value(NamedTuple):
    """Bits, and which bytes of them are undefined (bit k of ``unknown`` for byte k). Undefined bytes have bits 0."""

    bits: int
    unknown: int = 0


UNDEFINED = Value(0, 0b1111)
"""A wholly undefined register."""


@dataclass(frozen=True)
class PlainCluster:
    name: str
    registers: int
    read_ports: int
    write_ports: int


@dataclass(frozen=True)
class PlainSlot:
    """``cluster`` is an index. ``busy`` is by operation name or class, the name's own entry first; absent: 1."""

    name: str
    cluster: int
    classes: tuple[str, ...]
    crossing: tuple[str, ...] = ()
    busy: dict[str, int] = field(default_factory=dict)


@dataclass(frozen=True)
class PlainLink:
    """Registers of cluster ``source`` read by slots of cluster ``reader`` (indices). ``fresh``: ok, stall, reject."""

    source: int
    reader: int
    operands: int
    shared: bool = False
    fresh: str = "ok"


@dataclass(frozen=True)
class PlainWait:
    """Bytes ``start`` to ``start + bytes`` (end excluded) cost ``cycles`` more an access."""

    start: int
    bytes: int
    cycles: int


@dataclass(frozen=True)
class PlainCore:
    clusters: tuple[PlainCluster, ...]
    slots: tuple[PlainSlot, ...]
    links: tuple[PlainLink, ...] = ()
    latency_otherwise: int = 1
    latency_classes: dict[str, int] = field(default_factory=dict)
    latency_operations: dict[str, int] = field(default_factory=dict)
    guards: frozenset[int] = frozenset()
    zero_registers: frozenset[int] = frozenset()
    branch_latency: int = 1
    branch_overlap: bool = True
    taken_penalty: int = 0
    interlocked: bool = False
    early: str = "old"
    """old, warn or reject."""
    memory_size: int = 65536
    endianness: str = "little"
    banks: int = 1
    bank_width: int = 4
    broadcast: bool = False
    conflict: str = "stall"
    """stall or reject."""
    misaligned: str = "reject"
    """reject or split."""
    waits: tuple[PlainWait, ...] = ()
    straddle_freeze: int = 0
    service: int = 0


@dataclass(frozen=True)
class Reg:
    """A register operand; ``half`` 0 is the low one, 1 the high one. A pair is named by its even register."""

    number: int
    half: int | None = None


@dataclass(frozen=True)
class Imm:
    """A constant operand as raw unsigned bits (16 for a half operand); as a target, the byte address of a bundle."""

    bits: int


@dataclass(frozen=True)
class Addr:
    """``mode``: offset (base + step, base unchanged), after (base, then updated), before (updated, then used).

    ``ring``: bytes of a power-of-two ring, 0 for none (``after`` only).
    """

    base: int
    mode: str
    step: Reg | Imm
    ring: int = 0


@dataclass(frozen=True)
class PlainGuard:
    register: int
    negated: bool = False


@dataclass(frozen=True)
class PlainOperation:
    """``operands`` by the operand's name; an address stands under ``at`` and a branch target under ``to``.

    ``targets``: of a branch to a register, the only addresses it may go to; none where any will do.
    """

    name: str
    cls: str
    slot: int
    operands: dict[str, Reg | Imm | Addr] = field(default_factory=dict)
    guard: PlainGuard | None = None
    targets: tuple[int, ...] = ()


@dataclass(frozen=True)
class PlainBundle:
    """A bundle, or an idle word of ``beats`` empty bundles. ``position`` counts bundles in program order."""

    address: int
    position: int
    operations: tuple[PlainOperation, ...] = ()
    beats: int = 1
    straddles: bool = False


@dataclass(frozen=True)
class PlainRegion:
    """An array or scratch: ``size`` bytes from ``start``, readable (undefined) for ``over`` bytes more.

    ``content``: its first bytes, None where undefined; what is not said is undefined.
    """

    start: int
    size: int
    over: int = 0
    content: tuple[int | None, ...] = ()


class Hazard(NamedTuple):
    """``beat`` and ``cycle`` (that at which the beat begins) from 0; ``bundle`` is an index into the program."""

    name: str
    beat: int
    cycle: int
    bundle: int


class Passed(NamedTuple):
    """One cycle of the log: a cause of a stall, ``bundle`` or ``drain``; the bundle; the registers when it ends."""

    what: str
    bundle: int
    registers: tuple[Value, ...]


@dataclass(frozen=True)
class Outcome:
    """What a run gave. ``stop``: halt, hazard or limit. ``memory``: every byte of the regions, None where undefined."""

    stop: str
    cycles: int
    bundles: int
    stalls: dict[str, int]
    drain: int
    registers: tuple[Value, ...]
    memory: dict[int, int | None]
    hazard: Hazard | None
    warnings: tuple[tuple[int, int, int], ...] = ()
    """Early reads on a core that warns: (beat, bundle, register), each once."""
    log: tuple[Passed, ...] = ()
    counts: tuple[int, ...] = ()
    """Of every bundle of the program, the beats it issued in."""
