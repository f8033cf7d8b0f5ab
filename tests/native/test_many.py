"""Many cases at once equal the same cases one by one."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from vliwsim.kernel.loaded import load_kernel
from vliwsim.problems import InterfaceError

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


@pytest.fixture(autouse=True)
def own_folder(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))


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
        ({"x": np.zeros(4, np.int16)}, "array-shape"),
        ({"x": np.zeros((0, 4), np.int16)}, "case-count"),
        ({}, "case-count"),
        ({"x": np.zeros((2, 3), np.int16)}, "needs-violated"),
    ],
)
def test_what_is_refused(arrays: dict[str, np.ndarray], name: str) -> None:
    with pytest.raises(InterfaceError) as refused:
        load_kernel("energy").run_many(arrays)
    assert name in [p.name for p in refused.value.problems]
