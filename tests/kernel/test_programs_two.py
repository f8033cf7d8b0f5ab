"""The lowpass, the sections, the checksum and the crest factor: right, on budget, at the limits that they name."""

from __future__ import annotations

import shutil
from collections.abc import Mapping
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from vliwsim.description.places import programs_folder
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.loaded import LoadedKernel, load_kernel
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import VliwsimError

NAMES = ("lowpass", "sections", "checksum", "crest")


@cache
def shipped(name: str, core: str | None = None) -> LoadedKernel:
    return load_kernel(str(programs_folder() / name / f"{name}.vliw"), core)


@cache
def cases(name: str) -> dict[str, Mapping[str, Any]]:
    return shipped(name).cases()


@pytest.mark.parametrize("name", NAMES)
def test_right_legal_and_exactly_on_budget_on_all_cases_and_cores(name: str) -> None:
    assert len(cases(name)) >= 12
    for core in shipped(name).kernel.cores_named:
        kernel = shipped(name, core)
        for case, inputs in cases(name).items():
            if inputs["x"].size > 4000 and case == "random":
                continue  # test_programs_one.py runs it
            run = kernel.run(given=inputs)
            assert run.ok, f"{run.verdict} case {case}\n" + "\n".join(str(p) for p in run.problems)
            assert run.matches is True
            assert run.cycles == run.budget, case
            assert sum(run.stalls.values()) == 0, case
            assert run.drain == 0, case


@pytest.mark.parametrize(
    ("name", "beats", "slots"),
    [
        ("lowpass", 64, {"g.mul", "h.mul"}),
        ("sections", 8, {"g.mul"}),
        ("checksum", 1, {"g.sum", "h.sum", "g.mem", "h.mem", "g.flow"}),
    ],
)
def test_loops_run_at_what_their_comments_call_the_limit(name: str, beats: int, slots: set[str]) -> None:
    """The slots that the comment names as the limit have work in every beat of the loop."""
    run = shipped(name).run(case=list(cases(name))[1])
    loop = run.account.section("loop")
    assert loop.beats == beats
    assert {slot.slot for slot in run.account.slots if slot.used == loop.bundles} >= slots


def test_fifteen_products_a_sample_leave_one_place_of_sixteen() -> None:
    run = shipped("sections").run(case="first-block")
    loop = run.account.section("loop")
    used = {slot.slot: slot.used for slot in run.account.slots}
    assert (used["g.mul"], used["h.mul"]) == (loop.bundles, loop.bundles * 7 // 8)


def test_the_divider_and_the_squares_fill_the_calculating_unit() -> None:
    """36 operations of one beat, and a root and a quotient that keep the unit for 16 and 12, are the 64 of a pass."""
    kernel = shipped("crest")
    core, program = kernel.core, kernel.kernel.program
    start, end = program.labels["loop"], program.labels["finish"]
    loop = [i for bundle in program.bundles if start <= bundle.address < end for i in bundle.instructions]
    operations = [i.operation.name for i in loop if core.slots[i.slot].name == "g.calc"]
    busy = next(slot.busy for slot in core.slots if slot.name == "g.calc")
    assert (busy["fsqrt.s"], busy["float_divide"]) == (16, 12)
    costs = [{"fsqrt.s": 16, "fdiv.s": 12}.get(name, 1) for name in operations]
    assert sum(costs) == kernel.run(case="silence").account.section("loop").beats == 64


@pytest.mark.parametrize(
    ("name", "case", "cycles"),
    [
        ("lowpass", "block-0", 8 * 256 + 11),
        ("sections", "first-block", 8 * 300 + 24),
        ("checksum", "radio", 127 + 17),
        ("checksum", "check-value", 18),
        ("crest", "damaged-tooth", 64 * 64 + 50),
    ],
)
def test_cycles(name: str, case: str, cycles: int) -> None:
    assert shipped(name).run(case=case).cycles == cycles


@pytest.mark.parametrize("name", ["lowpass", "sections", "crest"])
def test_nothing_is_read_while_a_result_for_it_is_in_flight(name: str) -> None:
    kernel = shipped(name)
    strict = load_kernel(kernel.kernel.path, kernel.core.name, {"issue.early": "reject"})
    for case in list(cases(name))[:3]:
        assert strict.run(case=case).ok


def inputs_of(run: KernelRun, kernel: LoadedKernel) -> dict[str, Any]:
    everything = run.setup.arrays | run.setup.values
    return {name: everything[name] for name in interface_of(kernel.kernel).inputs}


@pytest.mark.parametrize(
    ("name", "sizes"),
    [("lowpass", {"n": 24}), ("sections", {"n": 9}), ("checksum", {"n": 76}), ("crest", {"windows": 2})],
)
def test_an_interrupt_at_any_cycle_changes_no_result(name: str, sizes: dict[str, int], long: bool) -> None:
    """Every cycle with --long, else every fifth."""
    kernel = shipped(name)
    plain = kernel.run(given=sizes)
    inputs = inputs_of(plain, kernel)
    served = 0
    for cycle in range(0, plain.cycles, 1 if long else 5):
        run = kernel.run(given=inputs, interrupt_at=cycle)
        assert run.matches, f"interrupt at {cycle}"
        assert run.bundles == plain.bundles
        served += run.stalls["interrupt"] > 0
    assert served > plain.cycles // (2 if long else 10)


# Worked by hand, beside the references.


def test_lowpass_passes_a_constant_and_saturates() -> None:
    """The taps add up to one exactly."""
    for level in (1, -1, 12345, -32768, 32767):
        assert set(shipped("lowpass").run(x=np.full(40, level, np.int16)).outputs["y"]) == {level}
    extremes = {shipped("lowpass").run(case=f"saturates-{end}").outputs["y"][0] for end in ("high", "low")}
    assert extremes == {32767, -32768}


def test_lowpass_rounds_ties_up() -> None:
    """Tap 4 is 164: 4096 at the sample that meets it gives 20.5, and -4096 gives -20.5."""
    x = np.zeros(40, np.int16)
    x[28] = 4096
    assert shipped("lowpass").run(x=x).outputs["y"][0] == 21
    assert shipped("lowpass").run(x=-x).outputs["y"][0] == -20


def test_lowpass_block_by_block_is_the_lowpass_of_the_whole() -> None:
    stream = np.random.default_rng(5).integers(-32768, 32767, 32 + 96, np.int16, endpoint=True)
    whole = shipped("lowpass").run(x=stream).outputs["y"]
    blocks = [shipped("lowpass").run(x=stream[k : k + 32 + 24]).outputs["y"] for k in range(0, 96, 24)]
    assert np.array_equal(np.concatenate(blocks), whole)


def test_sections_block_by_block_are_the_sections_of_the_whole() -> None:
    x = np.random.default_rng(6).integers(-(2**31), 2**31, 60).astype(np.int32)
    whole = shipped("sections").run(x=x, state=np.zeros(8, np.int32))
    state, parts = np.zeros(8, np.int32), []
    for first, last in ((0, 3), (3, 10), (10, 60)):
        run = shipped("sections").run(x=x[first:last], state=state)
        state = run.outputs["state"]
        parts.append(run.outputs["y"])
    assert np.array_equal(np.concatenate(parts), whole.outputs["y"])
    assert np.array_equal(state, whole.outputs["state"])


def test_sections_saturate() -> None:
    """Full scale in, with the phase of the impulse response in reverse, would come out above full scale."""
    impulse = np.zeros(400, np.int32)
    impulse[0] = 2**30
    response = shipped("sections").run(x=impulse, state=np.zeros(8, np.int32)).outputs["y"]
    worst = np.where(response[::-1] < 0, -(2**31), 2**31 - 1).astype(np.int32)
    y = shipped("sections").run(x=worst, state=np.zeros(8, np.int32)).outputs["y"]
    assert y.max() == 2**31 - 1


def test_sections_with_any_other_table(tmp_path: Path) -> None:
    """The shipped table has a 0 where any number may stand, and smaller sums than the comment allows."""
    folder = tmp_path / "sections"
    shutil.copytree(programs_folder() / "sections", folder)
    random = np.random.default_rng(8)
    for _ in range(4):
        rows = random.uniform(-1, 1, (3, 5)) * [1, 1, 1, 1.2, 0.5]
        rows[0] *= 7.99 / np.abs(rows[0]).sum()
        np.save(folder / "coefficients.npy", np.rint(rows * 2**29).astype(np.int32).ravel())
        kernel = load_kernel(str(folder / "sections.vliw"))
        x = random.integers(-(2**31), 2**31, 25).astype(np.int32)
        state = random.integers(-(2**31), 2**31, 8).astype(np.int32)
        run = kernel.run(x=x, state=state)
        assert run.ok, run.verdict
        assert len(set(run.outputs["y"])) > 10


def test_crest_of_signals_whose_crest_is_known() -> None:
    """A square wave has 1, a single knock in n samples the root of n, silence 0."""
    x = np.zeros((3, 32), np.float32)
    x[0] = np.tile([3, -3], 16)
    x[1, 17] = -8
    run = shipped("crest").run(x=x.ravel())
    assert list(run.outputs["rms"]) == [3, np.sqrt(np.float32(2)), 0]
    assert list(run.outputs["crest"]) == [1, np.float32(8) / np.sqrt(np.float32(2)), 0]


@pytest.mark.parametrize(
    ("name", "inputs"),
    [
        ("lowpass", {"x": np.zeros(32 + 12, np.int16)}),
        ("lowpass", {"x": np.zeros(32, np.int16)}),
        ("sections", {"x": np.zeros(2, np.int32), "state": np.zeros(8, np.int32)}),
        ("checksum", {"x": np.zeros(4097, np.uint8)}),
    ],
)
def test_what_the_schedules_cannot_do_is_refused(name: str, inputs: dict[str, np.ndarray]) -> None:
    with pytest.raises(VliwsimError) as caught:
        shipped(name).run(**inputs)
    assert [p.name for p in caught.value.problems] == ["needs-violated"]


def test_crest_takes_whole_windows() -> None:
    with pytest.raises(VliwsimError):
        shipped("crest").run(x=np.zeros(40, np.float32))
