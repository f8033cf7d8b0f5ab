"""A recording frame by frame equals its frames one by one: outputs, state, account, the first that is wrong."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from vliwsim.kernel import frames as frames_module
from vliwsim.kernel.frames_run import FramesRun
from vliwsim.kernel.loaded import LoadedKernel, load_kernel
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import InterfaceError

from .sources import SUM, write

RANDOM = np.random.default_rng(20)
X16 = RANDOM.integers(-3000, 3000, 3000).astype(np.int16)
X32 = RANDOM.integers(-(2**29), 2**29, 700).astype(np.int32)


@pytest.fixture(scope="module", autouse=True)
def own_folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))
        yield


def one_by_one(kernel: LoadedKernel, inputs: list[dict[str, Any]], state: dict[str, Any]) -> list[KernelRun]:
    """Each frame by the stepper, with what the one before left."""
    runs = []
    for own in inputs:
        runs.append(kernel.run(given={**own, **state}, reference=False))
        state = {name: runs[-1].outputs[name] for name in state}
    return runs


def same(found: FramesRun, runs: list[KernelRun]) -> None:
    """Everything that single runs say of the whole."""
    assert (found.reason, found.frames, found.wanted) == ("halt", len(runs), len(runs))
    assert found.cycles.tolist() == [run.cycles for run in runs]
    assert found.spread["median"] == np.median([run.cycles for run in runs])
    items = {item.name: item for item in found.kernel.items}
    for name, array in found.outputs.items():
        singles = [np.atleast_1d(run.outputs[name]) for run in runs]
        joined = np.concatenate(singles) if items[name].kind == "returns" else np.array([r.outputs[name] for r in runs])
        np.testing.assert_array_equal(array, joined)
    account = found.account
    assert account.bundles == sum(run.bundles for run in runs)
    assert dict(account.stalls) == {cause: sum(run.stalls[cause] for run in runs) for cause in account.stalls}
    assert account.drain == sum(run.drain for run in runs)
    for section in account.sections:
        parts = [part for run in runs for part in run.account.sections if part.label == section.label]
        assert (section.bundles, section.passes) == (sum(p.bundles for p in parts), sum(p.passes for p in parts))
    if account.budget is not None:
        assert account.budget == sum(run.budget or 0 for run in runs)


ENGINES = ["step", "auto", "native"]


@pytest.mark.parametrize("engine", ENGINES)
def test_a_filter_whose_frames_overlap(engine: str) -> None:
    lowpass = load_kernel("lowpass")
    run = lowpass.run_frames({"x": X16[:1000]}, n=64, hop=64, lead=32, engine=engine)
    padded = np.concatenate([np.zeros(32, np.int16), X16])
    same(run, one_by_one(lowpass, [{"x": padded[64 * k : 64 * k + 96]} for k in range(15)], {}))
    assert run.ok
    assert run.matches is True
    assert run.signals[0].rest(run.wanted) == 1000 - 15 * 64
    assert run.verdict == "lowpass on pair7, n = 64, 15 frames: right, legal, on budget."


@pytest.mark.parametrize("engine", ENGINES)
def test_an_array_that_changes_goes_from_frame_to_frame(engine: str) -> None:
    sections, state = load_kernel("sections"), {"state": np.arange(8, dtype=np.int32)}
    run = sections.run_frames({"x": X32}, n=20, engine=engine, given=state)
    same(run, one_by_one(sections, [{"x": X32[20 * k : 20 * k + 20]} for k in range(35)], state))
    assert run.matches
    assert run.outputs["state"].shape == (35, 8)
    assert run.outputs["y"].shape == (700,)


@pytest.mark.parametrize("engine", ENGINES)
def test_values_that_change_and_needs_that_speak_of_them(engine: str) -> None:
    """``needs`` of peak speaks of what the frame before left: every frame is prepared by itself."""
    peak, state = load_kernel("peak"), {"peak": 3, "position": 9}
    run = peak.run_frames({"x": X16, "first": "100 + frame * n"}, n=24, engine=engine, given=state)
    inputs = [{"x": X16[24 * k : 24 * k + 24], "first": 100 + 24 * k} for k in range(125)]
    same(run, one_by_one(peak, inputs, state))
    assert run.matches
    assert run.outputs["peak"][-1] == np.abs(X16).max()
    assert run.outputs["position"][-1] == 100 + np.abs(X16).argmax()


def test_frames_that_depend_on_nothing_and_undefined_bytes_on_the_way() -> None:
    energy = load_kernel("energy")
    run = energy.run_frames({"x": X16}, n=8, hop=4, engine="native")
    same(run, one_by_one(energy, [{"x": X16[4 * k : 4 * k + 8]} for k in range(749)], {}))
    assert run.matches
    assert [note.name for note in run.notes].count("undefined-read") > 0  # seen in the first frame


def test_an_interlocked_core_with_its_stalls() -> None:
    calibrate = load_kernel("calibrate", core="lone4")
    same_for_all = {"offset": -5, "gain": 20000}
    run = calibrate.run_frames({"x": X16}, n=32, engine="native", given=same_for_all)
    same(run, one_by_one(calibrate, [{"x": X16[32 * k : 32 * k + 32], **same_for_all} for k in range(93)], {}))
    assert run.account.stalled > 0


def test_a_value_a_frame_and_rows_of_a_matrix() -> None:
    window_scale, gains = load_kernel("window_scale"), np.arange(40) % 7
    rows = X16[:640].reshape(40, 16)
    run = window_scale.run_frames({"x": rows, "gain": gains}, engine="native")
    same(run, one_by_one(window_scale, [{"x": rows[k], "gain": gains[k]} for k in range(40)], {}))
    assert run.matches


@pytest.mark.parametrize(("length", "count"), [(7, 1), (8, 1), (9, 2), (16, 2), (17, 3)])
def test_padding_fills_up_the_last_frame(length: int, count: int) -> None:
    energy = load_kernel("energy")
    run = energy.run_frames({"x": X16[:length]}, n=8, pad=True)
    whole = np.zeros(8 * count, np.int64)
    whole[:length] = X16[:length]
    assert run.outputs["total"].tolist() == (whole.reshape(count, 8) ** 2).sum(axis=1).tolist()
    assert run.signals[0].rest(run.wanted) == length - 8 * count
    if length >= 8:
        without = energy.run_frames({"x": X16[:length]}, n=8)
        assert without.frames == length // 8
        assert without.signals[0].rest(without.wanted) == length % 8


def test_samples_between_frames_are_skipped() -> None:
    energy = load_kernel("energy")
    run = energy.run_frames({"x": X16}, n=4, hop=100, engine="native")
    assert run.frames == 30
    wanted = (X16.astype(np.int64).reshape(30, 100)[:, :4] ** 2).sum(axis=1)
    assert run.outputs["total"].tolist() == wanted.tolist()


def test_floats_are_scaled_and_what_saturates_is_counted_once() -> None:
    lowpass, floats = load_kernel("lowpass"), np.linspace(-1.1, 1.1, 1000)
    run = lowpass.run_frames({"x": floats}, n=8, hop=8, lead=32)
    raw = np.clip(np.rint(floats * 2**15), -(2**15), 2**15 - 1).astype(np.int16)
    again = lowpass.run_frames({"x": raw}, n=8, hop=8, lead=32)
    np.testing.assert_array_equal(run.outputs["y"], again.outputs["y"])
    saturated = int((np.abs(np.rint(floats * 2**15) + 0.5) > 2**15).sum())
    assert f"{saturated} of 1000 saturated" in next(n.found for n in run.notes if n.name == "scaled")


# Wrong, illegal, too slow

FAULTY = "import numpy as np\ndef total(x):\n    return int(x.astype(int).sum()) + (x[0] == 77)\n"


@pytest.mark.parametrize("engine", ENGINES)
def test_the_first_wrong_frame_and_how_many(tmp_path: Path, engine: str) -> None:
    total = load_kernel(str(write(tmp_path, SUM, FAULTY)))
    x = np.zeros(400, np.int16)
    x[[40, 44, 200]] = 77, 1000, 77
    run = total.run_frames({"x": x}, n=4, engine=engine)
    assert (run.wrong, run.first_wrong, run.matches, run.ok, run.frames) == (2, 10, False, False, 100)
    frame, difference = run.differences["sum"]
    assert (frame, difference.got, difference.expected) == (10, 77, 78)
    assert "2 wrong" in run.verdict


STATE = """
kernel  keep
core    pair7
given   x     : i16[4]   at g1
changes last  : i32      in g2
changes past  : i16[2]   at g3
returns y     : i32      in g4
start:
@0 lh g5, [g1]
@1 lh g6, [g3]
@2 lh g7, [g3 + 2]
@5 add g4, g2, g6
   sh g5, [g3 + 2]
@6 sh g7, [g3]
   add g2, g2, g5
   add g4, g4, g5
   halt
"""
KEEP = """
import numpy as np
def keep(x, last, past):
    past = past.copy()
    y = last + int(x[0]) + int(past[0])
    if x[0] == 5:
        past[0] = 99
    else:
        past[0] = past[1]
    past[1] = x[0]
    return {"last": last + int(x[0]), "past": past, "y": y}
"""


@pytest.mark.parametrize("engine", ENGINES)
def test_a_wrong_state_makes_no_later_frame_wrong(tmp_path: Path, engine: str) -> None:
    """Each frame is held against the reference with what the kernel itself left before."""
    keep = load_kernel(str(write(tmp_path, STATE, KEEP)))
    x = np.arange(400, dtype=np.int16).reshape(100, 4)
    x[60, 0] = 5
    run = keep.run_frames({"x": x}, engine=engine, last=1, past=[2, 3])
    assert (run.wrong, run.first_wrong) == (1, 60)
    assert run.differences["past"][1].index == 0
    same(run, one_by_one(keep, [{"x": row} for row in x], {"last": 1, "past": [2, 3]}))


REACH = """
kernel  reach
core    pair7
given   x     : i16[4]   at g1
changes last  : i32      in g2
returns y     : i32      in g4
start:
@0 lh g5, [g1]
@4 add g6, g1, g5
@5 lb g4, [g6]
   add g2, g2, g5
@6 halt
"""


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("changes", [True, False])
def test_a_hazard_names_its_frame(tmp_path: Path, engine: str, changes: bool) -> None:
    source = REACH if changes else REACH.replace("changes last  : i32      in g2", "given last : i32 in g2")
    reach = load_kernel(str(write(tmp_path, source, "def reach(x, last):\n    1 / 0\n")))
    x = np.zeros((300, 4), np.int16)
    x[:, 0] = np.arange(300) % 8
    x[211, 0] = 8  # the first byte behind the frame
    run = reach.run_frames({"x": x}, engine=engine, last=0, reference=False)
    assert (run.reason, run.frames, run.ok, run.legal) == ("hazard", 211, False, False)
    assert [p.name for p in run.problems] == ["out-of-array"]
    assert run.problems[0].found.startswith("frame 211: ")
    assert "illegal in frame 211" in run.verdict
    assert run.account.cycles == int(run.cycles.sum()) == 211 * reach.run(x=x[0], last=0, reference=False).cycles
    if changes:
        assert run.outputs["last"][-1] == int(x[:211, 0].sum())


@pytest.mark.parametrize("engine", ENGINES)
def test_an_undefined_output_ends_it(tmp_path: Path, engine: str) -> None:
    source = REACH.replace("i16[4]   at g1", "i16[4]   at g1 over 8").replace("lb g4", "lw g4")
    reach = load_kernel(str(write(tmp_path, source, "def reach(x, last):\n    1 / 0\n")))
    x = np.zeros((150, 4), np.int16)
    x[120, 0] = 8
    run = reach.run_frames({"x": x}, engine=engine, last=0, reference=False)
    assert (run.reason, run.frames, run.legal) == ("undefined", 120, False)
    assert run.problems[0].name == "undefined-output"
    assert run.account.cycles == int(run.cycles.sum())


def test_a_frame_over_its_budget(tmp_path: Path) -> None:
    source = SUM.replace("budget  5 * n + 2", "budget  5 * n + 2 - (x[0] == 3)")
    total = load_kernel(str(write(tmp_path, source)))
    x = np.zeros(400, np.int16)
    x[[100, 200]] = 3
    for engine in ENGINES:
        run = total.run_frames({"x": x}, n=4, engine=engine)
        assert (run.over, run.first_over, run.ok, run.matches) == (2, 25, False, True)
        assert "2 over budget" in run.verdict
        assert run.account.budget == 100 * 22 - 2


COUNT = """
kernel  count_down
core    pair7
given   more : i32 in g1
returns y    : i32 in g2
start:
@0 li g2, 0
loop:
@0 count g1, loop
@1 add g2, g2, 1
@3 idle
finish:
@0 halt
"""


def test_frames_of_many_lengths(tmp_path: Path) -> None:
    count_down = load_kernel(str(write(tmp_path, COUNT, "def count_down(more):\n    return more + 1\n")))
    more = np.random.default_rng(2).integers(0, 8, 301)
    more[:70] = 3
    run = count_down.run_frames({"more": more}, engine="native")
    same(run, one_by_one(count_down, [{"more": one} for one in more], {}))
    assert run.matches
    assert (run.spread["minimum"], run.spread["maximum"]) == (6, 34)


def test_a_frame_that_does_not_end(tmp_path: Path) -> None:
    total = load_kernel(str(write(tmp_path, SUM)))
    run = total.run_frames({"x": X16}, n=100, limit=400, engine="native")
    assert (run.reason, run.frames) == ("limit", 0)
    assert run.problems[0].name == "cycle-limit"


@pytest.mark.parametrize("reference", [True, False])
def test_a_stop_leaves_whole_frames(reference: bool) -> None:
    sections = load_kernel("sections")
    x = np.tile(X32, 20)
    run = sections.run_frames(
        {"x": x}, n=10, state=[0] * 8, engine="native", reference=reference, progress=lambda done: done >= 77
    )
    assert run.reason == "stopped"
    assert 77 <= run.frames < 1400
    assert len(run.outputs["y"]) == 10 * run.frames
    again = sections.run_frames({"x": x[: 10 * run.frames]}, n=10, state=[0] * 8, engine="native")
    assert again.account == run.account or again.account.cycles == run.account.cycles
    np.testing.assert_array_equal(again.outputs["y"], run.outputs["y"])
    assert run.account.cycles == int(run.cycles.sum())


def test_what_compiled_code_gives_back_the_stepper_takes(monkeypatch: pytest.MonkeyPatch) -> None:
    """As if every seventh frame were given back."""
    from vliwsim.native.batch import Results

    real = Results.finished.fget  # type: ignore[attr-defined]
    alone: list[int] = []
    monkeypatch.setattr(Results, "finished", property(lambda self: real(self) & (self.value(0) % 7 > 0)))
    step = frames_module.simulate

    def counted(*arguments: Any, **more: Any) -> Any:
        alone.append(1)
        return step(*arguments, **more)

    monkeypatch.setattr(frames_module, "simulate", counted)
    total, x = load_kernel("energy"), X16[:800]
    run = total.run_frames({"x": x}, n=4, engine="native")
    totals = (x.astype(np.int64).reshape(200, 4) ** 2).sum(axis=1)
    assert run.outputs["total"].tolist() == totals.tolist()
    assert len(alone) == 1 + int((totals[1:] % 7 == 0).sum())
    assert run.account.cycles == int(run.cycles.sum()) == 200 * 10


def test_outputs_may_be_taken_as_they_come() -> None:
    energy, taken = load_kernel("energy"), []
    run = energy.run_frames({"x": X16}, n=4, engine="native", take=lambda name, array: taken.append((name, array)))
    assert not run.outputs
    assert {name for name, _ in taken} == {"total"}
    whole = (X16.astype(np.int64).reshape(-1, 4) ** 2).sum(axis=1)
    assert np.concatenate([array for _, array in taken]).tolist() == whole.tolist()


REFUSED: list[tuple[str, dict[str, Any], dict[str, Any], str]] = [
    ("energy", {"x": X16}, {}, "frame-length"),
    ("energy", {"x": X16}, {"n": 0}, "frame-length"),
    ("energy", {"x": X16[:3]}, {"n": 4}, "frame-count"),
    ("energy", {}, {"n": 4, "x": X16[:4]}, "frame-count"),
    ("energy", {"x": X16}, {"n": 4, "x": X16[:4]}, "frame-input"),
    ("energy", {"z": X16}, {"n": 4}, "frame-input"),
    ("energy", {"x": "frame"}, {"n": 4}, "frame-input"),
    ("energy", {"x": X16.reshape(30, 10, 10)}, {"n": 4}, "frame-input"),
    ("energy", {"x": X16}, {"n": 4, "hop": 0}, "frame-step"),
    ("energy", {"x": X16}, {"n": 4, "lead": -1}, "frame-step"),
    ("energy", {"x": X16}, {"n": 4, "hop": {"y": 4}}, "frame-step"),
    ("energy", {"x": X16}, {"n": 5}, "needs-violated"),
    ("energy", {"x": X32}, {"n": 4}, "value-range"),
    ("sections", {"x": X32, "state": X32}, {"n": 4}, "frame-input"),
    ("sections", {"x": X32}, {"n": 4}, "missing-input"),
    ("window_scale", {"x": X16, "gain": np.arange(3)}, {"n": 16}, "frame-count"),
    ("window_scale", {"x": X16, "gain": "frame % 20"}, {"n": 16}, "needs-violated"),
    ("window_scale", {"x": X16, "gain": "1 / frame"}, {"n": 16}, "no-value"),
]


@pytest.mark.parametrize(("name", "frames", "options", "problem"), REFUSED)
def test_what_is_refused(name: str, frames: dict[str, Any], options: dict[str, Any], problem: str) -> None:
    with pytest.raises(InterfaceError) as refused:
        load_kernel(name).run_frames(frames, **options)
    assert problem in [p.name for p in refused.value.problems]


def test_a_bad_sample_is_called_by_its_number_before_anything_runs() -> None:
    x = np.zeros(2_000_000, np.int32)
    x[1_500_001] = 40_000
    with pytest.raises(InterfaceError, match=r"x\[1500001\] = 40000"):
        load_kernel("energy").run_frames({"x": x}, n=4)
    with pytest.raises(InterfaceError, match=r"x\[250000, 1\] = nan"):
        load_kernel("lowpass").run_frames({"x": with_nan((300_000, 40), (250_000, 1))})


def with_nan(shape: tuple[int, ...], place: tuple[int, ...]) -> np.ndarray:
    array = np.zeros(shape, np.float32)
    array[place] = np.nan
    return array
