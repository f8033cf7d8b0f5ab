"""Branches to registers: what is known of where they go, what the source names, and that runs keep to it."""

from __future__ import annotations

import pytest

from tests.check.test_rules import checked
from vliwsim.check.judge import check_kernel
from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED, VIOLATED, Verdict
from vliwsim.check.words import Words
from vliwsim.description.corefile import load_core
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import Kernel

TABLE = """kernel pick
core pair7, lone4
given k : i32 in g16
given x : i32 in g17
returns y : i32 in g2
table ways : u32[3] = addr(low) if i == 0 else addr(middle) if i == 1 else addr(high) at g10
needs 0 <= k < 3
start:
@0 sll g6, g16, 2
@shift lw g7, [g10 + g6]
@shift + load jump g7 {to}
@shift + load + branch - 1 idle
low:
@0 li g2, 1 ; jump last
@branch - 1 idle
middle:
@0 add g2, g17, 1 ; jump last
@branch - 1 idle
high:
@0 {high}
last:
@0 halt
"""


def table(to: str = "to low, middle, high", high: str = "add g2, g17, g17", core: str = "pair7") -> Kernel:
    return assemble("pick.vliw", load_core(core), text=TABLE.format(to=to, high=high))


def run(kernel: Kernel, k: int, engine: str = "step") -> KernelRun:
    return run_kernel(kernel, {"k": k, "x": 20}, reference=False, engine=engine)


def said(kernel: Kernel, verdict: Verdict) -> list[str]:
    words = Words(kernel, verdict)
    return [words.found(incident) for incident in verdict.judgements["indirect-target"].incidents]


@pytest.mark.parametrize("core", ["pair7", "lone4"])
def test_a_table_of_labels(core: str) -> None:
    kernel = table(core=core)
    verdict = check_kernel(kernel)
    assert verdict.ok
    assert verdict.outcome("indirect-target") == NEEDS_INPUT
    assert verdict.outcome("ran-off-the-end") == verdict.outcome("lands-twice") == PROVED
    assert "to low@0, middle@0 and high@0; a run that would go elsewhere stops" in said(kernel, verdict)[0]
    assert [int(run(kernel, k).outputs["y"]) for k in range(3)] == [1, 21, 40]  # type: ignore[call-overload]


def test_every_named_way_is_looked_at() -> None:
    """What is wrong on one of them is violated, with a path that a run takes."""
    kernel = table(high="mul g2, g17, g17\n@2 mv g2, g17")  # both land at last@1
    verdict = check_kernel(kernel)
    (incident,) = verdict.judgements["lands-twice"].incidents
    assert incident.sure
    assert verdict.outcome("lands-twice") == VIOLATED
    assert [run(kernel, k).legal for k in range(3)] == [True, True, False]
    assert run(kernel, 2).problems[0].name == "lands-twice"


@pytest.mark.parametrize("engine", ["step", "native", "auto"])
def test_a_run_that_goes_elsewhere_stops(engine: str) -> None:
    """So what is proved on the named ways is proved."""
    kernel = table(to="to low, high")
    assert run(kernel, 2, engine).legal
    ended = run(kernel, 1, engine)
    assert (ended.reason, ended.cycles) == ("hazard", 5)
    (problem,) = ended.problems
    assert problem.name == "indirect-target"
    assert problem.place is not None
    assert problem.place.line == 11
    assert "which it does not name" in problem.found


def test_without_names_it_is_undecided() -> None:
    kernel = table(to="")
    verdict = check_kernel(kernel)
    assert verdict.astray
    assert verdict.outcome("lands-twice") == UNDECIDED
    assert not verdict.ok
    assert "is not known" in said(kernel, verdict)[0]
    assert [int(run(kernel, k).outputs["y"]) for k in range(3)] == [1, 21, 40]  # type: ignore[call-overload]


KNOWN = """@0 li g5, here
@1 li g5, there if g16
@{} mv g6, g5
@3 jump g6 {}
@8 idle
here:
@0 li g2, 1 ; halt
there:
@0 li g2, 2 ; halt
off:
@0 li g2, 3 ; halt
"""


@pytest.mark.parametrize("to", ["", "to here, there", "to off, there, here"])
def test_labels_as_numbers_are_followed_and_need_no_names(to: str) -> None:
    _, verdict = checked(KNOWN.format(2, to))
    assert verdict.outcome("indirect-target") == PROVED
    assert verdict.ok
    assert verdict.outcome("undefined-used") == PROVED


def test_a_known_target_that_is_not_named_is_violated() -> None:
    kernel, verdict = checked(KNOWN.format(2, "to here, off"))
    assert verdict.outcome("indirect-target") == VIOLATED
    assert said(kernel, verdict) == ["jump (line 12, start@3) goes to there@0, and names here@0 and off@0"]
    ended = run_kernel(kernel, {"x": [0] * 4, "k": 1, "m": 0}, reference=False)
    assert [p.name for p in ended.problems] == ["indirect-target"]
    assert run_kernel(kernel, {"x": [0] * 4, "k": 0, "m": 0}, reference=False).legal


def test_which_of_two_results_lands_is_followed() -> None:
    """The mv takes the old g5: always here, whatever the guard."""
    _, verdict = checked(KNOWN.format(1, "to here"))
    assert verdict.outcome("indirect-target") == PROVED


def test_a_branch_that_is_off_or_not_taken_goes_nowhere() -> None:
    body = "@0 li g2, 1 ; li g5, start\n@1 bne g16, {}, g5 to last if g17\n@8 idle\nlast:\n@0 halt\n"
    kernel, verdict = checked(body.format("g16"))
    assert verdict.outcome("indirect-target") == NEEDS_INPUT  # that g16 equals itself is not followed
    assert run_kernel(kernel, {"x": [0] * 4, "k": 1, "m": 1}, reference=False).legal
    kernel, _ = checked(body.format("0"))
    assert run_kernel(kernel, {"x": [0] * 4, "k": 1, "m": 0}, reference=False).legal
    assert not run_kernel(kernel, {"x": [0] * 4, "k": 1, "m": 1}, reference=False).legal


def test_a_branch_for_which_no_way_is_left_to_go_on() -> None:
    _, verdict = checked("@0 li g5, 4096 ; li g2, 0\n@1 jump g5 to last\n@8 idle\nlast:\n@0 halt\n")
    assert verdict.outcome("indirect-target") == VIOLATED
    assert verdict.outcome("ran-off-the-end") == PROVED


def test_the_declaration_is_part_of_the_image() -> None:
    """The machine gets it from there, and no other way."""
    plain, named = table(to=""), table()
    targets = [i.targets for b in named.program.bundles for i in b.instructions if i.operation.name == "jump"]
    labels = named.program.labels
    assert [[t.value for t in places] for places in targets if places] == [  # type: ignore[union-attr]
        [labels["low"], labels["middle"], labels["high"]]
    ]
    assert plain.image != named.image
    assert plain.program.code_bytes == named.program.code_bytes
    assert not any(i.targets for b in plain.program.bundles for i in b.instructions)
