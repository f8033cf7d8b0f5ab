"""Programs for what the fast engine does in ways of its own, most found by a planted fault that no other showed.

In the notation of :mod:`tests.differential.rules`; what they must give, model and stepper say.
"""

from __future__ import annotations

from dataclasses import replace

from tests.differential.generator import Trial
from tests.differential.plain import (
    UNDEFINED,
    PlainCore,
    PlainLink,
    PlainRegion,
    PlainWait,
    Value,
)
from tests.differential.rules import BENCH, LOCKED, ONE_PORT, RULES, assemble, register_number, words

BIG = replace(BENCH, endianness="big")
FRESH = replace(BENCH, links=(PlainLink(1, 0, 2, fresh="stall"), BENCH.links[1]))
SLOW = replace(BENCH, latency_classes={"load": 3, "multiply": 2, "update": 5})
LATE = replace(BENCH, latency_classes={"load": 3, "multiply": 2, "arithmetic": 3})
FAR = replace(BENCH, latency_classes={"load": 5, "multiply": 2})
SPLIT = replace(BENCH, misaligned="split")
ONE_LOCKED = replace(ONE_PORT, interlocked=True)
SHARED = replace(BENCH, broadcast=True)
WAITS = replace(BENCH, waits=(PlainWait(8, 4, 2),))
PAYS = replace(BENCH, taken_penalty=3, straddle_freeze=2, service=2)

NUMBERS = (words(0, *range(1, 12)),)
"""Eleven words from 0 on."""
MANY = (words(0, *(k * k for k in range(99))),)
GAP = (words(0, *range(1, 9), None, *range(10, 40)),)
TORN = (PlainRegion(0, 160, 0, tuple(None if k % 4 == 1 else k for k in range(160))),)
"""Words of which one byte each is undefined."""
SHORT = (PlainRegion(0, 8, 96, tuple(range(8))),)
"""Two words, and an over of many more."""


def pinned(
    *code: str,
    core: PlainCore = BENCH,
    regions: tuple[PlainRegion, ...] = (),
    at: int | None = None,
    limit: int = 1000,
    **given: int | Value,
) -> Trial:
    """``at``: the cycle of an interrupt."""
    registers = {register_number(core, n): Value(v) if isinstance(v, int) else v for n, v in given.items()}
    return Trial(core, assemble(core, code), registers, regions, at, limit)


def loop(first: str, second: str, *end: str, passes: int = 24, core: PlainCore = BENCH, **more: object) -> Trial:
    """A loop of two bundles, with its count in the first (the branch's latency is 2)."""
    code = f"!top: {first} ; g.flow count g15, top", second, *end, "end: g.flow halt"
    return pinned(*code, core=core, **{"g15": passes - 1, "g1": 0, "g3": 0, **more})  # type: ignore[arg-type]


AWAKE = "g.sum select g8, g9, g10, g11 ; g.mul sub g9, g9, 1"
"""g8 is 1 for one pass, when g9 has run down."""
PAIR_OF_LOADS = "g.mem lw g1, [g2 then +8] ; h.mem lw h1, [h2 then +8]"
SUM = "g.sum add g3, g3, g1"
FLAG = "g.sum add.sat.flag g2, g1, g4, g5"

OWN = (
    # landing
    pinned(f"{FLAG} ; g.mul li g1, 4", "g.sum mv g6, g1", "g.flow halt", g1=0, g4=0x7FFFFFFF, g5=1),
    pinned(FLAG, "g.sum mv g6, g1", "g.flow halt", g1=UNDEFINED, g4=0x7FFFFFFF, g5=1),
    pinned(f"{FLAG} ; g.flow halt", g1=UNDEFINED, g4=0x7FFFFFFF, g5=1),
    loop(FLAG, "g.sum mv g6, g1", g4=UNDEFINED, g5=1),
    loop("g.sum add g1, g1, 1 if g8 ; g.mul sub g8, g8, 1", "g.sum add g2, g1, 1", g8=3, g1=UNDEFINED),
    pinned("g.sum li g1, 5 if g8", "g.sum add g2, g1, 1", "g.flow halt", g1=UNDEFINED, g8=0),
    pinned("g.sum li g1, 5 if g8", "idle 2", "g.sum add g2, g1, 1", "g.flow halt", g1=UNDEFINED, g8=0),
    # waiting
    pinned("g.mul mul g8, g4, g5 if g9", "g.sum li g6, 7 if g8", "g.flow halt", core=LOCKED, g8=0, g9=1, g4=2, g5=3),
    pinned("g.mul mul g1, g4, g5 if g9", "g.sum add g6, g4, g5", "g.flow halt", core=ONE_LOCKED, g9=0, g4=2, g5=3),
    pinned("g.mul mul g1, g4, g5 if g9", "g.sum add g6, g4, g5", "g.flow halt", core=ONE_LOCKED, g9=1, g4=2, g5=3),
    pinned("g.sum li g1, 5 if g8 ; g.mul li g1, 6 if g9", "g.flow halt", core=LOCKED, g8=1, g9=1),
    # reading
    pinned("g.sum li g4, 7 if g8", "g.flow halt", g8=UNDEFINED),
    loop("g.sum li g4, 7 if g8", "g.mul mul g8, g5, g6 if g9 ; g.sum sub g9, g9, 1", g8=1, g9=5, g5=1, g6=UNDEFINED),
    pinned("h.sum li h1, 5 if g8", "g.sum add g1, h1, 0", "g.flow halt", core=FRESH, g8=0, h1=1),
    # redirecting
    pinned("g.flow bne g1, g2, g3", "g.sum li g4, 1", "g.sum li g5, 2", "g.flow halt", g1=1, g2=2, g3=24),
    loop("g.sum sub g6, g6, 1", "g.flow beq g6, g5, g7", "g.sum li g4, 1", "g.flow halt", g5=3, g6=9, g7=0),
    pinned("g.flow jump on if g8 ; h.flow jump off if g9", "idle 1", "on: g.flow halt", "off: g.flow halt", g8=1, g9=1),
    # memory
    pinned("g.mem lw g1, [g2] ; h.mem lw h1, [h2] if g8", "g.flow halt", regions=NUMBERS, g2=0, h2=8, g8=0),
    pinned("g.mem sw g1, [g2] ; h.mem lw h1, [h2]", "g.flow halt", core=SHARED, regions=NUMBERS, g1=1, g2=0, h2=0),
    pinned("g.mem lw g1, [g2]", "g.flow halt", core=WAITS, regions=NUMBERS, g2=4),
    pinned("g.mem sw g1, [g2] ; h.mem sb h1, [h2]", "g.flow halt", regions=NUMBERS, g1=1, g2=4, h1=1, h2=7),
    pinned("g.mem lw g1, [g2]", "g.flow halt", regions=NUMBERS, g2=UNDEFINED),
    pinned("g.mem lw g1, [g2]", "g.flow halt", regions=NUMBERS, g2=2),
    pinned("g.mem sw g1, [g2]", "g.flow halt", regions=NUMBERS, core=SPLIT, g1=1, g2=42),
    pinned("g.mem lw g1, [g2]", "g.flow halt", regions=NUMBERS, core=SPLIT, g2=42),
    loop("g.mem lw g1, [g2 + g6]", "g.sum mul.half g4, g5.lo, g5.lo", regions=GAP, g2=0, g6=UNDEFINED, passes=3),
    pinned("g.mem ld g2, [g1]", "g.sum mv g4, g3", "g.flow halt", regions=(words(0, 1, None),), g1=0),
    *(
        loop(f"g.mem {how}", "g.sum add g6, g6, g1", core=core, regions=TORN, g2=0, g6=0, g7=80, g8=UNDEFINED)
        for core in (BENCH, BIG)
        for how in (
            "lw g1, [g2 then +4]", "lh g1, [g2 then +2]", "ld g8, [g2 then +8 in ring 32]", "sw g8, [g2 then +4]",
            "sh g8, [g2 then +2]", "lw g1, [g2 then +4] ; h.mem sw h3, [h2]",
        )
    ),
    *(
        loop("g.mem lw g8, [g2 then +4]", "g.mem sw g8, [g7 then +4]", core=core, regions=TORN, g2=0, g7=80, g8=1)
        for core in (BENCH, BIG)
    ),
    loop("g.mem lw g8, [g2 then +4]", "g.sum add g6, g6, g8", regions=SHORT, g2=0, g6=0, g8=1),
    # strips
    loop("g.mem lw g1, [g2 then +4]", SUM, regions=NUMBERS, g2=0),
    loop("g.mem lw g1, [g2 then +-4]", SUM, regions=NUMBERS, g2=40),
    loop("g.mem lw g1, [+-4 then g2]", SUM, regions=NUMBERS, g2=40),
    loop("g.mem sw g1, [+4 then g2]", SUM, regions=NUMBERS, g2=4),
    loop("g.mem lw g1, [g2 + 8]", SUM, regions=NUMBERS, g2=40),
    loop("g.mem lw g1, [g2]", SUM, regions=NUMBERS, g2=44),
    loop("g.mem lw g1, [g2 then +4]", SUM, regions=NUMBERS, g2=2),
    loop("g.mem lw g1, [g2 then +4]", SUM, regions=GAP, g2=0),
    loop("g.mem lw g1, [g2 then +4]", "g.mem sw g1, [g4 then +4]", regions=GAP, g2=40, g4=44),
    loop("g.mem lw g1, [g2 then +4] if g8", "g.sum sub g8, g8, 1", regions=NUMBERS, g2=0, g8=9),
    loop("g.mem lw g1, [g2 then +4 in ring 16]", SUM, regions=NUMBERS, g2=16),
    loop("g.mem lw g1, [g2 then +4 in ring 32]", SUM, regions=NUMBERS, g2=32),
    loop("g.mem lw g1, [g2 then +4]", SUM, core=SLOW, regions=NUMBERS, g2=0),
    loop("g.mem lw g1, [g2 then +-4]", SUM, core=SLOW, regions=NUMBERS, g2=40),
    loop("g.mem lw g1, [g2 then +4]", "g.mul mul g4, g3, g1 if g9 ; g.sum sub g9, g9, 1", regions=GAP, g2=40, g9=7),
    loop("g.mem lw g1, [g2 then +4] ; h.mem lw h1, [h2 then +8]", "idle 1", regions=MANY, g2=0, h2=8, at=31),
    loop(PAIR_OF_LOADS, SUM, core=FAR, regions=MANY, g2=0, h2=8, at=100, passes=45),
    *(
        loop("g.mem lw g1, [g2 then +4]", second, core=PAYS, regions=GAP, g2=g2, h5=0, h6=9, g15=passes)
        for second in (SUM, "h.sum add h5, h5, 1 ; h.flow beq h5, h6, end", "h.flow beq h5, h5, end")
        for g2 in (0, 40)
        for passes in (15, 30)
    ),
    *(
        loop(f"g.mem lw g1, [{address}] if g8", AWAKE, regions=NUMBERS, g2=at, g8=0, g9=14, g10=0, g11=1)
        for address in ("g2", "g2 then +4 in ring 16", "g2 then +4")
        for at in (0, 2, 40, 42, 44)
    ),
    loop("g.mem lw g1, [g2 then +4]", SUM, core=PAYS, regions=GAP, g2=40, at=45),
    *(
        pinned(
            f"g.sum li g2, {to}", f"top: g.mem lw g1, [{address}] ; g.flow count g15, top", "g.mul mul g3, g1, g1",
            "g.flow halt", core=LATE, regions=(words(64, *range(1, 40)),), g15=23, g1=0, g2=64,
        )
        for to in (0, 96, 192, 240)
        for address in ("g2", "g2 then +4", "g2 then +-4", "g2 then +4 in ring 32", "g2 then +4 in ring 16")
    ),
    *(
        pinned(
            f"top: h.flow halt if g8 ; {AWAKE}", "g.mem lw g1, [g2 then +4] ; g.flow count g15, top", "g.flow halt",
            core=replace(core, branch_latency=1), regions=NUMBERS, g1=0, g2=0, g8=0, g9=times, g10=0, g11=1, g15=30,
        )
        for core in (BENCH, PAYS, LOCKED)
        for times in (3, 8, 9)
    ),
)  # fmt: skip


PROGRAMS = (
    *(pinned(*r.code, core=r.core, regions=r.regions, at=r.interrupt_at, limit=r.limit, **r.given) for r in RULES),
    *OWN,
)
"""The programs that pin a rule each, and these."""
