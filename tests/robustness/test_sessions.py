"""Several cores in one session: what is made for one may not leak into another."""

from __future__ import annotations

from pathlib import Path

from tests.robustness.rows_operations import CORE, DOES, PEAK
from vliwsim import load_kernel
from vliwsim.kernel.loaded import LoadedKernel

SOURCE = """\
kernel probe
core mine
given x : i32 in g2
given z : i32 in g3
returns y : i32 in g4
start:
@0 li g5, 9
loop:
@0 peak.fade g4, g2, g3 ; count g5, loop
finish:
@6 halt
"""


def kernel(folder: Path, does: str) -> LoadedKernel:
    """A kernel of one operation, peak.fade, that means ``does`` there."""
    folder.mkdir()
    (folder / "mine.toml").write_text(PEAK.replace(DOES, f'"{does}"').split("examples")[0])
    (folder / "core.toml").write_text('name = "mine"\n' + CORE)
    (folder / "probe.vliw").write_text(SOURCE)
    return load_kernel(str(folder / "probe.vliw"), str(folder / "core.toml"))


def test_operations_of_one_name_keep_their_meanings(tmp_path: Path) -> None:
    """Both meanings are compiled before either runs; the hot loop inlines their texts, which it finds by file name."""
    kernels = {name: kernel(tmp_path / name, f"d = wrap(a {name} b)") for name in "+-&"}
    for _ in range(2):
        for each in kernels.values():
            each.kernel.operations.by_name["peak.fade"].compiled()
        assert {name: each.run(x=10, z=3).outputs["y"] for name, each in kernels.items()} == {"+": 13, "-": 7, "&": 2}
