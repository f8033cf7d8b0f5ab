"""Origins, uses, verdicts and stalls: that they are true, judged by changing inputs and by the machine itself."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest

from tests.shell.helping import answers, bound, from_text, session
from vliwsim.description.values import parts
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.runner import run_kernel
from vliwsim.program.kernel import Kernel
from vliwsim.shell.nodes import Leaf, Step, reached_elements
from vliwsim.shell.origins import maker, origin_of
from vliwsim.shell.session import Session
from vliwsim.shell.stalls import stall_here

# ------------------------------------------------------------------------------------- influence, judged by changing


def changed(inputs: dict[str, Any], name: str, index: int) -> Iterator[dict[str, Any]]:
    """The inputs with one element changed, in ways that no rounding or saturation hides all of."""
    for by in (1, -1000, 8192):
        array = inputs[name].copy()
        new = int(array[index]) + by
        if np.iinfo(array.dtype).min <= new <= np.iinfo(array.dtype).max:
            array[index] = new
            yield {**inputs, name: array}


def influence_by_changing(kernel: Kernel, inputs: dict[str, Any]) -> dict[tuple[str, int], set[tuple[str, int]]]:
    """For every output element, the given elements that change it."""
    base = run_kernel(kernel, inputs, reference=False).outputs
    found: dict[tuple[str, int], set[tuple[str, int]]] = {}
    for name, array in inputs.items():
        if not isinstance(array, np.ndarray):
            continue
        for index in range(len(array)):
            for other in changed(inputs, name, index):
                outputs = run_kernel(kernel, other, reference=False).outputs
                for output, value in outputs.items():
                    for k in np.flatnonzero(np.atleast_1d(value) != np.atleast_1d(base[output])):
                        found.setdefault((output, int(k)), set()).add((name, index))
    return found


def named_by_why(one: Session, output: str, index: int) -> set[tuple[str, int]]:
    """The elements of given arrays (tables left out: nobody changes those) that ``why`` names."""
    what = output if output in one.names.scalars else f"{output}[{index}]"
    given = {item.name for item in one.kernel.items if item.kind in ("given", "changes")}
    return {(a, k) for a, k in origin_of(one, what).elements if a in given}


def quiet(seed: int, n: int) -> np.ndarray:
    """Samples of the vibration sensor, none of them 0, far from saturation."""
    random = np.random.default_rng(seed)
    return (random.integers(200, 900, n) * random.choice([-1, 1], n)).astype(np.int16)


INFLUENCED = {
    "energy": {"x": quiet(1, 16)},
    "weighted_sum": {"x": quiet(2, 12), "w": quiet(3, 12)},
    "window_scale": {"x": quiet(4, 16), "gain": 2},
    "tests/shell/early_read": {"x": quiet(5, 9)},
}


@pytest.mark.parametrize("name", INFLUENCED)
def test_why_names_exactly_the_elements_that_influence_an_output(name: str) -> None:
    kernel, inputs = assemble_source(name), INFLUENCED[name]
    one = bound(kernel, inputs)
    one.to_end()
    by_changing = influence_by_changing(kernel, inputs)
    assert by_changing
    for item in kernel.items:
        if item.kind not in ("returns", "changes"):
            continue
        size = one.names.arrays[item.name].length if item.name in one.names.arrays else 1
        for index in range(size):
            named, influencing = named_by_why(one, item.name, index), by_changing.get((item.name, index), set())
            if name == "window_scale" and index == 0:
                assert named == {("x", 0)}  # the window is 0 there: times 0 hides what it is made of
                assert not influencing
            else:
                assert named == influencing, (item.name, index)


def test_values_of_an_origin_are_those_of_the_run() -> None:
    """Every operation named is one that the machine did, in that cycle, with that result."""
    from vliwsim.machine.recorder import record

    one = session("energy", {"n": 64})
    sent: dict[tuple[int, int, int], set[int]] = {}
    cycles: dict[int, int] = {}
    state = one.machine.start({}, (), one.state.memory.regions)
    state.restore(one.recorded.first)

    def listen(record) -> None:  # type: ignore[no-untyped-def]
        cycles[record.beat] = record.cycle
        for landing in record.landings:
            site = landing.site
            sent.setdefault((landing.sent, site.bundle, site.instruction), set()).add(parts(landing.value))

    undo = record(one.machine, listen)
    one.machine.run(state)
    undo()
    one.to_end()
    origin = origin_of(one, "total")
    names = [one.layout.text(s.bundle, s.instruction).split()[0] for s in origin.steps if not _bookkeeping(one, s)]
    assert {name: names.count(name) for name in set(names)} == {"lw": 32, "dot.h2": 32, "add": 33, "li": 2}
    for step in origin.steps:
        assert cycles[step.beat] == step.cycle
        if step.beat < 23:  # what the halt's bundle sent lands in the drain, which is not recorded
            assert {parts(v) for v in step.values.values()} <= sent[step.beat, step.bundle, step.instruction]


def _bookkeeping(one: Session, step: Step) -> bool:
    """Updates of addresses and the counter of the loop."""
    name = one.machine.ready[step.bundle].parts[step.instruction].operation.name
    return step.updates or name == "count"


def test_the_elements_behind_one_operation() -> None:
    one = session("energy", {"n": 64})
    one.to_end()
    origin = origin_of(one, "total")
    dots = [s for s in origin.steps if one.layout.text(s.bundle, s.instruction).startswith("dot")]
    assert reached_elements(origin, dots[0]) in ({("x", 0), ("x", 1)}, {("x", 2), ("x", 3)})


def test_an_origin_with_a_limit_says_that_it_is_not_whole() -> None:
    one = session("energy", {"n": 4096})
    one.to_end()
    origin = origin_of(one, "total", most=100)
    assert not origin.whole
    assert "what lies further back was not" in " ".join(_why(one, origin).split())
    assert any(isinstance(n, Leaf) and n.kind == "unfollowed" for s in origin.steps for i in s.sources for n in i.nodes)


def _why(one: Session, origin: object) -> str:
    from vliwsim.faces.shell.lines import plain
    from vliwsim.faces.shell.reasons import why

    return "\n".join(plain(line) for line in why(one, origin, 80))  # type: ignore[arg-type]


def test_a_register_that_nothing_wrote_is_found_far_behind_at_once() -> None:
    one = session("tests/shell/long_loop.vliw", {"trips": 200_000})
    one.to_end()
    said = answers(one, "why h5", "why g10")
    assert "undefined: h5 from the start" in said
    assert said.count("operations in all") == 2 or "0 operations" in said


def test_why_folds_repeats() -> None:
    one = session("energy", {"n": 64})
    said = answers(one, "at end", "why total")
    assert "… 15 more add to front, cycles 7 to 21, passes 1 to 15 of loop" in said
    assert "front = 0, at start@0, cycle 0 (line" in said
    assert "operations in all, back to x[0:64]." in said
    assert all(len(line) <= 80 for line in said.splitlines())


# ---------------------------------------------------------------------------------------------------- judging, uses


def early(x: list[int]) -> Session:
    return bound(assemble_source("tests/shell/early_read"), {"x": x})


def test_the_planted_early_read_is_found_and_explained() -> None:
    one = early([5, -7, 11, 2, 30, -1])
    said = answers(one, "at end", "judge", "at wrong y", "here", "why product", "flight product")
    assert "y[1] is 15, the reference says -21; 5 of 6 elements differ" in said
    assert "stored by sw product, [g13 then +4] at loop@6 pass 1, cycle 14 (line 22)" in said
    assert one.cycle == 14
    assert "product = 15 (0xf) (newer in 1)" in said
    assert "product = 15, at start@4, cycle 4 (line 15): mul product, sample, 3" in said
    assert "product = -21" in said


def test_seek_differs_goes_to_the_store_that_is_wrong() -> None:
    one = early([5, -7, 11, 2, 30, -1])
    answers(one, "seek differs")
    assert one.cycle == 14
    answers(one, "seek differs y")
    assert one.cycle == 21
    answers(one, "seek back differs")
    assert one.cycle == 14
    assert "nowhere" in answers(one, "seek back differs")


def test_at_wrong_of_a_scalar_goes_to_the_operation_that_made_it() -> None:
    one = session("energy", {"n": 64})
    one.judge.expected = {"total": 1}
    said = answers(one, "at wrong total")
    assert one.cycle == 23
    assert "made by add g11, front, back at finish@0, cycle 23 (line" in said


def test_at_wrong_where_nothing_is_wrong_stays() -> None:
    one = session("window_scale", {"n": 64, "gain": 1})
    said = answers(one, "ahead 9", "at wrong", "judge")
    assert one.cycle == 9
    assert "every output is what the reference says" in said
    assert "y has none of its 64 elements yet" in said


def test_uses_are_the_reads_until_it_is_replaced() -> None:
    one = early([5, -7, 11, 2, 30, -1])
    said = answers(one, "at cycle 9", "uses product", "uses x[3]", "uses g13")
    assert "product = 15 is read by 1 operation" in said
    assert "until cycle 15, when mul product, sample, 3 replaces it" in said
    assert "x[3] is read by 1 operation" in said
    assert "lh sample, [g10 then +2] at loop@0 pass 3, cycle 22 (line 19)" in said
    assert "g13 = 156 is read by 1 operation" in said


def test_maker_is_the_latest_operation_only() -> None:
    one = early([5, -7, 11, 2, 30, -1])
    assert maker(one, "product") is None
    one.go(20)
    made = maker(one, "product")
    assert made is not None
    assert made.cycle == 12


# ------------------------------------------------------------------------------------------------------------ stalls


def stalled(text: str, cycle: int, core: str) -> tuple[Session, str]:
    one = from_text(text, {"x": list(range(64))}, core=core)
    one.go(cycle)
    return one, answers(one, "why stall")


HELD = """kernel held
core lone4
given x : i32[n] at g10
returns total : i32 in g3

start:
@0 lw g2, [g10 then +4]
@1 add g3, g2, 1
   halt
"""


def test_a_hold_names_the_result_that_is_waited_for() -> None:
    one, said = stalled(HELD, 1, "lone4")
    assert "cycle 1 issues nothing: waiting for a result or a unit, start@1 waits" in said
    assert "g2, an operand, is sent by lw g2, [g10 then +4], lands in beat" in said
    assert stall_here(one) is not None


def test_a_stall_behind_is_found_from_the_end() -> None:
    one, said = stalled(HELD, 1 << 40, "lone4")
    assert one.state.finished
    assert "issues nothing: waiting" in said


CONFLICT = """kernel conflict
core pair7
given x : i32[n] at g10 align 16
given second : i32 = addr(x) + 16 in h10
returns total : i32 in g3

start:
@0 lw g2, [g10] ; lw h2, [h10]
@4 add g3, g2, h2
   halt
"""


def test_a_bank_conflict_names_the_accesses() -> None:
    one, said = stalled(CONFLICT, 1, "pair7")
    assert "cycle 1 issues nothing: a bank conflict, behind start@0" in said
    assert "lw g2, [g10] at x[0], bank 0" in said
    assert "lw h2, [h10] at x[4], bank 0" in said
    assert "no cycle has stalled" in answers(one, "at cycle 0", "why stall")
