"""One-rule programs: for every rule of the machine a small program, and what it must give, worked out by hand.

Each rule quotes the sentence it pins. The beat tables beside the programs say how the numbers come about; no number
here was copied from a run. The programs are data, so that every engine can be held to the same table.

Notation of a program: one string a bundle, ``label: slot operation operands to labels if guard ; …``; ``idle k`` is one
idle word of k beats; a leading ``!`` says that the bundle straddles fetch groups. Every operation takes one word of 8
bytes, an idle word one.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field, replace

from .plain import (
    UNDEFINED,
    Addr,
    Imm,
    PlainBundle,
    PlainCluster,
    PlainCore,
    PlainGuard,
    PlainLink,
    PlainOperation,
    PlainRegion,
    PlainSlot,
    PlainWait,
    Reg,
    Value,
)

WORDS = {
    "arithmetic": "add:d,a,b sub:d,a,b and:d,a,b or:d,a,b xor:d,a,b mv:d,a li:d,n select:d,c,a,b pack.h2:d,a,b "
    "add.h2:d,a,b add.pair:d,a,b add.sat.flag:d,f,a,b",
    "shift": "sll:d,a,b srl:d,a,b sra:d,a,b",
    "multiply": "mul:d,a,b mul.half:d,a,b mul.half.acc:acc,a,b mul.pair:d,a,b",
    "divide": "div:d,a,b rem:d,a,b",
    "load": "lb:d,at lbu:d,at lh:d,at lhu:d,at lw:d,at ld:d,at",
    "store": "sb:a,at sh:a,at sw:a,at sd:a,at",
    "control": "jump:to call:d,to count:r,to beq:a,b,to bne:a,b,to blt:a,b,to bge:a,b,to bltu:a,b,to bgeu:a,b,to halt:",
}
SYNTAX = {
    name: (cls, tuple(filter(None, operands.split(","))))
    for cls, words in WORDS.items()
    for name, operands in (word.split(":") for word in words.split())
}
"""Operation name → its class and the names of its operands, as written."""


def register_number(core: PlainCore, name: str) -> int:
    first = 0
    for cluster in core.clusters:
        if name[0] == cluster.name:
            return first + int(name[1:])
        first += cluster.registers
    raise KeyError(name)


def assemble(core: PlainCore, lines: tuple[str, ...]) -> tuple[PlainBundle, ...]:
    """The bundles of a program in the notation above."""
    labels: dict[str, int] = {}
    heads, address, position = [], 0, 0
    for line in lines:
        straddles, text = line.startswith("!"), line.lstrip("! ")
        if found := re.match(r"(\w+):\s*", text):
            labels[found[1]] = address
            text = text[found.end() :]
        idle = re.fullmatch(r"idle (\d+)", text)
        beats = int(idle[1]) if idle else 1
        parts = [] if idle else [part.strip() for part in text.split(";")]
        heads.append((address, position, parts, beats, straddles))
        address, position = address + 8 * max(1, len(parts)), position + beats
    return tuple(
        PlainBundle(address, position, tuple(operation(core, part, labels) for part in parts), beats, straddles)
        for address, position, parts, beats, straddles in heads
    )


def operation(core: PlainCore, text: str, labels: dict[str, int]) -> PlainOperation:
    text, _, condition = text.partition(" if ")
    text, _, targets = text.partition(" to ")
    guard = None
    if condition:
        guard = PlainGuard(register_number(core, condition.split()[-1]), condition.startswith("not "))
    slot, name, *rest = text.split(maxsplit=2)
    cls, names = SYNTAX[name]
    written = re.findall(r"\[[^]]*\]|[^,\s]+", rest[0]) if rest else []
    assert len(written) == len(names), text
    operands = {key: operand(core, place, labels) for key, place in zip(names, written, strict=True)}
    named = tuple(labels[label.strip()] for label in targets.split(",")) if targets else ()
    return PlainOperation(name, cls, [s.name for s in core.slots].index(slot), operands, guard, named)


def operand(core: PlainCore, text: str, labels: dict[str, int]) -> Reg | Imm | Addr:
    if text in labels:
        return Imm(labels[text])
    if text.startswith("["):
        return address_operand(core, text[1:-1], labels)
    if re.fullmatch(r"-?\d+|0x[0-9a-f]+", text):
        return Imm(int(text, 0) & 0xFFFFFFFF)
    name, _, half = text.partition(".")
    return Reg(register_number(core, name), {"": None, "lo": 0, "hi": 1}[half])


def address_operand(core: PlainCore, text: str, labels: dict[str, int]) -> Addr:
    text, _, ring = text.partition(" in ring ")
    if found := re.fullmatch(r"(\w+) then \+(-?\w+)", text):
        base, mode, step = found[1], "after", found[2]
    elif found := re.fullmatch(r"\+(-?\w+) then (\w+)", text):
        base, mode, step = found[2], "before", found[1]
    elif found := re.fullmatch(r"(\w+) \+ (-?\w+)", text):
        base, mode, step = found[1], "offset", found[2]
    else:
        base, mode, step = text, "offset", "0"
    return Addr(register_number(core, base), mode, operand(core, step, labels), int(ring or 0))


def words(start: int, *values: int | None, over: int = 0) -> PlainRegion:
    """An array of little-endian words at ``start``; None is an undefined word."""
    content = [None if v is None else v >> 8 * k & 0xFF for v in values for k in range(4)]
    return PlainRegion(start, 4 * len(values), over, tuple(content))


@dataclass(frozen=True)
class Rule:
    """One program and its whole result. What ``after`` and ``stored`` do not name is as it was before the run."""

    name: str
    quote: str
    code: tuple[str, ...]
    cycles: int
    bundles: int
    stalls: dict[str, int] = field(default_factory=dict)
    drain: int = 0
    after: dict[str, int | Value] = field(default_factory=dict)
    stored: dict[int, int | None] = field(default_factory=dict)
    hazard: tuple[str, int, int, int] | None = None  # name, beat, cycle, bundle (index into the program)
    core: PlainCore = field(kw_only=True)
    given: dict[str, int | Value] = field(default_factory=dict)
    regions: tuple[PlainRegion, ...] = ()
    interrupt_at: int | None = None
    limit: int = 1000
    stop: str | None = None  # halt, or hazard where there is one
    warnings: tuple[tuple[int, int, str], ...] = ()  # beat, bundle, register
    reading: str = ""  # number of the reading of the text (see the model) on which the expectation rests


BENCH = PlainCore(
    clusters=(PlainCluster("g", 16, 12, 6), PlainCluster("h", 16, 12, 6)),
    slots=(
        PlainSlot("g.sum", 0, ("arithmetic", "shift"), ("a", "b", "c")),
        PlainSlot("g.mul", 0, ("arithmetic", "multiply", "divide"), ("a", "b"), {"divide": 3}),
        PlainSlot("g.mem", 0, ("arithmetic", "load", "store"), ("a",)),
        PlainSlot("g.flow", 0, ("control",), ("to",)),
        PlainSlot("h.sum", 1, ("arithmetic", "shift"), ("a", "b")),
        PlainSlot("h.mem", 1, ("arithmetic", "load", "store"), ("a", "base")),
        PlainSlot("h.flow", 1, ("control",), ()),
    ),
    links=(PlainLink(1, 0, 2), PlainLink(0, 1, 1)),
    latency_classes={"load": 3, "multiply": 2},
    guards=frozenset(range(8, 16)),
    branch_latency=2,
    banks=2,
)
"""The core of these programs: exposed, old values; load 3, multiply 2, all else 1, branch 2; g8 to g15 may guard."""

LOCKED = replace(BENCH, interlocked=True)
REJECT = replace(BENCH, early="reject")
ONE_PORT = replace(BENCH, clusters=(PlainCluster("g", 16, 12, 1), BENCH.clusters[1]))


def with_link(core: PlainCore, **changes: object) -> PlainCore:
    """``core`` with these parameters on its link from h to g."""
    return replace(core, links=(replace(core.links[0], **changes), core.links[1]))


def rule(name: str, quote: str, *code: str, cycles: int, bundles: int, core: PlainCore = BENCH, **more: object) -> Rule:
    return Rule(name, quote, code, cycles, bundles, core=core, **more)  # type: ignore[arg-type]


TIME = [
    rule(
        "visible-after-latency",
        "Latency L issued at beat t: visible to reads at t + L.",
        "g.mul mul g1, g2, g3",  # beat 0, lands 2
        "g.sum add g4, g1, 0",  # beat 1: the old g1
        "g.sum add g5, g1, 0",  # beat 2: 42
        "g.flow halt",  # beat 3; the last landing is g5's, in beat 3
        given={"g1": 9, "g2": 6, "g3": 7},
        cycles=4,
        bundles=4,
        after={"g1": 42, "g4": 9, "g5": 42},
    ),
    rule(
        "drain",
        "drain = max(0, latest landing beat − halt beat − 1)",
        "g.mem lw g1, [g2] ; g.flow halt",  # lands 3; halt 0: 3 − 0 − 1
        given={"g2": 0},
        regions=(words(0, 77),),
        cycles=3,
        bundles=1,
        drain=2,
        after={"g1": 77},
    ),
    rule(
        "later-landing-wins",
        "Between beats the later landing wins, whatever the issue order. … over all results in flight, dead ones too",
        "g.mem lw g1, [g2]",  # lands 3
        "g.sum li g1, 5 ; g.flow halt",  # lands 2; drain 3 − 1 − 1
        given={"g2": 0},
        regions=(words(0, 77),),
        cycles=3,
        bundles=2,
        drain=1,
        after={"g1": 77},
    ),
    rule(
        "lands-twice",
        "two (guard-on) results for one register in one beat, `lands-twice`; … leaves the registers as they were",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.sum add g1, g2, g3 ; g.mem add g4, g2, g3",  # land 2 too
        "g.flow halt",  # at the point of issue in beat 2
        given={"g1": 1, "g2": 2, "g3": 3, "g4": 4},
        cycles=2,
        bundles=2,
        hazard=("lands-twice", 2, 2, 2),
    ),
    rule(
        "lands-twice-in-drain",
        "Judged in this order, in drain and service too … the bundle at the point of issue (`halt`'s in drain)",
        "g.mem lw g1, [g2]",  # lands 3
        "g.mul mul g1, g2, g3 ; g.flow halt",  # lands 3; beat 2 is a whole cycle of drain
        given={"g1": 1, "g2": 0, "g3": 3},
        regions=(words(0, 77),),
        cycles=3,
        bundles=2,
        drain=1,
        hazard=("lands-twice", 3, 3, 1),
    ),
    rule(
        "write-ports",
        "more results in a cluster than its write ports, `write-ports`; either leaves the registers as they were",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.sum add g4, g2, g3",  # lands 2
        "g.flow halt",
        core=ONE_PORT,
        given={"g1": 1, "g2": 2, "g3": 3, "g4": 4},
        cycles=2,
        bundles=2,
        hazard=("write-ports", 2, 2, 2),
    ),
    rule(
        "lands-twice-before-write-ports",
        "Judged in this order … `lands-twice`; more results in a cluster than its write ports",
        "g.mul mul g1, g2, g3",
        "g.sum add g1, g2, g3",
        "g.flow halt",
        core=ONE_PORT,
        given={"g1": 1, "g2": 2, "g3": 3},
        cycles=2,
        bundles=2,
        hazard=("lands-twice", 2, 2, 2),
    ),
    rule(
        "guard-off-lands-nothing",
        "Guard off: no landing, write port, memory access, base update, branch, halt, undefined or early operand.",
        "g.mul mul g1, g2, g3 if g8 ; g.mem lw g5, [g6 then +4] if g8 ; g.flow halt if g8",  # g6 undefined
        "g.sum add g4, g2, g3 ; g.flow jump away if g8",
        "g.flow halt",
        "away: g.sum li g7, 1",
        core=ONE_PORT,
        given={"g1": 1, "g2": 2, "g3": 3, "g8": 0},
        cycles=3,
        bundles=3,
        after={"g4": 5},
    ),
    rule(
        "negated-guard",
        "On when the 32-bit register ≠ 0 (or = 0 for `if not`)",
        "g.sum li g1, 1 if not g8 ; g.mul li g2, 1 if not g9 ; g.mem li g3, 1 if g9 ; g.flow halt",
        given={"g1": 0, "g2": 0, "g3": 0, "g8": 0, "g9": 0x80000000},
        cycles=1,
        bundles=1,
        after={"g1": 1, "g3": 1},
    ),
    rule(
        "early-read-warns",
        "an early read gets the `old` value, a `warn`, or `reject`",
        "g.mul mul g1, g2, g3",
        "g.sum add g4, g1, 0",
        "g.flow halt",
        core=replace(BENCH, early="warn"),
        given={"g1": 9, "g2": 6, "g3": 7},
        cycles=3,
        bundles=3,
        after={"g1": 42, "g4": 9},
        warnings=((1, 1, "g1"),),
    ),
    rule(
        "early-read-rejected",
        "Early read: a guard-on operand, or any guard, whose register has a result in flight.",
        "g.mul mul g1, g2, g3",
        "g.sum add g4, g1, 0",
        "g.flow halt",
        core=REJECT,
        given={"g1": 9, "g2": 6, "g3": 7},
        cycles=1,
        bundles=1,
        hazard=("early-read", 1, 1, 1),
    ),
    rule(
        "early-read-of-a-guard",
        "or any guard, whose register has a result in flight",
        "g.mul mul g8, g2, g3",
        "g.sum add g4, g2, 0 if g8",  # off, by the old value
        "g.flow halt",
        core=REJECT,
        given={"g8": 0, "g2": 6, "g3": 7},
        cycles=1,
        bundles=1,
        hazard=("early-read", 1, 1, 1),
    ),
    rule(
        "guard-off-operand-is-not-early",
        "Guard off: no … undefined or early operand.",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.sum add g4, g1, 0 if g8",
        "g.flow halt",
        core=REJECT,
        given={"g1": 9, "g2": 6, "g3": 7, "g8": 0},
        cycles=3,
        bundles=3,
        after={"g1": 42},
    ),
    rule(
        "idle-word",
        "each idle beat of a schedule is one (empty) bundle",
        "g.mem lw g1, [g2]",  # lands 3
        "idle 2",  # beats 1, 2
        "g.sum add g3, g1, 1",  # beat 3
        "g.flow halt",
        given={"g2": 0},
        regions=(words(0, 77),),
        cycles=5,
        bundles=5,
        after={"g1": 77, "g3": 78},
    ),
    rule(
        "cycle-limit",
        "a limit on cycles stops a run (no sentence: an endless loop must end)",
        "again: g.flow jump again",
        "g.sum add g1, g1, 1",
        given={"g1": 0},
        limit=5,
        stop="limit",
        # cycles 0 … 4: jump, add, jump, add (lands at the begin of beat 4), jump
        cycles=5,
        bundles=5,
        after={"g1": 2},
    ),
]

HOLDS = [
    rule(
        "hold-for-an-operand",
        "Hold (interlocked cores): no issue, the beat advances, results land.",
        "g.mul mul g1, g2, g3",  # beat 0, lands 2
        "g.sum add g4, g1, 0",  # beat 1 held, issues in beat 2
        "g.flow halt",  # beat 3
        core=LOCKED,
        given={"g1": 9, "g2": 6, "g3": 7},
        cycles=4,
        bundles=3,
        stalls={"hold": 1},
        after={"g1": 42, "g4": 42},
    ),
    rule(
        "hold-for-a-destination-guard-off",
        "no operand, base, `count` register or destination of any of its operations (guard on or off) is pending",
        "g.mul mul g1, g2, g3",
        "g.sum add g1, g2, g3 if g8",  # off, still waits one beat
        "g.flow halt",
        core=LOCKED,
        given={"g1": 9, "g2": 6, "g3": 7, "g8": 0},
        cycles=4,
        bundles=3,
        stalls={"hold": 1},
        after={"g1": 42},
    ),
    rule(
        "held-guard-is-judged-first",
        "waits as a whole until none of its guards is pending; in that beat they are judged (`undefined-used`)",
        "g.mul mul g8, g2, g3 ; g.mem lw g4, [g5]",  # g8 lands undefined in beat 2, g4 in beat 3
        "g.sum add g1, g4, 0 if g8 ; g.mem li g7, 1",  # beat 1 held; judged in beat 2 though g4 is still out
        "g.flow halt",
        core=LOCKED,
        given={"g1": 9, "g3": 7, "g5": 0, "g8": 1},
        regions=(words(0, 77),),
        cycles=2,
        bundles=1,
        stalls={"hold": 1},
        after={"g8": UNDEFINED},
        hazard=("undefined-used", 2, 2, 1),
    ),
    rule(
        "written-twice",
        "and then `written-twice`: two guard-on operations of one bundle may not name one register as result",
        "g.mem lw g4, [g5]",  # lands 3
        "g.sum add g1, g4, 0 ; g.mul mul g1, g5, g5",  # judged in beat 1, though g4 is pending
        "g.flow halt",
        core=LOCKED,
        given={"g1": 9, "g5": 0},
        regions=(words(0, 77),),
        cycles=1,
        bundles=1,
        hazard=("written-twice", 1, 1, 1),
    ),
    rule(
        "written-twice-is-for-interlocked-cores",
        "2. Hold? (interlocked) … `written-twice`",
        "g.sum add g1, g5, 1 ; g.mul mul g1, g5, g5",  # land 1 and 2
        "g.flow halt",
        given={"g1": 9, "g5": 4},
        cycles=2,
        bundles=2,
        after={"g1": 16},
    ),
    rule(
        "written-twice-by-count",
        "or `count` register, whether the `count` branches or not",
        "start: g.sum add g9, g1, 1 ; g.flow count g9, start",  # g9 is 0: it does not branch
        "g.flow halt",
        core=LOCKED,
        given={"g1": 9, "g9": 0},
        cycles=0,
        bundles=0,
        hazard=("written-twice", 0, 0, 0),
    ),
    rule(
        "hold-for-write-ports",
        "and its results fit the ports beside those in flight",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.sum add g4, g2, g3",  # beat 1: would land 2 beside it; issues in beat 2, lands 3
        "g.flow halt",  # beat 3
        core=replace(ONE_PORT, interlocked=True),
        given={"g2": 2, "g3": 3},
        cycles=4,
        bundles=3,
        stalls={"hold": 1},
        after={"g1": 6, "g4": 5},
    ),
    rule(
        "own-results-do-not-wait-for-ports",
        "a bundle whose own results exceed a cluster's write ports in one beat does not wait for ports, it meets "
        "`write-ports` when they land",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.sum add g4, g2, g3 ; g.mem add g5, g2, g3 ; h.sum li h1, 1",  # beat 1, would land 2: two for one port
        "g.flow halt",
        core=replace(ONE_PORT, interlocked=True),
        given={"g2": 2, "g3": 3},
        cycles=2,
        bundles=2,
        hazard=("write-ports", 2, 2, 2),
    ),
    rule(
        "count-that-does-not-branch-takes-no-port",
        "the register of a `count` that branches, land with class `update` and take a write port",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.flow count g9, on",  # beat 1: g9 is 0, nothing would land
        "idle 1",
        "on: g.flow halt",  # beat 3
        core=replace(ONE_PORT, interlocked=True),
        given={"g2": 2, "g3": 3, "g9": 0},
        cycles=4,
        bundles=4,
        after={"g1": 6},
    ),
    rule(
        "count-that-branches-waits-for-a-port",
        "the register of a `count` that branches, land with class `update` and take a write port",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.flow count g9, on",  # beat 1: would land 2; issues in beat 2
        "idle 1",
        "on: g.flow halt",  # beat 4
        core=replace(ONE_PORT, interlocked=True),
        given={"g2": 2, "g3": 3, "g9": 1},
        cycles=5,
        bundles=4,
        stalls={"hold": 1},
        after={"g1": 6, "g9": 0},
    ),
    rule(
        "undefined-count-does-not-wait-for-ports",
        "(an undefined `count` is taken not to branch)",
        "g.mul mul g1, g2, g3",  # lands 2
        "g.flow count g9, on",  # issues in beat 1, and is an error there
        "on: g.flow halt",
        core=replace(ONE_PORT, interlocked=True),
        given={"g1": 9, "g2": 2, "g3": 3},
        cycles=1,
        bundles=1,
        hazard=("undefined-used", 1, 1, 1),
    ),
    rule(
        "hold-for-a-unit",
        "its units are free … Busy b blocks that slot for beats t … t + b − 1, guard on or off",
        "g.mul div g1, g2, g3 if g8",  # off; blocks beats 0, 1, 2
        "g.mul mul g4, g2, g3 ; g.sum li g5, 1",  # beats 1, 2 held; issues in beat 3, lands 5
        "g.flow halt",  # beat 4
        core=LOCKED,
        given={"g2": 6, "g3": 7, "g8": 0},
        cycles=5,
        bundles=3,
        stalls={"hold": 2},
        after={"g4": 42, "g5": 1},
    ),
    rule(
        "waiting-keeps-the-delay-slots",
        "Branch latency counts issue indices, so waiting never changes how many bundles follow a branch.",
        "g.mul mul g1, g2, g3 ; g.flow jump on",  # index 0
        "g.sum add g4, g1, 0",  # index 1, beat 1 held, issues in beat 2
        "g.sum li g5, 1",
        "on: g.flow halt",  # index 2
        core=LOCKED,
        given={"g2": 6, "g3": 7},
        cycles=4,
        bundles=3,
        stalls={"hold": 1},
        after={"g1": 42, "g4": 42},
    ),
    rule(
        "no-other-judgement-before-issue",
        "Nothing else is judged before the beat in which the bundle issues.",
        "g.mul mul g1, g2, g3",
        "g.sum mul g4, g1, g1",  # a wrong slot, but held in beat 1
        "g.flow halt",
        core=LOCKED,
        given={"g2": 6, "g3": 7},
        cycles=2,
        bundles=1,
        stalls={"hold": 1},
        after={"g1": 42},
        hazard=("slot-class", 2, 2, 1),
    ),
]

READING = [
    rule(
        "slot-taken",
        "First slot-taken",
        "g.sum add g1, g2, 1 ; g.sum add g3, g2, 1",
        "g.flow halt",
        given={"g1": 9, "g2": 6},
        cycles=0,
        bundles=0,
        hazard=("slot-taken", 0, 0, 0),
    ),
    rule(
        "first-round-before-second",
        "Judged in two rounds … First slot-taken, slot-class, …; then fresh, early-read of the guard",
        "g.mul mul g1, g2, g3",
        "g.sum add g4, g1, 0 ; g.mem mul g5, g2, g3",  # g.sum: early-read (round 2); g.mem: slot-class (round 1)
        "g.flow halt",
        core=REJECT,
        given={"g1": 9, "g2": 6, "g3": 7},
        cycles=1,
        bundles=1,
        hazard=("slot-class", 1, 1, 1),
    ),
    rule(
        "operation-by-operation",
        "in each operation by operation in the core's slot order …, by all names of the round",
        "g.mem mul g5, g2, g3 ; g.sum add h1, g2, 0",  # g.sum comes first: links, though slot-class is the earlier name
        "g.flow halt",
        given={"g2": 6, "g3": 7},
        cycles=0,
        bundles=0,
        hazard=("links", 0, 0, 0),
    ),
    rule(
        "guard-register",
        "which registers may guard an operation",
        "g.sum add g1, g2, 0 if g2",
        "g.flow halt",
        given={"g2": 6},
        cycles=0,
        bundles=0,
        hazard=("guard-register", 0, 0, 0),
    ),
    rule(
        "busy",
        "Busy b blocks that slot for beats t … t + b − 1, guard on or off",
        "g.mul div g1, g2, g3",  # blocks beats 0, 1, 2; lands 1
        "idle 1",
        "g.mul mul g4, g2, g3",  # beat 2
        given={"g2": 42, "g3": 6},
        cycles=2,
        bundles=2,
        after={"g1": 7},
        hazard=("busy", 2, 2, 2),
    ),
    rule(
        "busy-ends",
        "Busy b blocks that slot for beats t … t + b − 1",
        "g.mul div g1, g2, g3",
        "idle 2",
        "g.mul mul g4, g2, g3 ; g.flow halt",  # beat 3, lands 5: drain 1
        given={"g2": 42, "g3": 6},
        cycles=5,
        bundles=4,
        drain=1,
        after={"g1": 7, "g4": 252},
    ),
    rule(
        "read-ports",
        "Distinct registers read of a cluster count against its read ports, crossing ones in the cluster they live in.",
        "h.sum add h3, h1, h2 ; h.mem add h4, g1, h1 ; g.sum add g2, h3, 0",  # h1 h2 h3 are three
        "g.sum add g2, h1, h2 ; h.sum add h5, h3, h4 ; g.flow halt",  # h1 h2 h3 h4
        core=replace(BENCH, clusters=(BENCH.clusters[0], PlainCluster("h", 16, 3, 6))),
        given={"h1": 1, "h2": 2, "h3": 5, "g1": 10, "g2": 0},
        cycles=1,
        bundles=1,
        after={"h3": 3, "h4": 11, "g2": 5},
        hazard=("read-ports", 1, 1, 1),
    ),
    rule(
        "guards-take-no-port-and-no-link",
        "read in step 3 … on wires of their own: no read port, no link, no freshness",
        "h.sum add h3, h1, h2 if g8 ; g.sum add g1, g2, g3 if g9 ; g.flow halt",
        core=replace(
            BENCH,
            clusters=(PlainCluster("g", 16, 2, 6), BENCH.clusters[1]),
            links=(BENCH.links[0], replace(BENCH.links[1], operands=0)),
        ),
        given={"h1": 1, "h2": 2, "g2": 6, "g3": 7, "g8": 1, "g9": 1},
        cycles=1,
        bundles=1,
        after={"h3": 3, "g1": 13},
    ),
    rule(
        "links-count-places",
        "Crossing operands count against the link: every operand place",
        "g.sum add g1, h1, h1 ; g.flow halt if g9",  # two places: allowed
        "g.sum add g1, h1, h1 ; g.mul mul g2, h1, g3 if g9",  # three, guard off or on
        given={"h1": 4, "g3": 7, "g9": 0},
        cycles=1,
        bundles=1,
        after={"g1": 8},
        hazard=("links", 1, 1, 1),
    ),
    rule(
        "shared-link",
        "or with `shared` every distinct register",
        "g.sum add g1, h1, h1 ; g.mul mul g2, h1, h2 ; g.flow halt",  # h1, h2: two; lands 2, drain 1
        core=with_link(BENCH, shared=True),
        given={"h1": 4, "h2": 7},
        cycles=2,
        bundles=1,
        drain=1,
        after={"g1": 8, "g2": 28},
    ),
    rule(
        "operand-may-not-cross",
        "which operands may come over a link",
        "g.mem lw g1, [h1]",  # g.mem has no crossing base
        given={"h1": 0},
        regions=(words(0, 77),),
        cycles=0,
        bundles=0,
        hazard=("links", 0, 0, 0),
    ),
    rule(
        "updated-base-stays",
        "Results, updated bases and `count` registers stay in the slot's cluster (`links`).",
        "h.mem lw h1, [g1] ; g.flow halt if g9",  # a base that only crosses: allowed
        "h.mem lw h1, [g1 then +4]",
        given={"g1": 0, "g9": 0},
        regions=(words(0, 77),),
        cycles=1,
        bundles=1,
        hazard=("links", 1, 1, 1),
    ),
    rule(
        "fresh-freezes-an-exposed-core",
        "`stall`: exposed freezes one cycle and goes on with the values read",
        "h.sum add h1, h2, h3 ; g.mul mul g2, g3, g4",  # h1 lands 1, g2 lands 2
        "g.sum add g1, h1, 0",  # beat 1, h1 is fresh: one cycle more, nothing ages
        "g.mem add g5, g2, 0",  # beat 2: g2 is there
        "g.flow halt",
        core=with_link(BENCH, fresh="stall"),
        given={"h1": 9, "h2": 1, "h3": 2, "g3": 6, "g4": 7},
        cycles=5,
        bundles=4,
        stalls={"fresh": 1},
        after={"h1": 3, "g1": 3, "g2": 42, "g5": 42},
    ),
    rule(
        "fresh-freeze-ages-nothing",
        "Freeze (…): cycles pass, beats do not: nothing lands, nothing ages.",
        "h.sum add h1, h2, h3 ; g.mul mul g2, g3, g4 ; g.mem lw g6, [g7]",  # h1 lands 1, g2 lands 2, g6 lands 3
        "g.sum add g1, h1, 0",  # beat 1, cycles 1 and 2
        "g.mem add g5, g6, 0",  # beat 2: the old g6
        "g.flow halt",
        core=with_link(BENCH, fresh="stall"),
        given={"h1": 9, "h2": 1, "h3": 2, "g3": 6, "g4": 7, "g6": 5, "g7": 0},
        regions=(words(0, 77),),
        cycles=5,
        bundles=4,
        stalls={"fresh": 1},
        after={"h1": 3, "g1": 3, "g2": 42, "g5": 5, "g6": 77},
    ),
    rule(
        "fresh-is-charged-guard-off",
        "Slot, busy, read ports, links and freshness are charged whether the guard is on or off",
        "h.sum add h1, h2, h3",
        "g.sum add g1, h1, 0 if g8",
        "g.flow halt",
        core=with_link(BENCH, fresh="stall"),
        given={"h1": 9, "h2": 1, "h3": 2, "g8": 0},
        cycles=4,
        bundles=3,
        stalls={"fresh": 1},
        after={"h1": 3},
    ),
    rule(
        "fresh-rejected",
        "Fresh: a crossing register that landed in this very beat. … `reject`",
        "h.sum add h1, h2, h3",
        "g.sum add g1, h1, 0",
        "g.flow halt",
        core=with_link(BENCH, fresh="reject"),
        given={"h1": 9, "h2": 1, "h3": 2},
        cycles=1,
        bundles=1,
        after={"h1": 3},
        hazard=("fresh", 1, 1, 1),
    ),
    rule(
        "fresh-waits-on-an-interlocked-core",
        "interlocked waits one beat as the last wait of step 2; cause `fresh` in both",
        "h.sum add h1, h2, h3 ; g.mem lw g2, [g3]",  # h1 lands 1, g2 lands 3
        "g.sum add g1, h1, 0 ; g.mul add g6, g3, 1",  # beat 1 waits, issues in beat 2
        "g.mem add g5, g2, 0",  # beat 3: g2 has just landed, no hold: the beat advanced
        "g.flow halt",  # beat 4
        core=with_link(LOCKED, fresh="stall"),
        given={"h1": 9, "h2": 1, "h3": 2, "g3": 0},
        regions=(words(0, 77),),
        cycles=5,
        bundles=4,
        stalls={"fresh": 1},
        after={"h1": 3, "g1": 3, "g2": 77, "g5": 77, "g6": 1},
    ),
    rule(
        "fresh-wait-then-ports",
        "its results fit the ports beside those in flight … The last wait, once a bundle, is that for a fresh operand.",
        "h.sum add h1, h2, h3 ; g.mem lw g2, [g3]",  # h1 lands 1, g2 lands 3
        "g.sum add g1, h1, 0",  # beat 1: would land 2, but fresh; beat 2: would land 3 beside g2; issues in beat 3
        "g.flow halt",  # beat 4
        core=with_link(replace(ONE_PORT, interlocked=True), fresh="stall"),
        given={"h1": 9, "h2": 1, "h3": 2, "g3": 0},
        regions=(words(0, 77),),
        reading="R4",
        cycles=5,
        bundles=3,
        stalls={"fresh": 1, "hold": 1},
        after={"h1": 3, "g1": 3, "g2": 77},
    ),
    rule(
        "one-fresh-freeze-a-bundle",
        "`stall`: exposed freezes one cycle and goes on with the values read",
        "h.sum add h1, h3, 1 ; h.mem add h2, h3, 2",
        "g.sum add g1, h1, 0 ; g.mul add g2, h2, 0",  # two fresh operands
        "g.flow halt",
        core=with_link(BENCH, fresh="stall"),
        given={"h3": 4},
        reading="R5",
        cycles=4,
        bundles=3,
        stalls={"fresh": 1},
        after={"h1": 5, "h2": 6, "g1": 5, "g2": 6},
    ),
    rule(
        "no-freeze-of-a-bundle-that-does-not-issue",
        "The bundle that meets it in steps 2 to 4 has no effect and is not counted.",
        "h.sum add h1, h3, 1",
        "g.sum add g1, h1, 0 ; g.mem lw g2, [g3]",  # fresh in step 3, an undefined address in step 4
        core=with_link(BENCH, fresh="stall"),
        given={"h3": 4},
        reading="R9",
        cycles=1,
        bundles=1,
        after={"h1": 5},
        hazard=("undefined-used", 1, 1, 1),
    ),
]

MEMORY = [
    rule(
        "bank-conflict-freezes",
        "bank = (address ÷ width) mod banks. Freeze = max(0, max over banks of Σ (1 + wait) − 1)",
        "g.mem lw g1, [g2] ; h.mem lw h1, [h2]",  # words 0 and 2: bank 0 twice; lands beat 3
        "idle 1",
        "g.sum add g3, g1, 0 ; g.mem lw g4, [g2 + 4] ; h.mem lw h3, [h2]",  # beat 2: old g1; banks 1 and 0; land 5
        "g.flow halt",  # beat 3; drain 5 − 3 − 1
        given={"g1": 9, "g2": 0, "h2": 8},
        regions=(words(0, 70, 71, 72),),
        cycles=6,
        bundles=4,
        stalls={"bank": 1},
        drain=1,
        after={"g1": 70, "h1": 72, "g3": 9, "g4": 71, "h3": 72},
    ),
    rule(
        "bank-and-wait-parts",
        "The part that would be there with no wait states is cause `bank` (the part `reject` judges), the rest `wait`.",
        # ld touches banks 0 and 1, slowest byte 4 … 7: 1 + 2 in each; lw word 2: bank 0. Bank 0: 3 + 1 − 1 = 3, with
        # no wait states 1 + 1 − 1 = 1.
        "g.mem ld g2, [g4] ; h.mem lw h1, [h2] ; g.flow halt",
        core=replace(BENCH, waits=(PlainWait(4, 4, 2),)),
        given={"g4": 0, "h2": 8},
        regions=(words(0, 70, 71, 72),),
        cycles=6,
        bundles=1,
        stalls={"bank": 1, "wait": 2},
        drain=2,
        after={"g2": 70, "g3": 71, "h1": 72},
    ),
    rule(
        "broadcast",
        "with `broadcast`, loads of the same words of a bank count once, with the longer wait",
        "g.mem lb g1, [g2] ; h.mem lb h1, [g2 + 1] ; g.flow halt",  # bytes of word 0; the second waits 3
        core=replace(BENCH, broadcast=True, waits=(PlainWait(1, 1, 3),)),
        given={"g2": 0},
        regions=(words(0, 0x0201),),
        cycles=6,
        bundles=1,
        stalls={"wait": 3},
        drain=2,
        after={"g1": 1, "h1": 2},
    ),
    rule(
        "conflict-rejected",
        "what a bank conflict does (`stall`, `reject`)",
        "g.mem lw g1, [g2] ; h.mem lw h1, [h2 + 4]",  # words 0 and 3; a wait alone is no conflict
        "g.mem lw g1, [g2 then +4] ; h.mem sw h3, [h2]",  # words 0 and 2
        core=replace(BENCH, conflict="reject", waits=(PlainWait(0, 4, 2),)),
        given={"g2": 0, "h2": 8, "h3": 1},
        regions=(words(0, 70, 71, 72, 73),),
        cycles=3,
        bundles=1,
        stalls={"wait": 2},
        hazard=("bank-conflict", 1, 3, 1),
    ),
    rule(
        "misaligned-rejected",
        "Judged in this order …: undefined-used, misaligned, out-of-array",
        "g.mem lw g1, [g2 + 4] ; h.mem lw h1, [h2]",  # out of the array; misaligned
        given={"g2": 0, "h2": 2},
        regions=(words(0, 70),),
        cycles=0,
        bundles=0,
        hazard=("misaligned", 0, 0, 0),
    ),
    rule(
        "pairs-align-to-eight",
        "Alignment is the access size, 8 for pairs.",
        "g.mem ld g4, [g2]",
        given={"g2": 4},
        regions=(words(0, 70, 71, 72),),
        cycles=0,
        bundles=0,
        hazard=("misaligned", 0, 0, 0),
    ),
    rule(
        "misaligned-split",
        "misaligned access (`reject`, `split`) … an access charges each bank it touches once",
        "g.mem lw g1, [g2] ; h.mem lw h1, [h2] ; g.flow halt",  # bytes 6 … 9: banks 1 and 0; word 0: bank 0
        core=replace(BENCH, misaligned="split"),
        given={"g2": 6, "h2": 0},
        regions=(words(0, 0, 0x44330000, 0x00006655),),
        cycles=4,
        bundles=1,
        stalls={"bank": 1},
        drain=2,
        after={"g1": 0x66554433, "h1": 0},
    ),
    rule(
        "over-is-readable",
        "Reading beyond an array and the bytes its `over` declares (which are undefined) is `out-of-array`",
        "g.mem lw g1, [g2 + 4] ; g.flow halt if g8",
        "g.mem lw g1, [g2 + 8]",
        given={"g1": 1, "g2": 0, "g8": 0},
        regions=(words(0, 70, over=4),),
        cycles=1,
        bundles=1,
        hazard=("out-of-array", 1, 1, 1),
    ),
    rule(
        "over-is-not-writable",
        "so is writing outside arrays and scratch",
        "g.mem sw g1, [g2 + 4]",
        given={"g1": 1, "g2": 0},
        regions=(words(0, 70, over=4),),
        cycles=0,
        bundles=0,
        hazard=("out-of-array", 0, 0, 0),
    ),
    rule(
        "store-twice",
        "two stores to one byte in one beat are `store-twice`",
        "g.mem sw g1, [g2] ; h.mem sb h1, [h2 + 3]",  # also a bank conflict: judged later
        core=replace(BENCH, conflict="reject"),
        given={"g1": 1, "g2": 0, "h1": 1, "h2": 0},
        regions=(words(0, 70),),
        cycles=0,
        bundles=0,
        hazard=("store-twice", 0, 0, 0),
    ),
    rule(
        "stores-change-memory-after-loads",
        "Loads take memory in their issue beat; stores change it after all loads of that beat",
        "g.mem sw g1, [g2] ; h.mem lw h1, [h2]",  # bank 0 twice; h1 lands 3 with the old word
        "h.mem lw h3, [h2] ; g.mem sw g3, [g2 + 4]",  # beat 1: the new word; lands 4
        "g.mem sw g3, [g2] ; g.flow halt",  # beat 2; drain 4 − 2 − 1
        given={"g1": 0x01020304, "g2": 0, "g3": 5, "h2": 0},
        regions=(words(0, 70, 71),),
        cycles=5,
        bundles=3,
        stalls={"bank": 1},
        drain=1,
        after={"h1": 70, "h3": 0x01020304},
        stored={0: 5, 1: 0, 2: 0, 3: 0, 4: 5, 5: 0, 6: 0, 7: 0},
    ),
    rule(
        "update-first-address",
        "An update-first address uses the sum in the same beat; base updates … land with class `update`",
        "g.mem lw g1, [+4 then g2]",  # address 4; g2 lands with 4 in beat 2; g1 lands 3
        "g.mem lw g3, [g2 then +4]",  # beat 1: the old g2, address 0; would land g2 = 4 in beat 3; g3 lands 4
        "g.mem lw g4, [g2 + 4]",  # beat 2: g2 = 4, address 8; lands 5
        "g.flow halt",  # drain 5 − 3 − 1
        core=replace(BENCH, latency_classes={"load": 3, "multiply": 2, "update": 2}),
        given={"g2": 0},
        regions=(words(0, 70, 71, 72),),
        cycles=5,
        bundles=4,
        drain=1,
        after={"g1": 71, "g2": 4, "g3": 70, "g4": 72},
    ),
    rule(
        "ring",
        "`[r then +step in ring N]` for a power-of-two ring aligned to its size",
        "g.mem lw g1, [g2 then +12 in ring 16]",  # address 24; then 16 + (24 + 12) mod 16 = 20
        "g.mem lw g3, [g2 then +-8 in ring 16]",  # address 20; then 16 + (20 − 8) mod 16 = 28; lands 4
        "g.flow halt",
        given={"g2": 24},
        regions=(words(16, 72, 73, 74, 75),),
        cycles=4,
        bundles=3,
        drain=1,
        after={"g1": 74, "g2": 28, "g3": 73},
    ),
    rule(
        "addresses-wrap",
        "Addresses wrap at 32 bits, accesses do not.",
        "g.mem lw g1, [g2 + 8] ; g.flow halt",
        given={"g2": 0xFFFFFFFC},
        regions=(words(0, 70, 71),),
        cycles=3,
        bundles=1,
        drain=2,
        after={"g1": 71},
    ),
    rule(
        "big-endian-pair",
        "Pairs are even:odd, the least significant word in even whatever the endianness",
        "g.mem ld g2, [g1] ; h.mem sh h1, [h2] ; g.flow halt",
        core=replace(BENCH, endianness="big", banks=4),
        given={"g1": 0, "h1": 0x1234, "h2": 8},
        regions=(PlainRegion(0, 10, 0, (1, 2, 3, 4, 5, 6, 7, 8, 0, 0)),),
        cycles=3,
        bundles=1,
        drain=2,
        after={"g2": 0x05060708, "g3": 0x01020304},
        stored={8: 0x12, 9: 0x34},
    ),
]

BRANCHES = [
    rule(
        "delay-slots",
        "A branch of latency B issued at index t makes bundle t + B come from its target",
        "g.flow jump on",
        "g.sum add g1, g1, 1",
        "g.sum add g1, g1, 100",
        "on: g.flow halt",
        given={"g1": 0},
        cycles=3,
        bundles=3,
        after={"g1": 1},
    ),
    rule(
        "penalty-and-straddle",
        "A taken redirect … pays the taken penalty then; freeze for a straddling target",
        "g.flow jump on ; g.mem lw g2, [g3]",  # lands 3
        "g.sum add g1, g1, 1",  # beat 1; then 2 + 3 cycles
        "g.sum add g1, g1, 100",
        "! on: g.sum add g4, g2, 0 ; g.flow jump off if g8",  # beat 2: the old g2; a guard-off branch costs nothing
        "! off: g.flow halt",  # beat 3; fallen into, it costs nothing
        core=replace(BENCH, taken_penalty=2, straddle_freeze=3),
        given={"g1": 0, "g2": 9, "g3": 0, "g8": 0},
        regions=(words(0, 77),),
        cycles=9,
        bundles=4,
        stalls={"penalty": 2, "straddle": 3},
        after={"g1": 1, "g2": 77, "g4": 9},
    ),
    rule(
        "redirect-cancels-idle",
        "A taken redirect cancels the rest of a multi-beat idle word",
        "g.flow jump on",
        "idle 5",  # one beat of it
        "on: g.flow halt",
        cycles=3,
        bundles=3,
    ),
    rule(
        "count",
        "`count r, L`: if r ≠ 0, take one off r and branch to L",
        "loop: g.flow count g9, loop",  # g9 = 2, 1, 0
        "g.sum add g1, g1, 1",
        "g.flow halt",
        given={"g1": 0, "g9": 2},
        cycles=7,
        bundles=7,
        after={"g1": 3, "g9": 0},
    ),
    rule(
        "compare-and-branch",
        "`beq bne blt bge bltu bgeu a, b, L` (RISC-V names)",
        "g.flow bltu g1, g2, away",  # 0xffffffff < 1: no
        "idle 1",
        "g.flow blt g1, g2, on",  # −1 < 1: yes
        "idle 1",
        "away: g.sum li g3, 1",
        "on: g.flow halt",
        given={"g1": 0xFFFFFFFF, "g2": 1},
        cycles=5,
        bundles=5,
    ),
    rule(
        "two-redirects",
        "two taken branches issued in this bundle, `two-redirects`",
        "g.sum li g1, 1 ; g.flow jump on ; h.flow jump on",  # step 5: the bundle counts
        "on: g.flow halt",
        given={"g1": 0},
        cycles=1,
        bundles=1,
        hazard=("two-redirects", 0, 0, 0),
    ),
    rule(
        "overlapping-branches",
        "whether branches may overlap in flight",
        "g.flow jump first",  # index 0: bundle 2 comes from first
        "g.flow jump second",  # index 1: bundle 3 comes from second
        "g.flow halt",
        "first: g.sum li g1, 1",  # index 2
        "g.sum li g1, 2",
        "second: g.flow halt",  # index 3
        cycles=4,
        bundles=4,
        after={"g1": 1},
    ),
    rule(
        "ran-off-the-end",
        "nothing there, `ran-off-the-end`",
        "g.sum li g1, 1",
        "g.sum li g2, 1",  # nothing behind it; the bundle counts, its result is in flight
        cycles=2,
        bundles=2,
        after={"g1": 1},
        hazard=("ran-off-the-end", 1, 1, 1),
    ),
    rule(
        "hazard-of-step-five-keeps-the-effects",
        "The bundle that meets it in steps 2 to 4 has no effect and is not counted.",
        "g.mem sw g1, [g2] ; h.mem lw h1, [h2]",  # bank 0 twice; nothing behind it
        given={"g1": 5, "g2": 0, "h1": 9, "h2": 8},
        regions=(words(0, 70, 71, 72),),
        reading="R10",
        cycles=2,
        bundles=1,
        stalls={"bank": 1},
        stored={0: 5, 1: 0, 2: 0, 3: 0},
        hazard=("ran-off-the-end", 0, 0, 0),
    ),
    rule(
        "ran-off-through-a-register",
        "nothing there, `ran-off-the-end`",
        "g.flow jump g1",
        "idle 3",  # judged in its first beat: bundle 2 would come from address 4
        "g.flow halt",
        core=replace(BENCH, taken_penalty=2),  # not paid: there is no redirect
        given={"g1": 4},
        reading="R10",
        cycles=2,
        bundles=2,
        hazard=("ran-off-the-end", 1, 1, 1),
    ),
    rule(
        "a-named-target",
        "a taken branch to a register that names places goes to one of them",
        "g.flow bne g1, g2, g3 to here, there",  # not taken: no error
        "here: g.flow jump g1 to here, there",
        "idle 1",  # index 2: there comes next
        "g.sum li g4, 1",
        "there: g.flow halt",
        given={"g1": 32, "g2": 32, "g3": 0},
        cycles=4,
        bundles=4,
        after={"g4": UNDEFINED},
    ),
    rule(
        "a-target-not-named",
        "or there is `indirect-target`",
        "g.sum li g4, 1",
        "here: g.flow jump g1 to here, there ; g.sum li g4, 2 ; g.mem lw g5, [g6]",  # before misaligned
        "off: idle 2",
        "there: g.flow halt",
        given={"g1": 16, "g6": 1},
        cycles=1,
        bundles=1,
        after={"g4": 1},
        hazard=("indirect-target", 1, 1, 1),
    ),
    rule(
        "branch-overlap",
        "where the core forbids overlap, a branch, on or off, that issues with or behind another in flight",
        "g.flow jump on if g8",  # off, in flight all the same
        "g.flow jump on if g8",
        "on: g.flow halt",
        core=replace(BENCH, branch_overlap=False),
        given={"g8": 0},
        cycles=2,
        bundles=2,
        hazard=("branch-overlap", 1, 1, 1),
    ),
    rule(
        "halt-is-no-branch",
        "(`halt` is no branch)",
        "g.flow jump on if g8",
        "g.flow halt",
        "on: g.flow halt",
        core=replace(BENCH, branch_overlap=False),
        given={"g8": 0},
        cycles=2,
        bundles=2,
    ),
    rule(
        "call-and-return",
        "(that word's address is its link value; an idle word of k beats counts k)",
        "g.flow call g1, away",  # position 0, word 0; link: position 2, the word at 24
        "g.sum li g2, 2 ; g.mem li g3, 3",  # words 1, 2
        "g.flow halt",  # word 3
        "away: g.flow jump g1",
        "idle 1",
        cycles=5,
        bundles=5,
        after={"g1": 24, "g2": 2, "g3": 3},
    ),
    rule(
        "link-nowhere",
        "a guard-on `call` behind which no word begins B bundles on in program order, `link-nowhere`",
        "g.flow call g1, away",
        "idle 3",  # position 2 is inside it
        "away: g.flow halt",
        cycles=1,
        bundles=1,
        hazard=("link-nowhere", 0, 0, 0),
    ),
    rule(
        "branch-past-halt",
        "a taken branch in flight with `halt`, those issued with it included, `branch-past-halt`",
        "g.flow jump on",
        "g.flow halt",
        "on: g.sum li g1, 1",
        cycles=2,
        bundles=2,
        hazard=("branch-past-halt", 1, 1, 1),
    ),
]

UNDEFINEDS = [
    rule(
        "select-passes-the-chosen",
        "a select passes only the chosen operand (an undefined selector gives undefined)",
        "g.sum select g1, g2, g3, g4",  # g4 is undefined, not chosen
        "g.sum select g5, g6, g3, g4",  # g6 is 0: g4
        "g.sum select g7, g4, g3, g3",
        "g.flow halt",
        given={"g2": 1, "g3": 42, "g5": 9, "g6": 0, "g7": 9},
        cycles=4,
        bundles=4,
        after={"g1": 42, "g5": UNDEFINED, "g7": UNDEFINED},
    ),
    rule(
        "bytes-keep-it",
        "results inherit it lane by lane, …, bytes keep it through load, store and pack",
        "g.mem sb g1, [g2] ; g.sum pack.h2 g3, g4.lo, g5.hi",  # g5: bytes 2, 3 known, 0, 1 not; g4 known
        "g.mem lw g6, [g2] ; g.sum pack.h2 g7, g5.lo, g4.lo ; g.mul mul.half g8, g5.hi, g4.lo",
        "g.mem lh g9, [g2] ; g.sum add.h2 g10, g5, g4",
        "g.mem lh g11, [g2 + 2] ; g.sum add g12, g5, g4 ; g.flow halt",  # lands 6: drain 2
        given={
            "g1": UNDEFINED,
            "g2": 0,
            "g4": 0x00020003,
            "g5": Value(0x00050000, 0b0011),
            "g11": 9,
            "g9": 9,
            "g12": 9,
        },
        regions=(words(0, 0x44332211),),
        cycles=6,
        bundles=4,
        drain=2,
        after={
            "g3": 0x00050003,
            "g6": Value(0x44332200, 0b0001),
            "g7": Value(0x00030000, 0b0011),
            "g8": 15,
            "g9": UNDEFINED,
            "g10": Value(0x00070000, 0b0011),
            "g11": 0x4433,
            "g12": UNDEFINED,
        },
        stored={0: None},
    ),
    rule(
        "undefined-address",
        "It is an error, `undefined-used`, at a guard, a `count`, a taken indirect target and an address",
        "g.mem lw g1, [g2] if g8",  # off: no error
        "g.sum li g3, 1 ; g.mem lw g1, [g2]",
        given={"g8": 0, "g3": 0},
        cycles=1,
        bundles=1,
        hazard=("undefined-used", 1, 1, 1),
    ),
    rule(
        "undefined-guard",
        "It is an error, `undefined-used`, at a guard",
        "g.sum li g3, 1 if g8",
        cycles=0,
        bundles=0,
        hazard=("undefined-used", 0, 0, 0),
    ),
    rule(
        "undefined-count",
        "It is an error, `undefined-used`, at … a `count`",
        "start: g.flow count g9, start",
        given={"g9": Value(1, 0b1000)},
        cycles=0,
        bundles=0,
        hazard=("undefined-used", 0, 0, 0),
    ),
    rule(
        "undefined-target",
        "It is an error, `undefined-used`, at … a taken indirect target",
        "g.flow beq g1, g2, g3",  # not taken: no error
        "idle 1",
        "g.flow jump g3",
        given={"g1": 1, "g2": 2},
        cycles=2,
        bundles=2,
        hazard=("undefined-used", 2, 2, 2),
    ),
    rule(
        "sticky-ors",
        "Sticky results OR into the register when they land, take a write port, never count for lands-twice",
        "g.sum add.sat.flag g1, g7, g2, g3 ; g.mul add g4, g2, 0 ; g.mem add.sat.flag g5, g7, g6, g6",
        "g.sum add.sat.flag g1, g7, g6, g6 ; g.flow halt",  # does not saturate: g7 keeps its bits
        given={"g2": 0x7FFFFFFF, "g3": 1, "g6": 1, "g7": 4},
        cycles=2,
        bundles=2,
        after={"g1": 2, "g4": 0x7FFFFFFF, "g5": 2, "g7": 5},
    ),
    rule(
        "sticky-on-an-undefined-register",
        "Sticky results OR into the register when they land",
        "g.sum add.sat.flag g1, g7, g2, g2 ; g.mul add.sat.flag g3, g6, g5, g5 ; g.flow halt",
        given={"g2": 1, "g6": 1, "g7": Value(0, 0b0010), "g3": 9},  # g5 is undefined
        reading="R2",
        cycles=1,
        bundles=1,
        after={"g1": 2, "g3": UNDEFINED, "g6": UNDEFINED, "g7": UNDEFINED},
    ),
    rule(
        "sticky-beside-a-plain-result",
        "Sticky results OR into the register when they land, …, never count for lands-twice",
        "g.sum add.sat.flag g1, g7, g2, g3 ; g.mul li g7, 8 ; g.flow halt",
        given={"g2": 0x7FFFFFFF, "g3": 1, "g7": 4},
        reading="R1",
        cycles=1,
        bundles=1,
        after={"g1": 0x7FFFFFFF, "g7": 9},
    ),
    rule(
        "pair-carries-and-wraps",
        "Pairs are even:odd, the least significant word in even",
        "g.sum add.pair g6, g2, g4 ; h.mem sd h2, [h1] ; g.flow halt",
        core=BENCH,
        given={"g2": 0x80000001, "g3": 1, "g4": 0x80000002, "g5": 0xFFFFFFFF, "h1": 0, "h2": 7, "h3": 8},
        regions=(words(0, None, None),),
        cycles=1,
        bundles=1,
        after={"g6": 3, "g7": 1},  # 1:80000001 + ffffffff:80000002 = 1:00000003 in 64 bits
        stored={0: 7, 1: 0, 2: 0, 3: 0, 4: 8, 5: 0, 6: 0, 7: 0},
    ),
    rule(
        "undefined-step-of-an-update-behind",
        "It is an error … at … an address",
        "g.mem lw g1, [g2 then +g3] ; g.flow halt",  # the address is g2's; what g2 becomes is undefined
        given={"g2": 0},
        regions=(words(0, 77),),
        reading="R6",
        cycles=3,
        bundles=1,
        drain=2,
        after={"g1": 77, "g2": UNDEFINED},
    ),
    rule(
        "undefined-comparison",
        "its taken bit is fixed at issue",
        "start: g.flow beq g1, g2, start",
        given={"g1": 0},
        reading="R7",
        cycles=0,
        bundles=0,
        hazard=("undefined-used", 0, 0, 0),
    ),
    rule(
        "sticky-takes-a-port",
        "take a write port",
        "g.sum add.sat.flag g1, g7, g2, g3",
        "g.flow halt",
        core=ONE_PORT,
        given={"g2": 2, "g3": 1, "g7": 0},
        cycles=1,
        bundles=1,
        hazard=("write-ports", 1, 1, 1),
    ),
    rule(
        "pair-takes-two-ports",
        "Pairs are even:odd, …, two ports and two crossings; hazards are judged by half.",
        "g.sum add.pair g4, g2, g2 ; g.mul add g6, g2, 0 ; g.flow halt if g8",  # three results, two ports
        "g.flow halt",
        core=replace(BENCH, clusters=(PlainCluster("g", 16, 12, 2), BENCH.clusters[1])),
        given={"g2": 2, "g3": 1, "g8": 0},
        cycles=1,
        bundles=1,
        hazard=("write-ports", 1, 1, 1),
    ),
    rule(
        "pair-hazards-by-half",
        "hazards are judged by half",
        "g.sum add.pair g4, g2, g2 ; g.mul add g5, g2, 0",
        "g.flow halt",
        given={"g2": 0x80000001, "g3": 1},
        cycles=1,
        bundles=1,
        hazard=("lands-twice", 1, 1, 1),
    ),
    rule(
        "zero-register",
        "there is no zero register unless a core names one",
        "g.sum add g0, g2, g2 ; g.mul add g1, g2, g0",
        "g.sum add g3, g0, g0 ; g.flow halt",
        core=replace(BENCH, zero_registers=frozenset({0})),
        given={"g2": 2},
        cycles=2,
        bundles=2,
        after={"g0": 0, "g1": 2, "g3": 0},
    ),
    rule(
        "divide-by-zero",
        "Scalar mnemonics and their exact meaning follow … the RISC-V unprivileged ISA (div by 0 gives −1)",
        "g.mul div g1, g2, g3 ; g.flow halt",
        given={"g2": 7, "g3": 0},
        cycles=1,
        bundles=1,
        after={"g1": 0xFFFFFFFF},
    ),
]

SERVICE = replace(BENCH, service=3)

INTERRUPTS = [
    rule(
        "interrupt",
        "taken at the first beat, of a new or a held bundle, that would begin at or after the asked cycle (counted "
        "from 0) with no branch, on or off, in flight",
        "g.mem lw g1, [g2]",  # beat 0, lands 3
        "g.sum add g3, g1, 0",  # service beats 1, 2, 3; issues in beat 4: what would be old is new
        "g.flow halt",
        core=SERVICE,
        given={"g1": 9, "g2": 0},
        regions=(words(0, 77),),
        interrupt_at=1,
        cycles=6,
        bundles=3,
        stalls={"interrupt": 3},
        after={"g1": 77, "g3": 77},
    ),
    rule(
        "service-waits-for-landings",
        "at least to the end of the beat in which the last result in flight lands; the same bundle is fetched in the "
        "next beat",
        "g.mem lw g1, [g2]",  # lands 3
        "g.sum add g3, g1, 0",  # service of 1: beats 1, 2, 3 all the same
        "g.flow halt",
        core=replace(BENCH, service=1),
        given={"g1": 9, "g2": 0},
        regions=(words(0, 77),),
        interrupt_at=1,
        cycles=6,
        bundles=3,
        stalls={"interrupt": 3},
        after={"g1": 77, "g3": 77},
    ),
    rule(
        "interrupt-waits-for-branches",
        "with no branch, on or off, in flight",
        "g.flow jump on if g8",  # index 0, in flight to the end of index 1
        "g.sum li g1, 1",
        "on: g.sum li g2, 2",  # service before it: beats 2, 3, 4
        "g.flow halt",
        core=SERVICE,
        given={"g8": 0},
        interrupt_at=1,
        cycles=7,
        bundles=4,
        stalls={"interrupt": 3},
        after={"g1": 1, "g2": 2},
    ),
    rule(
        "interrupt-of-a-held-bundle",
        "taken at the first beat, of a new or a held bundle",
        "g.mem lw g1, [g2]",  # lands 3
        "g.sum add g3, g1, 0",  # beat 1 held; service beats 2, 3, 4; issues in beat 5
        "g.flow halt",
        core=replace(SERVICE, interlocked=True),
        given={"g1": 9, "g2": 0},
        regions=(words(0, 77),),
        interrupt_at=2,
        cycles=7,
        bundles=3,
        stalls={"hold": 1, "interrupt": 3},
        after={"g1": 77, "g3": 77},
    ),
    rule(
        "interrupt-asked-in-a-freeze",
        "the first beat … that would begin at or after the asked cycle",
        "g.mem sw g1, [g2]",  # beat 0, cycles 0 to 4
        "idle 2",  # service in beats 1, 2, 3, cycles 5 to 7, before its first beat
        "g.flow halt",
        core=replace(SERVICE, waits=(PlainWait(0, 4, 4),)),
        given={"g1": 9, "g2": 0},
        regions=(words(0, 77),),
        interrupt_at=2,
        cycles=11,
        bundles=4,
        stalls={"wait": 4, "interrupt": 3},
        stored={0: 9, 1: 0, 2: 0, 3: 0},
    ),
    rule(
        "hazard-in-service",
        "Judged in this order, in drain and service too",
        "g.mem lw g1, [g2]",  # lands 3
        "g.mul mul g1, g2, g2",  # beat 1, lands 3
        "g.flow halt",  # service from beat 2 on; beat 3 is not completed
        core=SERVICE,
        given={"g1": 9, "g2": 0},
        regions=(words(0, 77),),
        interrupt_at=2,
        cycles=3,
        bundles=2,
        stalls={"interrupt": 1},
        hazard=("lands-twice", 3, 3, 2),
    ),
]

RULES: list[Rule] = [*TIME, *HOLDS, *READING, *MEMORY, *BRANCHES, *UNDEFINEDS, *INTERRUPTS]
