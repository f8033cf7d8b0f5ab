"""Code as text: one instruction for messages, whole programs as sources."""

from __future__ import annotations

import struct

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from vliwsim.description.core import Core
from vliwsim.description.corefile import load_core
from vliwsim.description.operations import OperationSet
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations
from vliwsim.program.assembler import assemble
from vliwsim.program.code import Address, Guard, Immediate, Instruction, Label, Mode, Register
from vliwsim.program.disassembly import address_text, disassemble, immediate_text, text_of
from vliwsim.program.encoding.decode import decode
from vliwsim.program.encoding.encode import encode
from vliwsim.program.encoding.image import Image, read_image
from vliwsim.program.encoding.layout import longest_idle

from .encoding_samples import BY_NAME, CORES, HALT, OPERATIONS, PLAIN, R, S, add, core, jump, o, programs

SHIPPED = sorted(path.stem for path in (isa_folder() / "cores").glob("*.toml"))


@pytest.mark.parametrize(
    ("address", "text"),
    [
        (Address(10, Mode.OFFSET, Immediate(0)), "[g10]"),
        (Address(10, Mode.OFFSET, Immediate(8)), "[g10 + 8]"),
        (Address(10, Mode.OFFSET, Immediate(2**32 - 4)), "[g10 - 4]"),
        (Address(10, Mode.OFFSET, Register(25)), "[g10 + h1]"),
        (Address(10, Mode.AFTER, Immediate(8)), "[g10 then +8]"),
        (Address(10, Mode.AFTER, Immediate(2**32 - 8)), "[g10 then -8]"),
        (Address(10, Mode.AFTER, Register(0)), "[g10 then +g0]"),
        (Address(10, Mode.AFTER, Immediate(4), 64), "[g10 then +4 in ring 64]"),
        (Address(10, Mode.BEFORE, Immediate(8)), "[+8 then g10]"),
        (Address(10, Mode.BEFORE, Immediate(2**31)), "[-2147483648 then g10]"),
        (Address(10, Mode.BEFORE, Register(3)), "[+g3 then g10]"),
    ],
)
def test_addresses(address: Address, text: str) -> None:
    assert address_text(PLAIN, address) == text


def test_instructions() -> None:
    mul = Instruction(BY_NAME["mul.half"], 1, (Register(1), Register(4, 1), Register(30, 0)), Guard(30, True))
    assert text_of(PLAIN, mul) == "mul.half g1, g4.hi, h6.lo if not h6"
    assert text_of(PLAIN, mul, slot=True) == "mul.half g1, g4.hi, h6.lo if not h6 on h.u1"
    assert text_of(PLAIN, add(0, 1, 2**32 - 5, guard=Guard(3))) == "add g0, g1, -5 if g3"
    assert text_of(PLAIN, HALT) == "halt"
    assert text_of(PLAIN, jump("loop")) == "jump loop"
    to = Instruction(BY_NAME["count"], 0, (Register(2), Immediate(16)))
    assert text_of(PLAIN, to, {"a": 0, "loop": 16}) == "count g2, loop"
    assert text_of(PLAIN, to) == "count g2, 0x10"


@pytest.mark.parametrize(
    ("value", "type_", "half", "text"),
    [
        (0xFFFF, "i16", True, "-1"),
        (0xFFFF, "u16", True, "65535"),
        (0x00020001, "i16x2", False, "0x20001"),
        (0x80000000, "i32", False, "-2147483648"),
        (0x80000000, "u32", False, "0x80000000"),
        (0x3FC00000, "f32", False, "1.5"),
        (0x3DCCCCCD, "f32", False, "0.1"),
        (0x80000000, "f32", False, "-0.0"),
        (0x7F7FFFFF, "f32", False, "3.4028235e+38"),
        (0x00000001, "f32", False, "1e-45"),
        (0x42C80000, "f32", False, "100.0"),
        (0x7F800000, "f32", False, "0x7f800000"),
    ],
)
def test_immediates(value: int, type_: str, half: bool, text: str) -> None:
    assert immediate_text(value, o("a", S, type_, half)) == text


@given(st.integers(0, 2**32 - 1))
def test_floats_come_back(bits: int) -> None:
    text = immediate_text(bits, o("a", R, "f32"))
    assert (
        text == f"{bits:#010x}"
        if bits >> 23 & 255 == 255
        else struct.pack("<f", float(text)) == bits.to_bytes(4, "little")
    )


def text_of_program(drafts: list, labels: dict[str, int]) -> list[str]:
    return disassemble(decode(PLAIN, OPERATIONS, encode(PLAIN, OPERATIONS, drafts, labels)), "sensor").splitlines()


def test_a_program() -> None:
    drafts = [[add(0, 1, 2, 2), add(1, 1, 2)], 3, [jump("loop")], 2, [jump("start")], 4, [HALT], 1]
    assert text_of_program(drafts, {"start": 0, "loop": 4, "tail": 5, "last": 5}) == [
        "kernel sensor",
        "core   sample",
        "",
        "start:",
        "@0   add g1, g1, 2 on g.u0",
        "     add g0, g1, 2 on g.u2",
        "@4   jump loop on g.u0",
        "@6   idle",
        "",
        "loop:",
        "@0   jump start on g.u0",
        "",
        "tail:",
        "last:",
        "@4   halt on g.u0",
        "@5   idle",
    ]


def test_labels_are_made_up_where_they_are_needed() -> None:
    target = Instruction(BY_NAME["jump"], 0, (Immediate(16),))
    assert text_of_program([[HALT], [target], 3, 4, [HALT]], {"place0": 4}) == [
        "kernel sensor",
        "core   sample",
        "",
        "place1:",
        "@0   halt on g.u0",
        "@1   jump place2 on g.u0",
        "",
        "place2:",
        "@2   idle",
        "",
        "place3:",
        "@3   idle",
        "",
        "place0:",
        "@0   halt on g.u0",
    ]


def test_a_full_idle_word_needs_no_label_behind_it() -> None:
    on = core(32, registers=(4,), slots=1)
    full = longest_idle(on)
    program = decode(on, OPERATIONS, encode(on, OPERATIONS, [2 * full + 3, [Instruction(BY_NAME["halt"], 0, ())]], {}))
    assert disassemble(program).splitlines()[2:] == ["", "place0:", f"@{2 * full + 3} halt on g.u0"]


def test_labels_of_a_message_may_be_absent() -> None:
    assert text_of(PLAIN, Instruction(BY_NAME["jump"], 0, (Label("far"),)), {}) == "jump far"


def assembled(on: Core, text: str, of: OperationSet = OPERATIONS) -> Image:
    return read_image(assemble("again.vliw", on, text=text, operations=of, allow_illegal=True).image)


def check_back(on: Core, of: OperationSet, drafts: list, labels: dict[str, int]) -> None:
    """Encoding, decoding, disassembling and assembling again gives the same words, and then the same image."""
    operations = [i for d in drafts if not isinstance(d, int) for i in d]
    assume(not any(infinite(i) for i in operations))
    image = encode(on, of, drafts, labels)
    text = disassemble(decode(on, of, image))
    once = assembled(on, text, of)
    assert once.words == image.words
    assert once.targets == image.targets
    assert labels.keys() <= once.labels.keys()
    # What an assembler has made comes back whole, labels included.
    assert disassemble(decode(on, of, once)) == text
    assert assembled(on, text, of) == once


@pytest.mark.parametrize("on", CORES, ids=lambda c: f"{c.words.bits}-{c.words.straddle}")
@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_a_disassembled_program_assembles_to_the_same_words(on: Core, data: st.DataObject) -> None:
    check_back(on, OPERATIONS, *data.draw(programs(on)))


@pytest.mark.parametrize("name", SHIPPED)
@settings(max_examples=40, deadline=None)
@given(data=st.data())
def test_so_it_does_on_every_shipped_core(name: str, data: st.DataObject) -> None:
    on = load_core(name)
    of = load_operations(on.operations)
    check_back(on, of, *data.draw(programs(on, of)))


def infinite(instruction: Instruction) -> bool:
    """Whether an immediate is an infinity or not a number, which no decimal number can say."""
    return any(
        operand.type == "f32" and isinstance(place, Immediate) and place.value >> 23 & 255 == 255
        for operand, place in zip(instruction.operation.operands, instruction.places)
    )


def test_a_strangers_labels_are_left_out_where_the_language_has_no_room_for_them() -> None:
    words = ("given", "idle", "if", "ring", "g3", "let")
    image = encode(PLAIN, OPERATIONS, [[HALT], [HALT]], dict.fromkeys(words, 1))
    text = disassemble(decode(PLAIN, OPERATIONS, image))
    assert [line for line in text.splitlines() if line.endswith(":")] == ["place0:"]
    assert assembled(PLAIN, text).words == image.words


def test_very_long_idle_runs_are_cut_into_sections() -> None:
    image = encode(PLAIN, OPERATIONS, [3 * longest_idle(PLAIN), [HALT]], {})
    text = disassemble(decode(PLAIN, OPERATIONS, image))
    assert assembled(PLAIN, text).words == image.words
