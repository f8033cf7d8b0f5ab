"""From sources to kernels: bundles, stamps, operands, addresses, the interface, and the way back to the lines."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import attrs
import pytest

from vliwsim.description.corefile import evolve
from vliwsim.problems import CoreError, OptionError, SourceError
from vliwsim.program.assembler import assemble
from vliwsim.program.code import Address, Immediate, Mode, Register
from vliwsim.program.disassembly import disassemble
from vliwsim.program.encoding.decode import decode
from vliwsim.program.encoding.image import read_image
from vliwsim.program.kernel import Formula, Item, Kernel

from .sources import instructions, kernel, lines, operations, shipped, source

ENERGY = Path(__file__).parents[2] / "programs" / "energy" / "energy.vliw"


@pytest.fixture(scope="module")
def energy() -> Kernel:
    return assemble(ENERGY)


def check(text: str, expected: list[str], core: str = "pair7", slots: bool = False) -> None:
    """The bundles of ``text``, without those from the label ``last`` on."""
    built = kernel(text + "\nlast:\n@0 halt\n", core)
    assert [line for line in lines(built, slots) if not line.startswith("last@")] == expected


def test_energy(energy: Kernel) -> None:
    loads = "lw g2, [g10 then +8] if g20 on g.mem"
    other = "lw h2, [h10 then +8] if g20 on h.mem"
    count, products = "count g20, loop on g.flow", ("dot.h2 g6, g2, g2 on g.mul", "dot.h2 h6, h2, h2 on h.mul")
    full = f"{products[0]} ; {loads} ; {count} ; {products[1]} ; {other}"
    sums = "add g12, g12, g6 on g.sum", "add h12, h12, h6 on h.sum"
    assert lines(energy) == [
        f"start@0  li g12, 0 on g.sum ; {loads} ; li h12, 0 on h.sum ; {other}",
        f"start@1  {loads} ; {other}",
        f"start@2  {loads} ; {other}",
        f"start@3  {loads} ; {count} ; {other}",
        f"start@4  {full}",
        f"start@5  {full}",
        f"start@6  {full}",
        f"loop@0  {sums[0]} ; {products[0]} ; {loads} ; {count} ; {sums[1]} ; {products[1]} ; {other}",
        "finish@0  add g11, g12, h12 on g.sum ; halt on g.flow",
    ]


def test_energy_interface(energy: Kernel) -> None:
    assert energy.name == "energy"
    assert energy.cores_named == ("pair7",)
    assert energy.register_names == {"front": 12, "back": 36}
    told = [(i.kind, i.name, i.type, i.how, i.register, i.size and i.size.text) for i in energy.items]
    assert told == [
        ("given", "x", "i16", "at", 10, "n"),
        ("given", "odd", "i32", "in", 34, None),
        ("given", "trips", "i32", "in", 20, None),
        ("returns", "total", "i32", "in", 11, None),
    ]
    x, odd, trips, _ = energy.items
    assert x.over
    assert x.over.value({}) == 24
    assert odd.value
    assert odd.value.value({"addr(x)": 64}) == 68
    assert trips.value
    assert trips.value.value({"n": 40}) == 10
    assert energy.needs
    assert energy.needs.names == {"n"}
    assert energy.needs.value({"n": 8}) is True
    assert energy.needs.value({"n": 0}) is False
    assert energy.budget
    assert energy.budget.value({"n": 4096}) == 1033


def test_energy_map(energy: Kernel) -> None:
    sections = [(s.label, s.first, s.beats, s.place.line) for s in energy.map.sections]
    assert sections == [("start", 0, 7, 14), ("loop", 7, 1, 26), ("finish", 8, 1, 34)]
    assert energy.map.bundle_at[3:8] == (("start", 3), ("start", 4), ("start", 5), ("start", 6), ("loop", 0))
    assert [(p.line, p.column) for p in energy.map.instruction_places[7]] == [
        (32, 5),
        (30, 5),
        (27, 5),
        (29, 5),
        (33, 5),
        (31, 5),
        (28, 5),
    ]
    for bundle, places in zip(energy.program.bundles, energy.map.instruction_places, strict=True):
        for instruction, place in zip(bundle.instructions, places, strict=True):
            line = energy.text.splitlines()[place.line - 1]
            assert line[place.column - 1 :].startswith(instruction.operation.name)


def test_the_program_is_what_the_image_says(energy: Kernel) -> None:
    image = read_image(energy.image)
    assert decode(energy.core, energy.operations, image) == energy.program
    again = assemble("again.vliw", energy.core, text=disassemble(energy.program, "energy"))
    assert again.program == energy.program
    assert read_image(again.image).words == image.words


def test_the_same_bytes_every_time(energy: Kernel) -> None:
    assert assemble(ENERGY).image == energy.image


# Stamps


def test_any_order_and_repeated_stamps_and_gaps() -> None:
    one = "@0 add g1, g2, g3\n@1 mul g4, g1, g1\n@5 sub g6, g4, g1 ; lw h1, [h2]"
    other = "@5 sub g6, g4, g1\n@0 add g1, g2, g3\n@1 mul g4, g1, g1\n@5\n lw h1, [h2]"
    expected = [
        "start@0  add g1, g2, g3",
        "start@1  mul g4, g1, g1",
        "start@2  idle 3",
        "start@5  sub g6, g4, g1 ; lw h1, [h2]",
    ]
    check(one, expected)
    check(other, expected)


def test_idle_stretches_a_section() -> None:
    check("@0 add g1, g2, g3\n@3 idle", ["start@0  add g1, g2, g3", "start@1  idle 3"])
    check("@2 idle", ["start@0  idle 3"])
    check("@0 idle ; add g1, g2, g3", ["start@0  add g1, g2, g3"])
    check("@2 add g1, g2, g3", ["start@0  idle 2", "start@2  add g1, g2, g3"])


def test_stamps_follow_the_latencies() -> None:
    text = source(
        "let more = 2\n@0 lw g1, [g2] ; add g7, g7, g7\n@load mul g3, g1, g1\n@load + multiply add g4, g3, g3\n"
        "@max(load, more * branch) + latency(mul) add g5, g3, g3\n@more halt"
    )
    slower = {"latency.load": 6, "latency.operations.mul": 5}
    for changes, beats in (({}, [0, 2, 4, 7, 11]), (slower, [0, 2, 6, 9, 13])):
        core = evolve(shipped("pair7"), changes)
        built = assemble("follow.vliw", core, text=text, operations=operations(core.operations))
        code = [at for bundle, (_, at) in zip(built.program.bundles, built.map.bundle_at) if bundle.instructions]
        assert code == beats


def test_every_class_is_a_latency() -> None:
    names = sorted({o.operation_class for o in operations(shipped("pair7").operations).by_name.values()})
    built = kernel("".join(f"@0*{name} idle\n" for name in [*names, "update", "branch"]) + "@0 halt")
    assert len(built.program.bundles) == 1


def test_repeat_unrolls_and_nests() -> None:
    check(
        "repeat 2 as i\nrepeat 2 as j\n@4*i+j li g{4*i + j}, 10*i + j\nend\nend",
        ["start@0  li g0, 0", "start@1  li g1, 1", "start@2  idle 2", "start@4  li g4, 10", "start@5  li g5, 11"],
    )
    check(
        "@0 li g1, 1\nrepeat 2 as i\nli g{2 + i}, 5\n@i + 1 lw h1, [h2]\nend",
        ["start@0  li g1, 1 ; li g2, 5", "start@1  li g3, 5 ; lw h1, [h2]", "start@2  lw h1, [h2]"],
    )
    check("@0 li g1, 1\nrepeat 0 as i\n@i li g2, i\nend", ["start@0  li g1, 1"])
    check("repeat 2\n@0 add g1, g2, g3\nend", ["start@0  add g1, g2, g3 ; add g1, g2, g3"])


def test_let_and_name() -> None:
    text = (
        "kernel a\ncore pair7\nlet taps = 4\nlet bytes = taps * 2\nname sum = g7\nstart:\n"
        "@0 li sum, bytes\nlet more = bytes + load\nname other = h3\n@taps add other, other, more\n@taps halt\n"
    )
    built = kernel(text)
    assert lines(built, slots=False) == [
        "start@0  li g7, 8",
        "start@1  idle 3",
        "start@4  halt ; add h3, h3, 12",
    ]
    assert built.constants == {"taps": 4, "bytes": 8, "more": 12}
    assert built.register_names == {"sum": 7, "other": 27}


def test_labels_without_code_share_a_bundle() -> None:
    built = kernel("first:\nsecond: @0 jump first\n@1 halt\n")
    assert built.program.labels == {"start": 0, "first": 0, "second": 0}
    sections = [(s.label, s.first, s.beats) for s in built.map.sections]
    assert sections == [("start", 0, 0), ("first", 0, 0), ("second", 0, 2)]


def test_long_idle_runs_keep_their_beats() -> None:
    core = attrs.evolve(shipped("pair7"), words=attrs.evolve(shipped("pair7").words, bits=48))
    built = kernel("@0 li g1, 1\n@16000000 halt", core)
    at = [beat for _, beat in built.map.bundle_at]
    assert at[0] == 0
    assert at[-1] == 16_000_000
    assert sum(bundle.beats for bundle in built.program.bundles) == 16_000_001
    assert len(built.program.bundles) == len(built.map.bundle_at) == len(built.map.instruction_places)


# Operands


@pytest.mark.parametrize(
    ("text", "address"),
    [
        ("[g4]", Address(4, Mode.OFFSET, Immediate(0))),
        ("[g4 + 8]", Address(4, Mode.OFFSET, Immediate(8))),
        ("[g4+8]", Address(4, Mode.OFFSET, Immediate(8))),
        ("[g4 - 4]", Address(4, Mode.OFFSET, Immediate(2**32 - 4))),
        ("[g4 + 2*step - 4]", Address(4, Mode.OFFSET, Immediate(12))),
        ("[g4 - step + 2]", Address(4, Mode.OFFSET, Immediate(2**32 - 6))),
        ("[g4 + 0x80000000]", Address(4, Mode.OFFSET, Immediate(2**31))),
        ("[g4 + g5]", Address(4, Mode.OFFSET, Register(5))),
        ("[base + offset]", Address(6, Mode.OFFSET, Register(7))),
        ("[g4 then +8]", Address(4, Mode.AFTER, Immediate(8))),
        ("[g4 then -8]", Address(4, Mode.AFTER, Immediate(2**32 - 8))),
        ("[g4 then +g5]", Address(4, Mode.AFTER, Register(5))),
        ("[g4 then + step]", Address(4, Mode.AFTER, Immediate(8))),
        ("[+8 then g4]", Address(4, Mode.BEFORE, Immediate(8))),
        ("[-8 then g4]", Address(4, Mode.BEFORE, Immediate(2**32 - 8))),
        ("[+g5 then g4]", Address(4, Mode.BEFORE, Register(5))),
        ("[g4 then +4 in ring 64]", Address(4, Mode.AFTER, Immediate(4), 64)),
        ("[g4 then -4 in ring 8*step]", Address(4, Mode.AFTER, Immediate(2**32 - 4), 64)),
        ("[g4 then +g5 in ring 256]", Address(4, Mode.AFTER, Register(5), 256)),
        ("[g{2 + 2} then +4]", Address(4, Mode.AFTER, Immediate(4))),
    ],
)
def test_addresses(text: str, address: Address) -> None:
    built = kernel(f"let step = 8\nname base = g6\nname offset = g7\n@0 lw g1, {text}\n@1 halt")
    assert instructions(built)[0].places == (Register(1), address)


@pytest.mark.parametrize(
    ("text", "core", "place"),
    [
        ("add g1, g2, 5", "pair7", Immediate(5)),
        ("add g1, g2, -5", "pair7", Immediate(2**32 - 5)),
        ("add g1, g2, 0xffff_ffff", "pair7", Immediate(2**32 - 1)),
        ("add g1, g2, 0b101", "pair7", Immediate(5)),
        ("add g1, g2, trips - 1", "pair7", Immediate(9)),
        ("add g1, g2, (3 if trips > 5 else 4)", "pair7", Immediate(3)),
        ("add g1, g2, load", "pair7", Immediate(4)),
        ("li g1, 0xffff0000", "pair7", Immediate(0xFFFF0000)),
        ("li g1, -1", "pair7", Immediate(2**32 - 1)),
        ("fieldu g1, g2, 3, 31", "pair7", Immediate(31)),
        ("mul.half g1, g2.lo, -1", "pair7", Immediate(0xFFFF)),
        ("mul.half g1, g2.lo, 0xffff", "pair7", Immediate(0xFFFF)),
        ("mul.half g1, g2.lo, g3.hi", "pair7", Register(3, 1)),
        ("mul.half g1, g2.hi, third.lo", "pair7", Register(3, 0)),
        ("dot.h2 g1, g2, 0x0001ffff", "pair7", Immediate(0x1FFFF)),
        ("fadd.s g1, g2, 1.5", "float3", Immediate(0x3FC00000)),
        ("fadd.s g1, g2, -1", "float3", Immediate(0xBF800000)),
        ("fadd.s g1, g2, 1 / 3", "float3", Immediate(0x3EAAAAAB)),
        ("fadd.s g1, g2, 0x7f800000", "float3", Immediate(0x7F800000)),
    ],
)
def test_immediates(text: str, core: str, place: Immediate | Register) -> None:
    built = kernel(f"let trips = 10\nname third = g3\n@0 {text}\n@1 halt", core)
    assert instructions(built)[0].places[-1] == place


def test_immediate_sources_in_any_place() -> None:
    built = kernel("@0 sub g1, 100, g2 ; sw 7, [g3 + g4] ; beq 0, g5, g6\n@1 halt")
    assert [i.places[0 if k else 1] for k, i in enumerate(instructions(built)[:3])] == [
        Immediate(100),
        Immediate(7),
        Immediate(0),
    ]


def test_an_f32_immediate_must_be_finite() -> None:
    with pytest.raises(SourceError, match="immediate-range"):
        kernel("@0 fadd.s g1, g2, 1e39\n@1 halt", "float3")


def test_targets() -> None:
    built = kernel("@0 jump last\n@4 jump g3 if not g20\n@5 call g7, last if h16\nlast:\n@0 halt")
    jump, back, call, _ = instructions(built)
    assert jump.places == (Immediate(built.program.labels["last"]),)
    assert back.places == (Register(3),)
    assert back.guard
    assert (back.guard.register, back.guard.negated) == (20, True)
    assert call.places == (Register(7), Immediate(built.program.labels["last"]))
    assert call.guard
    assert (call.guard.register, call.guard.negated) == (40, False)


def test_labels_behind_to_are_the_only_targets() -> None:
    built = kernel("@0 jump g3 to last, middle if g20 on g.flow\nmiddle:\n@0 idle\nlast:\n@0 halt")
    jump, _ = instructions(built)
    labels = built.program.labels
    assert jump.targets == (Immediate(labels["middle"]), Immediate(labels["last"]))
    assert jump.guard
    assert lines(built)[0] == "start@0  jump g3 if g20 to middle, last on g.flow"


def test_a_label_is_a_number_where_one_of_32_bits_may_stand() -> None:
    built = kernel("@0 li g3, far ; add h3, h4, far ; sw h5, [h6]\n@1 idle\nfar:\n@0 halt\nlet n = 3\nn:\n@0 li g3, n")
    li, add, _, _, number = instructions(built)
    assert li.places[1] == add.places[2] == Immediate(built.program.labels["far"])
    assert number.places[1] == Immediate(3)  # the let name, as before


def test_the_address_of_a_label_far_away_is_its_final_one() -> None:
    """An address that no longer fits short moves what is behind it."""
    many = "\n".join(f"@{k} li g4, {1 << 30} ; li h4, {1 << 30} ; add g5, g6, {1 << 30}" for k in range(3000))
    built = kernel(f"@0 li g3, far ; mul.half h5, h6.lo, h6.hi\nnear:\n{many}\nfar:\n@0 halt")
    assert built.program.labels["far"] > 1 << 16
    assert instructions(built)[0].places[1] == Immediate(built.program.labels["far"])


# Interface


def formulas(item: Item) -> tuple[Formula | None, ...]:
    return item.size, item.value, item.over, item.align, item.bank, item.within


def test_interface_lines() -> None:
    built = kernel(
        "kernel a\ncore pair7, lone4\nlet taps = 8\n"
        "given   x     : q15[n + taps - 1] at g1 over 4 * taps align 8 bank 2   # a comment\n"
        "given   gain  : q15 in g2\n"
        "given   limit : i32 = min(n, 100) - load in g9\n"
        "changes state : q31[4] at g3 within 2 lsb\n"
        "changes peak  : u16 in g4\n"
        "returns y     : f32[n] at g5 within 1\n"
        "table   taps1 : q15[taps] = 0.5 - 0.5 * cos(2 * pi * i / taps) at g6\n"
        'table   taps2 : i8[taps] from "taps#1.npy"\n'
        "table   taps3 : i8[taps] from sub/taps.npy at g8\n"
        "scratch work  : i32[2 * n] at g7 align 16\n"
        "needs   n > 0 and len(x) >= 8\n"
        "start:\n@0 halt\n"
    )
    told = [
        (i.kind, i.name, i.type, i.how, i.register, i.file, *[f.text for f in formulas(i) if f]) for i in built.items
    ]
    assert told == [
        ("given", "x", "q15", "at", 1, None, "n + taps - 1", "4 * taps", "8", "2"),
        ("given", "gain", "q15", "in", 2, None),
        ("given", "limit", "i32", "in", 9, None, "min(n, 100) - load"),
        ("changes", "state", "q31", "at", 3, None, "4", "2"),
        ("changes", "peak", "u16", "in", 4, None),
        ("returns", "y", "f32", "at", 5, None, "n", "1"),
        ("table", "taps1", "q15", "at", 6, None, "taps", "0.5 - 0.5 * cos(2 * pi * i / taps)"),
        ("table", "taps2", "i8", "at", None, "taps#1.npy", "taps"),
        ("table", "taps3", "i8", "at", 8, "sub/taps.npy", "taps"),
        ("scratch", "work", "i32", "at", 7, None, "2 * n", "16"),
    ]
    table = built.items[6].value
    assert table
    assert [table.value({"i": i}) for i in (0, 4)] == [0.0, 1.0]
    limit = built.items[2].value
    assert limit
    assert limit.value({"n": 300}) == 96
    assert built.cores_named == ("pair7", "lone4")


def test_a_returned_scalar_may_share_a_given_register() -> None:
    kernel("kernel a\ncore pair7\ngiven n : i32 in g3\nreturns y : i32 in g3\nneeds n > 0\nstart:\n@0 halt\n")


# Files and cores


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    for path in (tmp_path / "absent.vliw", tmp_path, "a\0b"):
        with pytest.raises(OptionError):
            assemble(path)
    bad = tmp_path / "bad.vliw"
    bad.write_bytes(b"kernel a\ncore \xff\n")
    with pytest.raises(OptionError, match=r"bad.vliw:2:1  not-text"):
        assemble(bad)
    bad.write_bytes(b"\0" * 1000)
    with pytest.raises(SourceError):
        assemble(bad)


def test_windows_line_ends_and_a_byte_order_mark(tmp_path: Path, energy: Kernel) -> None:
    path = tmp_path / "energy.vliw"
    path.write_bytes(b"\xef\xbb\xbf" + ENERGY.read_bytes().replace(b"\n", b"\r\n"))
    assert assemble(path).image == energy.image


def test_the_first_core_named_is_taken_and_changes_made() -> None:
    text = "kernel a\ncore lone4, pair7\nstart:\n@load halt\n"
    assert assemble("a.vliw", text=text).core.name == "lone4"
    changed = assemble("a.vliw", text=text, changes={"latency.load": 9})
    assert changed.map.bundle_at[-1] == ("start", 9)
    changed = assemble("a.vliw", shipped("pair7"), text=text, changes=["latency.load=8"])
    assert changed.map.bundle_at[-1] == ("start", 8)
    assert not changed.notes


def test_an_unknown_core_is_told_at_its_name() -> None:
    with pytest.raises(SourceError, match=r"a.vliw:2:6  unknown-core") as caught:
        assemble("a.vliw", text="kernel a\ncore piar7\nstart:\n@0 halt\n")
    assert caught.value.problems[0].remedy == "pair7"
    with pytest.raises(CoreError):
        assemble("a.vliw", text="kernel a\ncore pair7\nstart:\n@0 halt\n", changes=["latency.load=-1"])


def test_a_core_file_beside_the_source(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('name = "mine"\nbase = "pair7"\nlatency.load = 6\n', encoding="utf-8")
    path = tmp_path / "a.vliw"
    path.write_text("kernel a\ncore mine.toml\nstart:\n@load halt\n", encoding="utf-8")
    built = assemble(path)
    assert built.map.bundle_at[-1] == ("start", 6)
    assert not built.notes
    path.write_text("kernel a\ncore ../mine.toml\nstart:\n@load halt\n", encoding="utf-8")
    with pytest.raises(SourceError, match=r"a.vliw:2:6  bad-name"):
        assemble(path)


def python(code: str, **environment: str) -> str:
    """What a fresh Python prints."""
    run = subprocess.run(
        [sys.executable, "-c", code], env={**os.environ, **environment}, capture_output=True, text=True, check=True
    )
    return run.stdout


def test_the_same_bytes_and_words_whatever_the_hash_seed() -> None:
    code = (
        "import hashlib\nfrom vliwsim.program.assembler import assemble\nfrom vliwsim.problems import VliwsimError\n"
        f"print(hashlib.sha256(assemble({str(ENERGY)!r}).image).hexdigest())\n"
        f"text = open({str(ENERGY)!r}).read().replace('g20', 'g2o').replace('lw', 'lww').replace('n >=', 'm >=')\n"
        "try:\n    assemble('e.vliw', text=text)\nexcept VliwsimError as error:\n    print(error)\n"
    )
    one, other = (python(code, PYTHONHASHSEED=seed) for seed in ("1", "2"))
    assert "unknown-name" in one
    assert one == other


def test_assembling_loads_no_heavy_library() -> None:
    code = (
        f"import sys\nfrom vliwsim.program.assembler import assemble\nassemble({str(ENERGY)!r})\n"
        "print([m for m in ('networkx', 'numpy', 'scipy', 'rich', 'hypothesis') if m in sys.modules])"
    )
    assert python(code).strip() == "[]"


def test_another_core_than_those_named_is_noted() -> None:
    built = kernel("kernel a\ncore lone4\nstart:\n@0 halt\n")
    assert [note.name for note in built.notes] == ["other-core"]


def test_a_bundle_may_be_too_long() -> None:
    with pytest.raises(SourceError, match="bundle-too-long"):
        kernel("@0 " + "halt ; " * 70, allow_illegal=True)


def test_lines_are_counted_as_an_editor_counts_them(tmp_path: Path) -> None:
    """A form feed or a Unicode line separator ends no line, neither in the code nor in a comment."""
    path = tmp_path / "feed.vliw"
    for odd in "\x0b\x0c\x1c\x85\u2028\u2029":
        text = f"kernel feed\ncore pair7\n# one{odd}add\nstart:\n@0 add{odd}g1, g2, g3\n@1 plus\n"
        path.write_text(text, encoding="utf-8")
        with pytest.raises(SourceError) as caught:
            assemble(path)
        assert [(p.name, p.place.line) for p in caught.value.problems if p.place] == [("unknown-operation", 6)]
