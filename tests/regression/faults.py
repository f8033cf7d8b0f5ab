"""Faults to plant into copies of the shipped kernels, a row each, and what must find them."""

from __future__ import annotations

from typing import NamedTuple


class Fault(NamedTuple):
    """``old`` becomes ``new`` in ``file``, where it first stands; ``kind`` of the claim that must not hold then.

    ``cases``: how many of the smallest are enough to find it.
    """

    name: str
    file: str
    old: str
    new: str
    kind: str = "case"
    core: str | None = None
    cases: int = 8


PLAIN = "weighted_sum/plain.vliw"
FULL = "weighted_sum/weighted_sum.vliw"
UNROLLED = "weighted_sum/unrolled.vliw"
ENERGY = "energy/energy.vliw"
CALIBRATE = "calibrate/calibrate.vliw"
WINDOW = "window_scale/window_scale.vliw"
PEAK = "peak/peak.vliw"
CHECKSUM = "checksum/checksum.vliw"
SECTIONS = "sections/sections.vliw"
LOWPASS = "lowpass/lowpass.vliw"

FAULTS = [
    Fault("product read a beat early", SECTIONS, "@8 * i + 13  add.pair", "@8 * i + 12  add.pair", "legal"),
    Fault(
        "load read a beat early",
        PLAIN,
        "@load                       dot.h2",
        "@load - 1                   dot.h2",
        "legal",
    ),
    Fault(
        "product two beats late",
        PLAIN,
        "@load                       dot.h2",
        "@load + 2                   dot.h2",
        "legal",
    ),
    Fault("one pass too few", PLAIN, "= n // 4 - 1  in g20", "= n // 4 - 2  in g20"),
    Fault("one pass too many", PLAIN, "= n // 4 - 1  in g20", "= n // 4      in g20"),
    Fault("start value missing", PLAIN, "    li     back, 0", "    li     h13, 0", "legal"),
    Fault("wrong start value", PLAIN, "@0  li     front, 0", "@0  li     front, 1"),
    Fault("one half of a pair twice", PLAIN, "dot.h2 h6, h3, g3", "dot.h2 h6, h3, g2"),
    Fault("result into the wrong register", PLAIN, "add    front, front, g6", "add    back, front, g6", "legal"),
    Fault("difference for a sum", PLAIN, "@0  add    g11, front, back", "@0  sub    g11, front, back"),
    Fault("base moved too far", PLAIN, "ld     h2, [h10 then +8]", "ld     h2, [h10 then +16]"),
    Fault("base not moved", PLAIN, "ld     g2, [g10 then +8]", "ld     g2, [g10]"),
    Fault("halves loaded for words", PLAIN, "ld     g2, [g10 then +8]", "lw     g2, [g10 then +8]", "legal"),
    Fault("bank conflicts over budget", PLAIN, "align 8 bank 2", "align 8 bank 0", "budget"),
    Fault("a beat too long a pass", PLAIN, "+ 1 - branch  count", "+ 2 - branch  count"),
    Fault("budget set too low", UNROLLED, "11 * n // 16 + 2", "10 * n // 16 + 2", "budget"),
    Fault(
        "guard on a load missing", FULL, "@0  ld         g2, [g10 then +8]  if left", "@0  ld         g2, [g10 then +8]"
    ),
    Fault(
        "guard turned round", ENERGY, "@1  lw g2, [g10 then +8] if g20", "@1  lw g2, [g10 then +8] if not g20", "legal"
    ),
    Fault("declared bytes too few", ENERGY, "over 24", "over 8"),
    Fault("signed shift of an unsigned value", PEAK, "srl       g12, g6, 16", "sra       g12, g6, 16", cases=24),
    Fault("last sums collected twice", FULL, "@1  add        g7, g7, front", "@0  add        g7, g7, front", "legal"),
    Fault("missing saturation", CALIBRATE, "@load                 sub.h2.sat", "@load                 sub.h2    "),
    Fault(
        "missing rounding",
        CALIBRATE,
        "@0                    mul.h2.q15.rnd.sat",
        "@0                    mul.h2.q15.sat    ",
    ),
    Fault("wrong half", CALIBRATE, "g16.lo", "g16.hi"),
    Fault("stored a beat early", CALIBRATE, "@4 * k + 3            sd ", "@4 * k + 2            sd ", "legal"),
    Fault(
        "right on the first core only",
        CALIBRATE,
        "@8 - branch           jump",
        "@5                    jump",
        core="lone4",
    ),
    Fault("wrong rounding", WINDOW, "mul.h2.q15.rnd.sat  g8, g6, g4", "mul.h2.q15.sat      g8, g6, g4"),
    Fault("wrong table", WINDOW, "cos(2 * pi * i / n)", "cos(2 * pi * i / (n - 1))"),
    Fault("wrong shift", WINDOW, "@3 * k + 4  sll.h2.sat  g6, g2, g12", "@3 * k + 4  sra.h2      g6, g2, g12"),
    Fault("stored over the neighbour", WINDOW, "addr(y) + 8", "addr(y) + 4", "legal"),
    Fault("last store out of place", WINDOW, "@1          sd  g8, [g13]", "@1          sd  g8, [g13 - 16]"),
    Fault("smaller for larger", PEAK, "            maxu.h2   h7, h6, g6", "            minu.h2   h7, h6, g6"),
    Fault(
        "smallest for largest so far", PEAK, "            maxu.h2   top, top, h7", "            minu.h2   top, top, h7"
    ),
    Fault("constant of the wrong sign", PEAK, "0xFFF0FFF0", "0x00100010"),
    Fault("word for a byte", CHECKSUM, "@8      crc32.byte  h9, h11", "@8      crc32.word  h9, h11"),
    Fault("remainder forgotten", CHECKSUM, "@10     crc32.byte  h9, h13", "@10     crc32.byte  h9, h12"),
    Fault("wrong fraction", SECTIONS, "let  down = 29", "let  down = 30"),
    Fault("state not kept", SECTIONS, "@8      sw   q0, [h18 + 20]", "@8      sw   q0, [h18 + 16]"),
    Fault("no halt", PLAIN, "    halt", "    mv g1, g11", "legal"),
    Fault(
        "two operations in one slot",
        PLAIN,
        "    li     back, 0",
        "    li     back, 0 ; li h14, 0 ; li h15, 0 ; li h16, 0 ; li h17, 0",
        "legal",
    ),
    Fault("misspelt operation", PLAIN, "dot.h2 g6", "dott.h2 g6", "legal"),
    Fault("jump to the wrong section", PLAIN, "count  g20, loop", "count  g20, start"),
]

UNSAFE = [
    Fault(
        "register written while a load is in flight",
        PLAIN,
        "@load + multiply            add",
        "@1 li g2, 0\n@load + multiply add",
        "interrupts",
    ),
]
"""Faults that only an interrupt shows."""
