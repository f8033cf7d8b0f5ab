"""Said intent: which item of a loop an operation works on, and what a check makes of it."""

from __future__ import annotations

import pytest

from vliwsim.check.judge import check_kernel
from vliwsim.check.verdict import PROVED, VIOLATED
from vliwsim.check.words import Words
from vliwsim.kernel.loading import assemble_source
from vliwsim.problems import SourceError
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import ItemTag

SOURCE = """kernel sums
core pair7
given x : i32[n] at g1
given trips : i32 = n - 2 in g16
returns y : i32 in g2
needs n >= 3
name sum = g2
start:
@0 lw g4, [g1 then +4] item 2
@2 lw g4, [g1 then +4] item 1
   li sum, 0
@3 idle
loop:
@0 {load}
@1 {count}
@{stamp} add sum, sum, g4 item 2 with sum of {carried}
@1 idle
finish:
@0 {last}
@3 add sum, sum, g4
   halt
"""
PARTS = {
    "load": "lw g4, [g1 then +4] item 0",
    "count": "li g5, 0",
    "stamp": "0",
    "carried": "3",
    "last": "add sum, sum, g4 item 1 with sum of 2",
}


def loop(**changed: str) -> str:
    """A loop of two beats, on a core whose branches take one."""
    parts = {**PARTS, "count": "count g16, loop", **changed}
    return SOURCE.format(**parts)


def verdict_of(text: str) -> tuple[list[str], Words]:
    from vliwsim.description.corefile import load_core

    kernel = assemble("sums.vliw", load_core("pair7").evolve({"branch.latency": 1}), text=text)
    words = Words(kernel, check_kernel(kernel))
    wrong = [p for p in words.problems() if p.name == "wrong-item"]
    return [f"{p.place.line if p.place else 0} {p.kind}: {p.found}; try {p.remedy}" for p in wrong], words


def test_a_loop_that_does_what_it_says() -> None:
    wrong, words = verdict_of(loop())
    assert wrong == []
    assert words.verdict.outcome("wrong-item") == PROVED
    assert {read.meant for read in words.verdict.early} == {True}


def test_a_stamp_that_is_wrong_is_told_the_right_one() -> None:
    wrong, words = verdict_of(loop(stamp="0").replace("@2 lw g4, [g1 then +4] item 1", "@1 lw g4, [g1 then +4] item 1"))
    # the second load lands a beat earlier, before the first is added
    assert words.verdict.outcome("wrong-item") == PROVED  # at finish only the last pass's items are left
    del wrong
    text = loop().replace("@0 add sum, sum, g4 item 2", "@1 add sum, sum, g4 item 2")
    wrong, words = verdict_of(text.replace("@2 lw g4", "@1 lw g4"))
    assert wrong == [
        "16 error: add (line 16, loop@1) works on item 2, but at loop@1 g4 is of item 1; "
        "try @0, where it is of the item said"
    ]


def test_an_operand_of_another_item_must_be_named() -> None:
    wrong, _ = verdict_of(loop(carried="2"))
    assert wrong[0].startswith(
        "16 error: add (line 16, loop@0) works on item 2 with g2 of 2, but at loop@0 g2 is of item 3"
    )
    wrong, _ = verdict_of(loop(last="add sum, sum, g4 item 1"))
    assert len(wrong) == 1
    assert "works on item 1, but at finish@0 g2 is of item 2" in wrong[0]


def test_what_is_not_said_is_noted_once() -> None:
    import re

    text = re.sub(r" item \d+( with \w+ of \d+)?", "", loop())
    _, words = verdict_of(text)
    assert not words.verdict.tagged
    assert "wrong-item" not in words.verdict.judgements
    notes = [p for p in words.problems() if p.name == "item-not-said"]
    assert len(notes) == 1
    assert "does not say that it is meant" in notes[0].found


def test_tags_are_in_the_map_and_not_in_the_image() -> None:
    import re

    kernel = assemble_source("energy")
    bare = assemble(
        kernel.path, text=re.sub(r" item [-\w ]+?(?=;|\n|$| with \w+ of \d+)( with \w+ of \d+)?", "", kernel.text)
    )
    assert kernel.image == bare.image
    assert bare.map.items == ()
    front = kernel.register_names["front"]
    assert ItemTag(7, ((front, 8),)) in kernel.map.items[7]
    assert kernel.map.items[8] == (None, None)


FAULTS = {
    "li g2, 0 item": "bad-expression",
    "li g2, 0 item x": "unknown-name",
    "li g2, 0 item 0 - 1": "unclear-item",
    "li g2, 0 item 5000": "unclear-item",
    "li g2, 0 item 1 item 2": "twice",
    "add g2, g3, g4 with g3 of 1": "no-item",
    "add g2, g3, g4 item 1 with g3": "unclear-item",
    "add g2, g3, g4 item 1 with q3 of 1": "unknown-register",
    "add g2, g3, g4 item 1 with g3 of -1": "unclear-item",
}


@pytest.mark.parametrize("line", FAULTS)
def test_tags_that_say_nothing_clear(line: str) -> None:
    with pytest.raises(SourceError) as refused:
        assemble("bad.vliw", text=f"kernel bad\ncore pair7\nstart:\n@0 {line}\n   halt\n")
    names = {problem.name for problem in refused.value.problems}
    assert FAULTS[line] in names
    assert all(problem.place and problem.place.line == 4 for problem in refused.value.problems)


def test_a_name_may_not_be_one_of_the_words() -> None:
    for line in ("let item = 3", "name with = g4"):
        with pytest.raises(SourceError, match="name-taken"):
            assemble("bad.vliw", text=f"kernel bad\ncore pair7\n{line}\nstart:\n@0 halt\n")


def test_nested_loops_count_their_own_passes() -> None:
    text = """kernel nest
core pair7
given x : i32[n] at g1
given outer : i32 = n in g16
returns y : i32 in g2
needs n >= 1
start:
@0 li g2, 0
rows:
@0 li g17, 3
@1 lw g5, [g1] item 0
columns:
@0 lw g4, [g1 then +4] item 0
@4 mul g6, g4, g5 item 0
@6 count g17, columns
@7 add g2, g2, g6 item 0 with g2 of 1
next:
@0 count g16, rows
last:
@0 halt
"""
    from vliwsim.description.corefile import load_core

    kernel = assemble(
        "nest.vliw", load_core("pair7").evolve({"branch.latency": 1}), text=text.replace("@7 add", "@5 idle\n@7 add")
    )
    verdict = check_kernel(kernel)
    assert verdict.outcome("wrong-item") in (PROVED, VIOLATED)
    wrong = [i for j in [verdict.judgements["wrong-item"]] for i in j.incidents]
    assert not [i for i in wrong if i.register == kernel.core.register_numbers["g4"]]


def test_a_section_made_too_short_is_named() -> None:
    """The last beat of a five-beat loop moved to @3: the loop has four beats now, and the stamp to give is @4."""
    kernel = assemble("short.vliw", text=(
        "kernel short\ncore pair7\ngiven x : i32[n] at g1\ngiven again : i32 = n - 2 in g16\nreturns y : i32[n] at g9\n"
        "needs n >= 2\nfirst:\n@0 lw g3, [g1 then +4] item 1\n@4 mul g4, g3, 3 item 1\nloop:\n"
        "@0 lw g3, [g1 then +4] item 0\n@3 mul g4, g3, 3 item 0\n@2 add g5, g4, 1 item 1\n"
        "@3 sw g5, [g9 then +4] item 1\n@1 count g16, loop\nfin:\n@2 add g5, g4, 1 item 0\n"
        "@3 sw g5, [g9 then +4] item 0\n   halt\n"
    ))  # fmt: skip
    told = [p.remedy for p in Words(kernel, check_kernel(kernel)).problems() if p.name == "wrong-item"]
    assert told[0] == "@4, for which loop has become too short"
