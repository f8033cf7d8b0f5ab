"""The shipped kernels, right and on budget on every core they name; and the counts that their schedules promise.

The schedules in ``forty/`` are the weighted sum of 40 samples on a core that only tests use: how much one operation a
bundle, loads together, filled delay slots, packed halves and software pipelining cost. Common practice, no source.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from vliwsim.description.places import programs_folder
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.loaded import LoadedKernel, load_kernel
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import VliwsimError

FORTY = Path(__file__).parent / "forty"
FORTY_CORE = Path(__file__).parents[1] / "description" / "cores" / "forty.toml"
PROGRAMS = sorted(programs_folder().glob("*/*.vliw"))


def title(path: Path) -> str:
    return f"{path.parent.name}-{path.stem}"


@cache
def loaded(path: Path, core: str | None = None) -> LoadedKernel:
    return load_kernel(str(path), core)


def shipped(name: str, core: str | None = None) -> LoadedKernel:
    """``weighted_sum`` or ``weighted_sum/plain``."""
    folder, _, schedule = name.partition("/")
    return loaded(programs_folder() / folder / f"{schedule or folder}.vliw", core)


def assert_adds_up(run: KernelRun) -> None:
    assert run.cycles == run.bundles + sum(run.stalls.values()) + run.drain
    assert sum(section.cycles for section in run.account.sections) == run.bundles + run.drain


def on_all_cores(path: Path) -> list[LoadedKernel]:
    first = loaded(path)
    return [first, *(loaded(path, core) for core in first.kernel.cores_named if core != first.core.name)]


EXACT = ("energy", "weighted_sum", "peak", "window_scale", "calibrate")
"""Folders of kernels whose cycles depend on nothing but the size: their budgets are exact."""
SCHEDULES = ("weighted_sum", "weighted_sum/plain", "weighted_sum/unrolled", "weighted_sum/straight")


@pytest.mark.parametrize("path", PROGRAMS, ids=title)
def test_every_shipped_kernel_is_right_legal_and_within_budget_on_all_its_cases_and_cores(path: Path) -> None:
    kernels = on_all_cores(path)
    assert [k.core.name for k in kernels] == list(kernels[0].kernel.cores_named)
    for kernel in kernels:
        assert kernel.reference is not None
        assert kernel.kernel.budget is not None, "a shipped kernel says what it may cost"
        cases = kernel.cases()
        assert len(cases) >= 5
        for name, inputs in cases.items():
            run = kernel.run(given=inputs)
            assert run.ok, f"{run.verdict} case {name}\n" + "\n".join(str(p) for p in run.problems)
            assert run.matches is True
            assert run.account.within_budget is True
            assert_adds_up(run)
            if path.parent.name in EXACT:
                assert run.cycles == run.budget


# The weighted sum of forty samples. Common practice, no source.


@pytest.mark.parametrize(
    ("schedule", "passes", "a_pass"),
    [("one_a_bundle", 40, 16), ("both_loads", 40, 15), ("filled", 40, 8), ("packed", 20, 8)],
)
def test_forty_samples_in_a_loop(schedule: str, passes: int, a_pass: int) -> None:
    run = loaded(FORTY / f"{schedule}.vliw", str(FORTY_CORE)).run(case="forty")
    assert run.ok
    loop = run.account.section("loop")
    assert (loop.passes, loop.beats, loop.cycles) == (passes, a_pass, passes * a_pass)
    assert loop.cycles == {"one_a_bundle": 640, "both_loads": 600, "filled": 320, "packed": 160}[schedule]
    assert sum(run.stalls.values()) == 0


def test_one_operation_a_bundle_means_one() -> None:
    kernel = loaded(FORTY / "one_a_bundle.vliw", str(FORTY_CORE)).kernel
    assert max(len(bundle.instructions) for bundle in kernel.program.bundles) == 1


def test_forty_samples_software_pipelined() -> None:
    kernel = loaded(FORTY / "pipelined.vliw", str(FORTY_CORE))
    run = kernel.run(case="forty")
    assert run.ok
    costs = [(s.label, s.bundles, s.passes, s.beats) for s in run.account.sections]
    assert costs == [("start", 7, 1, 7), ("loop", 20, 20, 1), ("finish", 1, 1, 1)]
    assert (run.bundles, run.drain, run.cycles) == (28, 0, 28)
    used = {slot.slot: slot.used for slot in run.account.slots}
    assert used == dict.fromkeys(used, 20), "every slot works in every beat of the loop"
    assert len(used) == 8


@pytest.mark.parametrize("path", sorted(FORTY.glob("*.vliw")), ids=title)
def test_the_schedules_of_forty_are_right_for_other_sizes_too(path: Path) -> None:
    kernel = loaded(path, str(FORTY_CORE))
    for inputs in kernel.cases().values():
        run = kernel.run(given=inputs)
        assert run.ok, run.verdict
        assert run.cycles == run.budget
        assert_adds_up(run)


# What the shipped schedules promise.


def test_energy_of_4096_samples_takes_1032_bundles_and_one_cycle_of_drain() -> None:
    run = shipped("energy").run(n=4096)
    assert run.ok
    assert (run.bundles, sum(run.stalls.values()), run.drain, run.cycles) == (1032, 0, 1, 1033)


@pytest.mark.parametrize("n", [4, 8, 12])
def test_energy_of_short_frames(n: int) -> None:
    run = shipped("energy").run(n=n)
    assert run.ok
    assert (run.bundles, run.drain) == (n // 4 + 8, 1)


@pytest.mark.parametrize(
    ("schedule", "cycles"),
    [("weighted_sum", 24), ("weighted_sum/straight", 24), ("weighted_sum/unrolled", 46), ("weighted_sum/plain", 130)],
)
def test_weighted_sum_of_64_samples_by_schedule(schedule: str, cycles: int) -> None:
    kernel = shipped(schedule)
    assert kernel.name == "weighted_sum"
    run = kernel.run(case="ring-down")
    assert run.ok
    assert (run.cycles, run.drain) == (cycles, 0)


def test_all_schedules_of_the_weighted_sum_give_the_same_on_the_same_input() -> None:
    random = np.random.default_rng(64)
    x, w = (random.integers(-32768, 32767, 64, np.int16, endpoint=True) for _ in "xw")
    runs = [shipped(s).run(x=x, w=w) for s in SCHEDULES]
    assert len({int(run.outputs["total"]) for run in runs}) == 1


@pytest.mark.parametrize(
    ("name", "slots", "samples", "beats"),
    [
        ("weighted_sum", ("g.mem", "h.mem", "g.mul", "h.mul"), 4, 1),
        ("peak", ("g.sum", "g.mul", "g.mem", "g.flow", "h.sum", "h.mul", "h.mem"), 8, 2),
        ("window_scale", ("g.mem", "h.mem"), 8, 3),
        ("calibrate", ("g.mem", "g.mul"), 16, 8),
    ],
)
def test_loops_run_at_what_their_comments_call_the_limit(
    name: str, slots: tuple[str, ...], samples: int, beats: int
) -> None:
    """The slots that the comment names as the limit have work in every beat of the loop."""
    run = shipped(name).run(case=next(iter(shipped(name).cases())))
    loop = run.account.section("loop")
    used = {slot.slot for slot in run.account.slots if slot.used == loop.bundles}
    assert used >= set(slots)
    assert loop.beats == beats
    assert loop.bundles <= beats * run.sizes["n"] // samples


def test_calibrate_reads_nothing_early_and_weighted_sum_lives_on_it() -> None:
    path = programs_folder() / "calibrate" / "calibrate.vliw"
    kernel = load_kernel(str(path), "pair7", {"issue.early": "reject"})
    assert all(kernel.run(given=inputs).ok for inputs in kernel.cases().values())
    strict = load_kernel(
        str(programs_folder() / "weighted_sum" / "weighted_sum.vliw"), "pair7", {"issue.early": "reject"}
    )
    run = strict.run(case="ring-down")
    assert [p.name for p in run.problems] == ["early-read"]


@pytest.mark.parametrize("core", ["pair7", "lone4"])
@pytest.mark.parametrize(
    "changes",
    [
        {"latency.load": 2, "latency.multiply": 1},
        {"latency.load": 3, "latency.multiply": 2},
        {"latency.load": 4, "latency.multiply": 3},
        {"branch.latency": 1},
        {"branch.latency": 3},
        {"branch.latency": 8},
    ],
    ids=str,
)
def test_calibrate_follows_the_latencies_its_comment_allows(core: str, changes: dict[str, int]) -> None:
    kernel = load_kernel(str(programs_folder() / "calibrate" / "calibrate.vliw"), core, changes)
    for case in ("gravity", "clipped"):
        run = kernel.run(case=case)
        assert run.matches
        assert run.legal
        if core == "pair7":
            assert sum(run.stalls.values()) == 0


def test_calibrate_never_holds_on_lone4() -> None:
    run = shipped("calibrate", "lone4").run(case="gravity")
    assert {cause: n for cause, n in run.stalls.items() if n} == {"penalty": 2 * (512 // 16 - 1)}
    assert run.cycles == run.budget


INTERRUPTED = {
    "weighted_sum": 40,
    "weighted_sum/plain": 24,
    "peak": 40,
    "window_scale": 40,
}
"""Kernels that say or imply that interrupts may come at any time, and a size to try them all at."""


@pytest.mark.parametrize(("name", "n"), INTERRUPTED.items())
def test_an_interrupt_at_any_cycle_changes_no_result(name: str, n: int) -> None:
    kernel = shipped(name)
    plain = kernel.run(n=n)
    inputs = plain.setup.arrays | plain.setup.values
    inputs = {name: inputs[name] for name in interface_of(kernel.kernel).inputs}
    served = 0
    for cycle in range(plain.cycles):
        run = kernel.run(given=inputs, interrupt_at=cycle)
        assert run.matches, f"interrupt at {cycle}"
        assert run.bundles == plain.bundles
        served += run.stalls["interrupt"] > 0
    assert served > plain.cycles // 8


def test_an_interrupt_at_any_cycle_leaves_calibrate_right_on_both_cores() -> None:
    for core in ("pair7", "lone4"):
        kernel = shipped("calibrate", core)
        inputs = kernel.cases()["offset0-gain16384"]
        for cycle in range(kernel.run(given=inputs).cycles):
            assert kernel.run(given=inputs, interrupt_at=cycle).matches, f"interrupt at {cycle}"


def test_straight_and_unrolled_need_interrupts_off_as_their_comments_say() -> None:
    for name, cycle in (("weighted_sum/straight", 8), ("weighted_sum/unrolled", 5)):
        assert shipped(name).run(case="ring-down", interrupt_at=cycle).matches is False


# Worked by hand, beside the references.


def test_peak_of_a_frame_worked_by_hand() -> None:
    x = np.array([3, -7, 5, 7, 0, -7, 2, 1], np.int16)
    run = shipped("peak").run(x=x, first=100, peak=6, position=42)
    assert (run.outputs["peak"], run.outputs["position"]) == (7, 101)
    run = shipped("peak").run(x=x, first=100, peak=7, position=42)
    assert (run.outputs["peak"], run.outputs["position"]) == (7, 42)


def test_peak_over_three_frames_is_the_peak_of_their_sum() -> None:
    x = np.random.default_rng(7).integers(-30000, 30000, 96).astype(np.int16)
    state = {"peak": 0, "position": 0}
    for first in range(0, 96, 32):
        run = shipped("peak").run(x=x[first : first + 32], first=first, **state)
        state = {name: int(run.outputs[name]) for name in state}
    magnitude = np.abs(x.astype(np.int32))
    assert state == {"peak": magnitude.max(), "position": magnitude.argmax()}


def test_window_of_a_constant_is_the_window() -> None:
    """A raised cosine is 0 at its ends, a half at its quarters and as good as 1 in its middle."""
    y = shipped("window_scale").run(x=np.full(32, 0x4000, np.int16), gain=0).outputs["y"]
    assert y[0] == 0
    assert list(y[[8, 24]]) == [8192, 8192]
    assert y[16] == 16384
    assert list(y[1:16]) == list(y[:16:-1])


def test_window_scale_saturates_before_it_windows() -> None:
    y = shipped("window_scale").run(x=np.full(16, 0x4000, np.int16), gain=3).outputs["y"]
    assert y[8] == 32766  # 32767 × 32767 / 32768, rounded


def test_calibrate_worked_by_hand() -> None:
    x = np.zeros(16, np.int16)
    x[:4] = (100, 101, -32768, 32767)
    for core in ("pair7", "lone4"):
        y = shipped("calibrate", core).run(x=x, offset=100, gain=0x4000).outputs["y"]
        assert list(y[:5]) == [0, 1, -16384, 16334, -50]  # halves: 0.5 up to 1, -32868 saturates, 16333.5 up


@pytest.mark.parametrize(
    ("name", "n", "scalars"),
    [
        ("weighted_sum", 6, {}),
        ("weighted_sum/straight", 60, {}),
        ("peak", 12, {"first": 0, "peak": 0, "position": 0}),
        ("peak", 16, {"first": 0, "peak": 32769, "position": 0}),
        ("window_scale", 8, {"gain": 0}),
        ("window_scale", 16, {"gain": 16}),
        ("calibrate", 24, {"offset": 0, "gain": 0}),
    ],
)
def test_what_the_schedules_cannot_do_is_refused(name: str, n: int, scalars: dict[str, int]) -> None:
    x = np.zeros(n, np.int16)
    arrays = {"x": x, "w": x} if name.startswith("weighted") else {"x": x}
    with pytest.raises(VliwsimError) as caught:
        shipped(name).run(**arrays, **scalars)
    assert [p.name for p in caught.value.problems] == ["needs-violated"]
