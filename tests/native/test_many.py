"""Many cases at once equal the same cases one by one."""

from __future__ import annotations

import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from vliwsim.kernel import many as many_module
from vliwsim.kernel.loaded import load_kernel
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import InterfaceError

ROOT = Path(__file__).parents[2]
KERNEL = """
kernel pick
core   {core}
given  x : i16[n] at g10
{header}
returns y : i32 in g11
start:
{code}
"""


def kernel(tmp_path: Path, code: str, header: str = "", core: str = "pair7") -> object:
    path = tmp_path / "pick.vliw"
    path.write_text(KERNEL.format(core=core, header=header, code=code))
    return load_kernel(str(path))


@pytest.fixture(scope="module", autouse=True)
def own_folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))
        yield


@pytest.mark.parametrize("length", [4, 64])
def test_energy_of_many_frames(length: int) -> None:
    energy = load_kernel("energy")
    x = np.random.default_rng(5).integers(-3000, 3000, (5000, length)).astype(np.int16)
    done: list[int] = []
    many = energy.run_many({"x": x}, progress=done.append)
    assert many.ok
    assert (many.outputs["total"] == (x.astype(np.int64) ** 2).sum(axis=1)).all()
    assert set(many.cycles.tolist()) == {energy.run(x=x[0]).cycles} == {length // 4 + 9}
    assert done[-1] == len(x)


def test_cases_that_take_different_ways(tmp_path: Path) -> None:
    """A loop as long as its datum says, and a case that reads beyond its array."""
    one = kernel(
        tmp_path,
        "@0 lh g2, [g10] ; li g11, 0\n@3 li g5, 0\n"
        "loop:\n@0 count g2, loop\n@1 add g11, g11, 3\n@3 li g5, 0\n"
        "finish:\n@0 lb g4, [g10 + g11]\n halt",
    )
    x = np.arange(60, dtype=np.int16)[:, None].repeat(40, axis=1)
    many = one.run_many({"x": x})  # type: ignore[attr-defined]
    for case, row in enumerate(x):
        run = one.run(x=row, reference=False)  # type: ignore[attr-defined]
        assert many.cycles[case] == run.cycles
        assert (case in many.exceptions) == (not run.ok)
        if run.reason == "halt":
            assert many.outputs["y"][case] == run.outputs["y"]
    assert 0 < len(many.exceptions) < len(x)


@pytest.mark.parametrize(
    ("arrays", "name"),
    [
        ({"x": np.zeros(4, np.int16)}, "case-count"),
        ({"x": np.zeros((2, 4, 1), np.int16)}, "array-shape"),
        ([], "case-count"),
        ([{"x": np.zeros(4, np.int16)}, 5], "case-type"),
        ([{"x": np.zeros(4, np.int16)}, {"x": np.zeros(5, np.int16)}], "needs-violated"),
        ([{"x": np.zeros(4, np.int16)}, {"x": [1, 2, 3, 70000]}], "value-range"),
        ([{"x": np.zeros(4, np.int16)}, {"y": [1, 2, 3, 4]}], "unknown-input"),
        ({"x": np.zeros((0, 4), np.int16)}, "case-count"),
        ({}, "case-count"),
        ({"x": np.zeros((2, 3), np.int16)}, "needs-violated"),
    ],
)
def test_what_is_refused(arrays: object, name: str) -> None:
    with pytest.raises(InterfaceError) as refused:
        load_kernel("energy").run_many(arrays)  # type: ignore[arg-type]
    assert name in [p.name for p in refused.value.problems]


KERNELS = [
    ("energy", None), ("lowpass", None), ("sections", None), ("crest", None), ("checksum", None), ("peak", None),
    ("window_scale", None), ("calibrate", None), ("calibrate", "lone4"), ("weighted_sum/plain", None),
    ("weighted_sum/unrolled", None),
]  # fmt: skip


def sums(runs: list[KernelRun]) -> tuple[object, ...]:
    """The accounts of runs added up: bundles, stalls, drain, and bundles, passes of each section."""
    sections: dict[str, list[int]] = {}
    for section in (section for run in runs for section in run.account.sections):
        total = sections.setdefault(section.label, [0, 0])
        total[0] += section.bundles
        total[1] += section.passes
    stalls = {cause: sum(run.stalls[cause] for run in runs) for cause in runs[0].stalls}
    return sum(run.bundles for run in runs), stalls, sum(run.drain for run in runs), sections


@pytest.mark.parametrize(("name", "core"), KERNELS)
def test_the_cases_of_a_kernel_of_any_size(name: str, core: str | None, monkeypatch: pytest.MonkeyPatch) -> None:
    """Sizes, scalars and arrays all differ: outputs, cycles and the whole account are those of single runs."""
    path = f"{ROOT}/programs/{name}.vliw" if "/" in name else name
    kernel = load_kernel(path, core=core)
    cases = [c for c in kernel.cases().values() if sum(np.size(v) for v in c.values()) < 600][:24]
    runs = [kernel.run(given=case, reference=False) for case in cases]
    monkeypatch.setattr(many_module, "simulate", lambda *_, **__: pytest.fail("given to the stepper"))
    many = kernel.run_many(dict(case) for case in cases)
    assert many.ok
    assert many.cycles.tolist() == [run.cycles for run in runs]
    for output, values in many.outputs.items():
        for got, run in zip(values, runs, strict=True):
            np.testing.assert_array_equal(got, run.outputs[output])
    account = many.account
    sections = {section.label: [section.bundles, section.passes] for section in account.sections}
    assert (account.bundles, dict(account.stalls), account.drain, sections) == sums(runs)


def test_scalars_and_arrays_that_change_differ_by_case() -> None:
    sections, random = load_kernel("sections"), np.random.default_rng(8)
    x = random.integers(-(2**30), 2**30, (40, 9)).astype(np.int32)
    state = random.integers(-(2**30), 2**30, (40, 8)).astype(np.int32)
    many = sections.run_many({"x": x, "state": state})
    peak = load_kernel("peak")
    frames = random.integers(-900, 900, (40, 16)).astype(np.int16)
    numbers = {"first": np.arange(40) * 16, "peak": random.integers(0, 1200, 40), "position": np.arange(40)}
    many_peaks = peak.run_many({"x": frames, **numbers})
    for k in range(40):
        one = sections.run(x=x[k], state=state[k], reference=False)
        assert one == {name: many.outputs[name][k] for name in ("state", "y")}
        other = peak.run(x=frames[k], **{n: int(v[k]) for n, v in numbers.items()}, reference=False)  # type: ignore[arg-type]
        assert other == {name: int(many_peaks.outputs[name][k]) for name in ("peak", "position")}


def test_what_is_the_same_for_all_is_given_once() -> None:
    frame, gains = np.arange(16, dtype=np.int16) * 100, np.array([3, 0, 15, 3, 1])
    window_scale = load_kernel("window_scale")
    many = window_scale.run_many({"x": frame, "gain": gains})
    for got, gain in zip(many.outputs["y"], gains.tolist(), strict=True):
        assert window_scale.run(x=frame, gain=gain) == got


def test_packed_and_float_kernels_in_bulk() -> None:
    crest, x = load_kernel("crest"), np.random.default_rng(4).normal(size=(300, 64)).astype(np.float32)
    many = crest.run_many({"x": x})
    for k in (0, 150, 299):
        assert crest.run(x=x[k], reference=False) == {name: many.outputs[name][k] for name in ("rms", "crest")}
    floats = np.linspace(-1.2, 1.2, 80).reshape(2, 40)
    lowpass = load_kernel("lowpass")
    assert lowpass.run(x=floats[1]) == lowpass.run_many({"x": floats}).outputs["y"][1]


def test_cases_are_taken_from_a_generator_a_few_at_a_time() -> None:
    ahead, done = [0], [0]

    def cases() -> Iterator[dict[str, np.ndarray]]:
        for k in range(20_000):
            ahead[0] = max(ahead[0], k - done[0])
            yield {"x": np.full(4, k % 100, np.int16)}

    def note(count: int) -> None:
        done[0] = count

    many = load_kernel("energy").run_many(cases(), progress=note)
    assert (np.asarray(many.outputs["total"]) == 4 * (np.arange(20_000) % 100) ** 2).all()
    assert done[0] == 20_000
    assert ahead[0] <= 8 * 2048


def test_a_stop_keeps_the_cases_until_then() -> None:
    x = np.arange(40_000, dtype=np.int16)[:, None].repeat(4, axis=1)
    many = load_kernel("energy").run_many({"x": x}, progress=lambda done: done > 5000)
    count = len(many.cycles)
    assert many.stopped
    assert 5000 < count < 40_000
    assert (np.asarray(many.outputs["total"]) == (4 * x[:count, 0].astype(np.int64) ** 2).astype(np.int32)).all()


def test_a_case_is_stopped_in_its_midst(tmp_path: Path) -> None:
    path = tmp_path / "wait.vliw"
    path.write_text(ENDLESS)
    seen: list[int] = []
    begun = time.monotonic()

    def look(done: int) -> bool:
        seen.append(done)
        return len(seen) > 2

    many = load_kernel(str(path)).run_many([{"x": 1}, {"x": 2}], limit=1 << 50, progress=look)
    assert many.stopped
    assert len(many.cycles) == 0
    assert time.monotonic() - begun < 60


def test_more_cycles_than_the_limit_are_no_result(tmp_path: Path) -> None:
    path = tmp_path / "wait.vliw"
    path.write_text(ENDLESS.replace("jump again", "count g1, again"))
    counts = [5, 100_000, 70]
    many = load_kernel(str(path)).run_many([{"x": x} for x in counts], limit=1000)
    assert many.finished.tolist() == [True, False, True]
    assert many.exceptions[1].reason == "limit"
    one = load_kernel(str(path)).run(x=70)
    assert (many.cycles[2], many.outputs["y"].tolist()) == (one.cycles, [0, 0, 0])  # type: ignore[union-attr]
    assert many.account.cycles == one.cycles + load_kernel(str(path)).run(x=5).cycles


ENDLESS = """
kernel wait
core   pair7
given  x : i32 in g1
returns y : i32 in g2
again:
@0 jump again
@1 li g2, 0
@3 idle
finish:
@0 halt
"""
