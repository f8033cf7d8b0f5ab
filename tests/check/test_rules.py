"""Each rule on small sources: what is proved, violated and left to data, and where it is said to be."""

from __future__ import annotations

import attrs
import pytest

from vliwsim.check.judge import check_kernel
from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED, VIOLATED, Verdict
from vliwsim.check.words import Words
from vliwsim.description.core import Core
from vliwsim.description.corefile import load_core
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import Kernel

HEADER = """kernel small
core {core}
given x : i32[n] at g1
given k : i32 in g16
given m : i32 in g17
returns y : i32 in g2
needs {needs}
"""


def checked(
    body: str, *, core: str = "pair7", needs: str = "n >= 4", allow: bool = False, **changes: object
) -> tuple[Kernel, Verdict]:
    chosen: Core = load_core(core).evolve({name.replace("__", "."): value for name, value in changes.items()})
    text = HEADER.format(core=core, needs=needs) + "start:\n" + body
    kernel = assemble("small.vliw", chosen, text=text, allow_illegal=allow)
    return kernel, check_kernel(kernel)


def told(kernel: Kernel, verdict: Verdict) -> list[str]:
    """What is violated or open, each as ``line name``, memory rules left out."""
    left_out = ("misaligned", "out-of-array", "store-twice", "item-not-said")
    problems = [p for p in Words(kernel, verdict).problems() if p.name not in left_out]
    return [f"{p.place.line if p.place else 0} {p.name} {p.kind}" for p in problems]


FIRST = 9  # the line of the body's first

CASES = {
    "nothing wrong": ("@0 li g2, 1\n@1 halt", []),
    "two results together": ("@0 lw g2, [g1]\n@1 mul g2, g16, g16\n@4 halt", [(0, "lands-twice illegal")]),
    "one of two guards": (
        "@0 li g2, 0\n@1 add g2, g16, 1 if g16 ; add g2, g16, 2 if not g16\n@2 halt",
        [],
    ),
    "guards that nothing ties": (
        "@0 li g2, 0\n@1 add g2, g16, 1 if g16 ; add g2, g16, 2 if g17\n@2 halt",
        [(1, "cannot-exclude note")],
    ),
    "a guard told from another": (
        "@0 li g2, 0 ; seqz g18, g16\n@1 add g2, g16, 1 if g16 ; add g2, g16, 2 if g18\n@2 halt",
        [],
    ),
    "guards passed under a condition": (
        "@0 li g2, 0 ; czero.eqz g18, g17, g16 ; czero.nez g19, g17, g16\n"
        "@1 add g2, g16, 1 if g18 ; add g2, g16, 2 if g19\n@2 halt",
        [],
    ),
    "together behind halt": ("@0 lw g2, [g1]\n@1 mul g2, g16, g16 ; halt", [(1, "lands-twice illegal")]),
    "nothing behind the last": (
        "@0 li g2, 1\n@1 jump start if g16\n@2 halt if g17",
        [(2, "ran-off-the-end illegal"), (2, "branch-past-halt note")],
    ),
    "halt below a branch": ("@0 jump start\n@1 li g2, 1 ; halt", [(1, "branch-past-halt illegal")]),
    "halt with a branch perhaps": ("@0 li g2, 1 ; jump start if g16\n@1 halt", [(1, "branch-past-halt note")]),
    "undefined output": ("@0 li g3, 1\n@1 halt", [(-3, "undefined-used illegal")]),
    "output on one way only": (
        "@0 jump start if g16\n@4 li g2, 1 if g17\n@5 halt",
        [(-3, "undefined-used note")],
    ),
    "undefined guard": ("@0 li g2, 0\n@1 li g2, 1 if g18\n@2 halt", [(1, "undefined-used illegal")]),
    "undefined address": ("@0 lw g2, [g5]\n@4 halt", [(0, "undefined-used illegal")]),
    "undefined through a sum": (
        "@0 li g2, 0 ; add g6, g5, 4\n@1 lw g3, [g6]\n@2 halt",
        [(1, "undefined-used illegal")],
    ),
    "too early for a pointer": (
        "@0 li g2, 0 ; mul g6, g16, 4\n@1 lw g3, [g6]\n@2 halt",
        [(1, "undefined-used illegal")],
    ),
    "two branches taken": ("@0 li g2, 1 ; jump start if g16 on g.flow\n@4 halt", []),
    "a call with nowhere to return": (
        "@0 li g2, 1 ; call g5, last\n@3 idle\nlast:\n@0 halt",
        [],
    ),
    "a target nobody knows": ("@0 li g2, 1 ; jump g16\n@4 halt", None),
}


@pytest.mark.parametrize("name", CASES)
def test_rules(name: str) -> None:
    body, expected = CASES[name]
    kernel, verdict = checked(body + "\n")
    if expected is None:
        assert verdict.outcome("indirect-target") == NEEDS_INPUT
        assert verdict.outcome("lands-twice") == UNDECIDED
        assert not verdict.ok
        return
    assert told(kernel, verdict) == [f"{FIRST + line} {what}" for line, what in expected]


def test_the_path_leads_there() -> None:
    kernel, verdict = checked("@0 lw g2, [g1]\n@1 mul g2, g16, g16\n@4 halt\n")
    (incident,) = verdict.judgements["lands-twice"].incidents
    words = Words(kernel, verdict)
    assert [words.at(m.bundle, m.within) for m in incident.path] == [f"start@{k}" for k in range(5)]
    assert "lw (line 9, start@0); mul (line 10, start@1)" in words.found(incident)


LOOP = """@0 li g2, 0
loop:
@0 lw g3, [g1 then +4]
   count g20, loop
@1 add g2, g2, g3
@3 idle
last:
@0 halt
"""


def test_a_loop_that_reads_early_on_cores_that_differ() -> None:
    body = LOOP.replace("g20", "g16")
    kernel, verdict = checked(body)
    assert verdict.outcome("early-read") == PROVED
    assert verdict.judgements["early-read"].because
    words = Words(kernel, verdict)
    assert [(words.mnemonic(r.site), r.register, r.meant) for r in verdict.early] == [("add", 3, None)]
    assert [(words.mnemonic(site), beats, sure) for site, beats, sure in verdict.early[0].flights] == [("lw", 3, True)]
    _, rejected = checked(body, issue__early="reject")
    assert rejected.outcome("early-read") == VIOLATED
    _, waits = checked(body, core="lone4", needs="n >= 4")
    assert waits.outcome("early-read") == PROVED
    assert [(w.least, w.most) for w in waits.waits] == [(0, 1), (1, 1)]  # the load for its own register, from pass 2 on


def test_a_unit_still_taken_around_the_back_edge() -> None:
    text = "@0 li g2, 0\nloop:\n@0 div g3, g16, g17 ; count g16, loop\n@3 idle\nlast:\n@0 halt\n"
    core = load_core("pair7")
    slots = tuple(
        attrs.evolve(s, classes=(*s.classes, "divide"), busy={"divide": 6}) if s.name == "g.sum" else s
        for s in core.slots
    )
    core = attrs.evolve(core, slots=slots)
    source = HEADER.format(core="pair7", needs="n >= 4") + "start:\n" + text
    verdict = check_kernel(assemble("small.vliw", core, text=source))
    assert verdict.outcome("busy") == VIOLATED
    slower = source.replace(" ; count g16, loop\n@3 idle", "\n@3 count g16, loop\n@6 idle")
    assert check_kernel(assemble("small.vliw", core, text=slower)).outcome("busy") == PROVED


def test_static_rules_of_sources_the_assembler_would_refuse() -> None:
    _, verdict = checked("@0 li g2, 1 if g3 on g.sum ; li g4, 1 on g.sum\n@1 halt\n", allow=True)
    assert verdict.outcome("guard-register") == VIOLATED
    _, verdict = checked("@0 li g2, 1 on g.sum ; li g4, 1 on g.sum\n@1 halt\n", allow=True)
    assert verdict.outcome("slot-taken") == VIOLATED
    _, verdict = checked("@0 mul g2, g16, g17 on g.sum\n@3 halt\n", allow=True)
    assert verdict.outcome("slot-class") == VIOLATED


def test_branches_one_at_a_time() -> None:
    body = "@0 li g2, 1 ; jump last if g16\n@{} jump last if g17\n@12 idle\nlast:\n@0 halt\n"
    assert checked(body.format(2), branch__overlap=False)[1].outcome("branch-overlap") == VIOLATED
    assert checked(body.format(4), branch__overlap=False)[1].outcome("branch-overlap") == PROVED
    assert checked(body.format(2))[1].judgements["branch-overlap"].because


def test_calls_and_returns_are_followed() -> None:
    body = """@0 li g2, 0 ; call g5, twice
@4 call g5, twice
@8 jump last
@12 idle
twice:
@0 add g2, g2, g16 ; jump g5
@4 idle
last:
@0 halt
"""
    _, verdict = checked(body)
    assert verdict.outcome("indirect-target") == PROVED
    assert verdict.ok


ALIGNMENT = {
    "lw g2, [g1 + 8]": PROVED,
    "lw g2, [g1 + 2]": VIOLATED,
    "ld g2, [g1]": PROVED,  # an array that asks for nothing stands on 8 bytes
    "ld g2, [g1 + 4]": VIOLATED,
    "lw g2, [g1 + g16]": NEEDS_INPUT,
}


@pytest.mark.parametrize("load", ALIGNMENT)
def test_alignment(load: str) -> None:
    assert checked(f"@0 {load}\n@4 halt\n")[1].outcome("misaligned") == ALIGNMENT[load]


def test_alignment_of_a_pointer_that_moves() -> None:
    body = "@0 li g2, 0\nloop:\n@0 {} ; count g16, loop\n@3 idle\nlast:\n@0 halt\n"
    assert checked(body.format("ld g4, [g1 then +8]"))[1].outcome("misaligned") == PROVED
    assert checked(body.format("lw g4, [g1 then +12]"))[1].outcome("misaligned") == PROVED
    assert checked(body.format("ld g4, [g1 then +12]"))[1].outcome("misaligned") == NEEDS_INPUT


def test_arrays_of_known_size() -> None:
    assert checked("@0 lw g2, [g1 + 12]\n@4 halt\n")[1].outcome("out-of-array") == PROVED
    assert checked("@0 lw g2, [g1 + 16]\n@4 halt\n")[1].outcome("out-of-array") == NEEDS_INPUT
    assert checked("@0 lw g2, [g1 + 16]\n@4 halt\n", needs="n > 4")[1].outcome("out-of-array") == PROVED


def test_two_stores() -> None:
    body = "@0 li g2, 0 ; mv h1, g1\n@1 sw g16, [g1{}] ; sw h2, [h1{}]\n@2 halt\n"
    assert checked(body.format("", " + 4").replace("h2,", "h3,"))[1].outcome("store-twice") == PROVED
    assert checked(body.format("", ""))[1].outcome("store-twice") == VIOLATED


def test_banks_where_conflicts_are_refused() -> None:
    body = "@0 li g2, 0 ; mv h1, g1\n@1 lw g3, [g1] ; lw h3, [h1{}]\n@2 halt\n"
    assert checked(body.format(" + 4"), memory__conflict="reject")[1].outcome("bank-conflict") == PROVED
    assert checked(body.format(" + 16"), memory__conflict="reject")[1].outcome("bank-conflict") == NEEDS_INPUT
    assert checked(body.format(" + 16"))[1].judgements["bank-conflict"].because


def test_inputs_that_needs_proves_nonzero() -> None:
    """What a loop does without its first pass is on no path, where `needs` excludes it."""
    body = "@0 jump last if not g16\n@4 li g2, 1\nlast:\n@0 halt\n"
    assert checked(body)[1].outcome("undefined-used") == VIOLATED
    assert checked(body, needs="n >= 4 and k > 0")[1].outcome("undefined-used") == PROVED
    assert checked(body, needs="n >= 4 and k >= 0")[1].outcome("undefined-used") == VIOLATED


def test_interrupts() -> None:
    body = "@0 lw g2, [g1]\n@1 li g3, 1\n@2 li g4, 1\n@3 add g5, g2, g3\n@4 halt\n"
    _, verdict = checked(body)  # the add means the old g2
    assert verdict.interrupts
    kinds = verdict.interrupts.bundles
    assert kinds == {0: "safe", 1: "unsafe", 2: "unsafe", 3: "unsafe", 4: "safe"}
    assert verdict.interrupts.longest == 3
    assert (verdict.interrupts.reasons[1].bundle, verdict.interrupts.reasons[1].register) == (3, 2)
    branch = "@0 li g2, 0\nloop:\n@0 count g16, loop\n@3 idle\nlast:\n@0 halt\n"
    _, verdict = checked(branch)
    assert verdict.interrupts
    assert verdict.interrupts.longest is not None
