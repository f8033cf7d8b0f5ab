"""Encoder and decoder are inverse to each other, and the decoder takes nothing else."""

from __future__ import annotations

import attrs
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vliwsim.description.core import Core
from vliwsim.problems import ImageError, Place
from vliwsim.program.code import Address, Guard, Immediate, Instruction, Label, Mode, Program, Register
from vliwsim.program.encoding.decode import decode
from vliwsim.program.encoding.encode import encode
from vliwsim.program.encoding.image import Image
from vliwsim.program.encoding.layout import layout

from .encoding_samples import BY_NAME, CORES, HALT, OPERATIONS, PLAIN, add, core, jump, programs


def resolved(instruction: Instruction, labels: dict[str, int]) -> Instruction:
    """The instruction with labels replaced by addresses, targets in their order."""
    places = tuple(Immediate(labels[p.name]) if isinstance(p, Label) else p for p in instruction.places)
    named = sorted({labels[target.name] for target in instruction.targets if isinstance(target, Label)})
    return instruction._replace(places=places, targets=tuple(map(Immediate, named)))


def again(on: Core, program: Program) -> Image:
    """The encoding of a decoded program."""
    drafts = [list(b.instructions) if b.instructions else b.beats for b in program.bundles]
    at = {bundle.address: index for index, bundle in enumerate(program.bundles)}
    return encode(on, OPERATIONS, drafts, {name: at[address] for name, address in program.labels.items()})


@pytest.mark.parametrize("on", CORES, ids=lambda c: f"{c.words.bits}-{c.words.straddle}")
@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_decoding_gives_back_what_was_encoded(on: Core, data: st.DataObject) -> None:
    drafts, labels = data.draw(programs(on))
    image = encode(on, OPERATIONS, drafts, labels)
    program = decode(on, OPERATIONS, image)
    position = 0
    for draft, index in zip(drafts, image.draft_bundles, strict=True):
        bundle = program.bundles[index]
        assert bundle.position == position
        if isinstance(draft, int):
            assert bundle.instructions == ()
            position += draft
        else:
            wanted = sorted(draft, key=lambda i: i.slot)
            assert list(bundle.instructions) == [resolved(i, image.labels) for i in wanted]
            position += 1
    for name, draft_index in labels.items():
        assert image.labels[name] == program.bundles[image.draft_bundles[draft_index]].address
    assert again(on, program) == attrs.evolve(image, draft_bundles=())


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_a_changed_word_is_refused_or_means_something_else(data: st.DataObject) -> None:
    on = data.draw(st.sampled_from(CORES))
    drafts, labels = data.draw(programs(on))
    image = encode(on, OPERATIONS, drafts, labels)
    words = list(image.words)
    words[data.draw(st.integers(0, len(words) - 1))] ^= 1 << data.draw(st.integers(0, on.words.bits - 1))
    changed = attrs.evolve(image, words=tuple(words))
    try:
        program = decode(on, OPERATIONS, changed)
    except ImageError:
        return
    assert program != decode(on, OPERATIONS, image)
    assert again(on, program).words == changed.words


@settings(max_examples=200, deadline=None)
@given(words=st.lists(st.integers(0, 2**64 - 1), min_size=1, max_size=6))
def test_random_words_never_break_the_decoder(words: list[int]) -> None:
    try:
        program = decode(PLAIN, OPERATIONS, Image("sample", 64, tuple(words)))
    except ImageError:
        return
    assert again(PLAIN, program).words == tuple(words)


def test_a_word_bit_by_bit() -> None:
    image = encode(PLAIN, OPERATIONS, [[add(5, 6, 2**32 - 3, slot=2, guard=Guard(30, True))], [HALT]], {})
    # last 1, extended 1, slot 2, operation 10, guard 7 bits; then d 6, a 6, b 6, and 25 of immediate.
    wanted = 1 | 2 << 2 | 1 << 4 | 62 << 14 | 5 << 21 | 6 << 27 | 48 << 33 | (2**25 - 3) << 39
    assert image.words == (wanted, 1 | 1023 << 4)


def test_a_long_immediate_takes_an_extension_word_and_a_short_one_does_not() -> None:
    widest = 2**24
    for value, words in ((widest - 1, 1), (widest, 2), (2**32 - widest, 1), (2**32 - widest - 1, 2), (2**31, 2)):
        image = encode(PLAIN, OPERATIONS, [[add(1, 2, value)]], {})
        assert len(image.words) == words, value
        assert decode(PLAIN, OPERATIONS, image).bundles[0].instructions[0].places[2] == Immediate(value)


def test_narrow_constants_have_fields_of_their_own() -> None:
    places = (Register(3), Register(4), Immediate(31), Immediate(2**32 - 64))
    image = encode(PLAIN, OPERATIONS, [[Instruction(BY_NAME["field"], 0, places)]], {})
    assert image.words == (1 | 71 << 4 | 3 << 21 | 4 << 27 | 31 << 33 | 64 << 38,)
    assert decode(PLAIN, OPERATIONS, image).bundles[0].instructions[0].places == places
    beside = (Register(3), Immediate(2**31), Immediate(0), Immediate(63))
    image = encode(PLAIN, OPERATIONS, [[Instruction(BY_NAME["field"], 0, beside)]], {})
    assert decode(PLAIN, OPERATIONS, image).bundles[0].instructions[0].places == beside


def test_half_immediates_are_sixteen_bits() -> None:
    mul = BY_NAME["mul.half"]
    for value in (0, 1, 0x7FFF, 0x8000, 0xFFFF):
        places = (Register(0), Register(3, 1), Immediate(value))
        for on in (PLAIN, core(48)):
            image = encode(on, OPERATIONS, [[Instruction(mul, 0, places)]], {})
            assert decode(on, OPERATIONS, image).bundles[0].instructions[0].places == places


def test_idle_runs_are_words_and_split_where_the_count_is_full() -> None:
    most = layout(PLAIN, OPERATIONS).beats.mask
    image = encode(PLAIN, OPERATIONS, [7, 2 * most + 5, [HALT]], {"end": 2})
    program = decode(PLAIN, OPERATIONS, image)
    assert [b.beats for b in program.bundles] == [7, most, most, 5, 1]
    assert image.draft_bundles == (0, 1, 4)
    assert program.bundles[-1].position == 2 * most + 12
    assert image.labels == {"end": 4 * 8}


def test_padding_keeps_bundles_inside_fetch_groups() -> None:
    on = core(group=4, straddle=False)
    three = [add(k, k, k, slot=k) for k in range(3)]
    image = encode(on, OPERATIONS, [three, three, 2, [HALT]], {})
    program = decode(on, OPERATIONS, image)
    assert [b.address // 8 for b in program.bundles] == [0, 4, 7, 8]
    assert image.words[3] == 1
    assert program.code_bytes == 9 * 8
    assert not any(b.straddles for b in program.bundles)


def test_straddling_bundles_are_marked() -> None:
    on = core(group=4)
    three = [add(k, k, k, slot=k) for k in range(3)]
    program = decode(on, OPERATIONS, encode(on, OPERATIONS, [three, three, 1], {}))
    assert [b.straddles for b in program.bundles] == [False, True, False]
    assert program.code_bytes == 7 * 8


def test_branches_grow_only_as_far_as_they_must() -> None:
    on = core(48, 8, False, (8,), 2)  # header 18, beq 18 + 4 + 4 + 4: 18 bits of immediate; narrow words make it grow
    beq = Instruction(BY_NAME["beq"], 0, (Register(0), Register(1), Label("far")))
    reach = 2**17 // 6
    for filler, words in ((reach - 9, 1), (reach + 9, 2)):
        image = encode(on, OPERATIONS, [[beq], *[[add(1, 1, 1)]] * filler, [HALT]], {"far": filler + 1})
        assert decode(on, OPERATIONS, image).bundles[0].words == words


def test_illegal_bundles_are_encoded_all_the_same() -> None:
    crowd = [add(k % 48, 47, 1, slot=k % 2) for k in range(64)]
    program = decode(PLAIN, OPERATIONS, encode(PLAIN, OPERATIONS, [crowd], {}))
    assert [i.slot for i in program.bundles[0].instructions] == [0] * 32 + [1] * 32


def refused(drafts: list, labels: dict[str, int], on: Core = PLAIN) -> list[str]:
    with pytest.raises(ImageError) as caught:
        encode(on, OPERATIONS, drafts, labels)
    return [p.name for p in caught.value.problems]


def test_what_no_word_can_say_is_refused_with_all_complaints() -> None:
    add_, lw, ld = BY_NAME["add"], BY_NAME["lw"], BY_NAME["ld"]
    zero = Register(0)
    bad = [
        Instruction(add_, 9, (zero, zero, zero)),
        Instruction(add_, 0, (zero, zero)),
        Instruction(add_, 0, (Register(48), zero, zero)),
        Instruction(add_, 0, (zero, Immediate(1), Immediate(1))),
        Instruction(add_, 0, (Immediate(1), zero, zero)),
        Instruction(add_, 0, (zero, zero, Immediate(2**32))),
        Instruction(add_, 0, (zero, zero, Immediate(-1))),
        Instruction(add_, 0, (zero, Register(1, 0), zero)),
        Instruction(add_, 0, (zero, zero, Address(0, Mode.OFFSET, zero))),
        Instruction(add_, 0, (zero, zero, zero), Guard(48)),
        Instruction(lw, 0, (zero, zero)),
        Instruction(lw, 0, (zero, Address(0, Mode.BEFORE, zero, 8))),
        Instruction(lw, 0, (zero, Address(0, Mode.AFTER, zero, 12))),
        Instruction(lw, 0, (zero, Address(99, Mode.AFTER, zero))),
        Instruction(ld, 0, (Register(3), Address(0, Mode.OFFSET, zero))),
        Instruction(BY_NAME["take"], 0, (zero, zero, zero)),
        Instruction(BY_NAME["mul.half"], 0, (zero, zero, Register(1, 1))),
        Instruction(BY_NAME["field"], 0, (zero, zero, Immediate(32), Immediate(0))),
        Instruction(BY_NAME["field"], 0, (zero, zero, Immediate(0), Immediate(2**32 - 65))),
        Instruction(BY_NAME["field"], 0, (zero, zero, zero, Immediate(0))),
        Instruction(BY_NAME["wide"], 0, (zero, Immediate(2**20))),
        jump("nowhere"),
    ]
    assert refused([bad], {}) == ["bad-place"] * len(bad)
    assert refused([[]], {"x": 1}) == ["bundle-too-long", "no-code", "no-label"]
    assert refused([[HALT] * 65, 0, [HALT]], {}) == ["bundle-too-long", "bad-place"]
    assert refused([[add(k, k, 2**31, slot=k) for k in range(3)]], {}, core(group=4, straddle=False)) == [
        "bundle-too-long"
    ]


def complaints(words: list[int], on: Core = PLAIN, labels: dict[str, int] | None = None) -> list[str]:
    with pytest.raises(ImageError) as caught:
        decode(on, OPERATIONS, Image("sample", on.words.bits, tuple(words), labels or {}))
    return [f"{p.name}: {p.found}" for p in caught.value.problems]


# Field positions on the plain core: slot 2, operation 4, guard 14, first operand 21, then 27, 33; add's immediate 39.
ADD = 1 | 1 << 4
LW = 1 | 130 << 4  # d 21, mode 27, base 29, step 35, immediate 41, of which a ring takes 5 bits


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ([0], ["bad-word: word 0 (byte 0): operation 0 in 0x0, which is no idle word"]),
        ([1 | 1 << 14 | 1 << 2], ["bad-word: word 0 (byte 0): operation 0 in 0x4005, which is no idle word"]),
        ([1 | 1 << 38], ["bad-word: word 0 (byte 0): operation 0 in 0x4000000001, which is no idle word"]),
        ([1 | 900 << 4], ["bad-word: word 0 (byte 0): operation code 0x384"]),
        ([ADD | 97 << 14], ["bad-word: word 0 (byte 0): guard code 97"]),
        ([ADD | 48 << 21, ADD | 63 << 27], ["bad-word: word 0 (byte 0): d = 48", "bad-word: word 1 (byte 8): a = 63"]),
        ([ADD | 48 << 27 | 48 << 33], ["bad-word: word 0 (byte 0): immediates as a and b"]),
        ([ADD | 1 << 39], ["bad-word: word 0 (byte 0): immediate = 0x1, which no operand uses"]),
        ([ADD | 2, 7], ["bad-word: word 0 (byte 0): extended = 1 without an immediate"]),
        ([ADD | 2 | 48 << 33, 7], ["bad-word: word 0 (byte 0): 0x7 in an extension word"]),
        ([ADD | 2 | 48 << 33, 1 << 32], ["bad-word: word 0 (byte 0): extension word 0x100000000"]),
        (
            [ADD | 2 | 48 << 33 | 1 << 39, 1 << 31],
            ["bad-word: word 0 (byte 0): immediate = 0x1 beside an extension word"],
        ),
        ([ADD | 2 | 48 << 33], ["cut-off: word 0 (byte 0): the end of the code"]),
        ([ADD ^ 1], ["cut-off: word 0 (byte 0): the end of the code inside a bundle"]),
        ([(ADD ^ 1) | 1 << 2, ADD], ["slot-order: word 1 (byte 8): slot 0 behind slot 1"]),
        ([LW | 3 << 27], ["bad-word: word 0 (byte 0): a ring of 1 byte"]),
        ([LW | 2 << 27 | 5 << 41], ["bad-word: word 0 (byte 0): immediate = 0x5, which no operand uses"]),
        (
            [LW | 3 << 27 | 1 << 29 | 1 << 46 | 5 << 41],
            ["bad-word: word 0 (byte 0): immediate = 0x1, which no operand uses"],
        ),
        ([LW | 1 << 27], ["names-twice: word 0 (byte 0): lw writes g0 twice"]),
        ([1 | 131 << 4 | 3 << 21], ["bad-word: word 0 (byte 0): d = g3"]),
        ([1 | 131 << 4 | 2 << 21 | 1 << 27 | 3 << 29], ["names-twice: word 0 (byte 0): ld writes g3 twice"]),
        ([1 | 65 << 4 | 1 << 33 | 48 << 27], ["bad-word: word 0 (byte 0): a half = 1 beside an immediate"]),
        ([1 | 65 << 4 | 48 << 27 | 1 << 56], ["bad-word: word 0 (byte 0): immediate 32768"]),
        ([1 | 200 << 4 | 48 << 21 | 4 << 27], ["target-nowhere: word 0 (byte 0): a branch to byte 4"]),
        ([1 | 1023 << 4 | 1 << 30], ["bad-word: word 0 (byte 0): 0x200 above bit 20"]),
        ([1 | 72 << 4 | 1 << 47], ["bad-word: word 0 (byte 0): n = 0x100000"]),
        ([1, ADD], ["bad-padding: word 1 (byte 8): a bundle at word 1"]),
        ([ADD, 1], ["bad-padding: word 1 (byte 8): padding at the end"]),
        ([ADD ^ 1] * 64 + [ADD], ["bundle-too-long: word 0 (byte 0): 65 operations"]),
    ],
)
def test_bad_words(words: list[int], found: list[str]) -> None:
    assert complaints(words) == found


def test_all_faults_of_a_word_come_at_once() -> None:
    on = core(slots=3)
    assert complaints([ADD | 3 << 2 | 120 << 14 | 50 << 21 | 51 << 27], on) == [
        "bad-word: word 0 (byte 0): slot 3",
        "bad-word: word 0 (byte 0): guard code 120",
        "bad-word: word 0 (byte 0): d = 50",
        "bad-word: word 0 (byte 0): a = 51",
    ]


def test_bad_groups() -> None:
    on = core(group=4, straddle=False)
    three = [ADD ^ 1, ADD ^ 1, ADD]
    assert complaints(three + three, on) == ["bad-padding: word 3 (byte 24): a bundle at word 3"]
    assert complaints([ADD ^ 1] * 4 + [ADD], on) == ["bundle-too-long: word 0 (byte 0): 5 words in one bundle"]


def test_complaints_are_capped_and_counted() -> None:
    found = complaints([1 | 900 << 4] * 30)
    assert len(found) == 21
    assert found[-1] == "more-problems: 10 more problems in this image"


def test_alien_images_are_refused() -> None:
    image = encode(PLAIN, OPERATIONS, [[HALT]], {}, digest="abc")
    with pytest.raises(ImageError, match="an image for sample"):
        decode(PLAIN, OPERATIONS, image, digest="def")
    with pytest.raises(ImageError, match="words of 64 bits"):
        decode(core(128), OPERATIONS, image)
    with pytest.raises(ImageError, match="without words"):
        decode(PLAIN, OPERATIONS, Image("sample", 64, ()))
    with pytest.raises(ImageError, match="label x at byte 4"):
        decode(PLAIN, OPERATIONS, attrs.evolve(image, labels={"x": 4}))
    assert decode(PLAIN, OPERATIONS, image, digest="abc").code_bytes == 8


def test_complaints_find_the_source() -> None:
    where = {(1, 2): Place("bearing.vliw", 12, 5), (2, 0): Place("bearing.vliw", 20, 1)}
    wide = [add(k, k, 2**31, slot=k) for k in range(3)]
    on = core(group=4, straddle=False)
    with pytest.raises(ImageError) as caught:
        encode(on, OPERATIONS, [[HALT], [HALT, HALT, jump("x")]], {}, where=lambda d, i: where.get((d, i)))
    assert str(caught.value).startswith("bearing.vliw:12:5  bad-place  (error)\n  found    jump: label x is nowhere\n")
    with pytest.raises(ImageError) as caught:
        encode(on, OPERATIONS, [[HALT], 4, wide, wide], {}, where=lambda d, i: where.get((d, i)))
    assert [(p.place, p.found) for p in caught.value.problems] == [
        (where[2, 0], "6 words in one bundle"),
        (None, "6 words in one bundle (draft 3)"),
    ]


def test_code_has_a_bound(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("vliwsim.program.encoding.encode.MOST_CODE_BYTES", 800)
    assert encode(PLAIN, OPERATIONS, [[HALT]] * 100, {}).code_bytes == 800
    assert refused([[HALT]] * 101, {}) == ["code-too-long"]
