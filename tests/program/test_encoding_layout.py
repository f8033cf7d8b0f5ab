"""The layout: widths from the core, positions from the widths, and a picture that tells both."""

from __future__ import annotations

import pytest

from vliwsim.description.corefile import load_core
from vliwsim.description.operations import Kind, OperationSet
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations
from vliwsim.problems import CoreError, OperationError
from vliwsim.program.encoding.layout import layout, longest_idle
from vliwsim.program.encoding.picture import picture

from .encoding_samples import AD, BY_NAME, CORES, OPERATIONS, PLAIN, C, R, S, core, o, operation


def test_fields_stand_one_behind_the_other() -> None:
    for on in CORES:
        of = layout(on, OPERATIONS)
        for shape in map(of.format_of, OPERATIONS.by_name.values()):
            at = 0
            for field in (*of.header, *shape.fields):
                assert field.low == at
                at = field.end
            assert at <= on.words.bits


def test_widths_come_from_the_core() -> None:
    of = layout(PLAIN, OPERATIONS)
    assert [(f.name, f.width) for f in of.header] == [
        ("last", 1),
        ("extended", 1),
        ("slot", 2),
        ("operation", 10),
        ("guard", 7),  # 97 codes for 48 registers
    ]
    assert [(f.name, f.width) for f in of.format_of(BY_NAME["lw"]).fields] == [
        ("d", 6),
        ("mode", 2),
        ("base", 6),
        ("step", 6),
        ("immediate", 23),
    ]
    wide = layout(core(128, registers=(16, 16, 16, 16), slots=16), OPERATIONS)
    assert [f.width for f in wide.header] == [1, 1, 4, 10, 8]
    # 64 registers: a result has 6 bits, a source 7, because the 65th code says immediate.
    assert [(f.name, f.width) for f in wide.format_of(BY_NAME["add"]).fields[:3]] == [("d", 6), ("a", 7), ("b", 7)]
    one = layout(core(48, registers=(8,), slots=1), OPERATIONS)
    assert one.slot.width == 0


def test_a_constant_leaves_its_neighbours_no_immediate() -> None:
    fields = layout(core(128, registers=(16, 16, 16, 16)), OPERATIONS).format_of(BY_NAME["take"]).fields
    assert [(f.name, f.width) for f in fields] == [("d", 6), ("a", 6), ("immediate", 32)]


def test_the_layout_does_not_depend_on_the_other_operations() -> None:
    few = OperationSet({"add": BY_NAME["add"]}, {1: BY_NAME["add"]}, "")
    assert (
        layout(PLAIN, few).format_of(BY_NAME["add"]).fields
        == layout(PLAIN, OPERATIONS).format_of(BY_NAME["add"]).fields
    )


def test_the_longest_idle_run() -> None:
    assert longest_idle(PLAIN) == layout(PLAIN, OPERATIONS).beats.mask == 2**24 - 1
    assert longest_idle(core(32, registers=(4,), slots=1)) == 2**20 - 1


def test_words_too_narrow_name_the_widest_operation() -> None:
    with pytest.raises(CoreError) as caught:
        layout(core(40), OPERATIONS).check()
    (one,) = caught.value.problems
    assert (one.name, one.key) == ("words-too-narrow", "words.bits")
    assert one.found == "words.bits = 40, and lw needs 46 bits"
    assert one.remedy == "words.bits = 48, or fewer registers"
    layout(core(48), OPERATIONS).check()
    for bits in (24, 0, 61):
        with pytest.raises(CoreError, match="multiple of 8"):
            layout(core(bits), OPERATIONS)


def test_two_constants_are_one_too_many() -> None:
    bad = operation("bad", 5, Kind.COMPUTE, o("d", R), o("n", C), o("m", C))
    with pytest.raises(OperationError, match="2 constant operands of more than 8 bits"):
        layout(PLAIN, OperationSet({"bad": bad}, {5: bad}, "")).check()


def test_the_picture_of_one_operation() -> None:
    text = picture(layout(PLAIN, OPERATIONS), BY_NAME["lw"])
    assert text.splitlines()[:7] == [
        "sample: words of 64 bits; a bundle may straddle fetch groups of 8 words",
        "",
        "lw, code 0x82",
        "  first bit  0      1          2      4           14      21   27     29     35      41",
        "            ┌──────┬──────────┬──────┬───────────┬───────┬────┬──────┬──────┬───────┬───────────┐",
        "            │ last │ extended │ slot │ operation │ guard │ d  │ mode │ base │ step* │ immediate │",
        "            └──────┴──────────┴──────┴───────────┴───────┴────┴──────┴──────┴───────┴───────────┘",
    ]
    assert text.splitlines()[7].split() == ["bits", "1", "1", "2", "10", "7", "6", "2", "6", "6", "23"]
    assert "  registers  g0 is 0, h0 is 24; where a star stands, 48 says: the immediate" in text


def test_the_picture_of_a_core_names_every_operation_once() -> None:
    for on in CORES:
        text = picture(layout(on, OPERATIONS))
        words = text.split()
        assert all(words.count(name) == 1 for name in BY_NAME if name not in ("take",))
        assert "  add fadd" in text.splitlines() or "  add mac fadd" in text.splitlines()


def test_an_address_beside_a_constant_has_a_register_step() -> None:
    odd = operation("odd", 6, Kind.LOAD, o("d", R), o("at", AD), o("n", C), o("s", S))
    shape = layout(core(128), OperationSet({"odd": odd}, {6: odd}, "")).format_of(odd)
    assert [p.immediate for p in shape.parts] == [False, False, True, False]


@pytest.mark.parametrize("name", sorted(path.stem for path in (isa_folder() / "cores").glob("*.toml")))
def test_every_operation_fits_every_shipped_core(name: str) -> None:
    on = load_core(name)
    of = layout(on, load_operations(on.operations))
    of.check()
    for shape in of.formats.values():
        if shape.ring_immediate is not None:
            assert shape.ring_immediate.width >= 5, "steps of a ring to 15 bytes need no extension word"
            assert shape.immediate.width >= 10, "offsets to 511 bytes need no extension word"
    assert len(picture(of).splitlines()) > len(of.header)
