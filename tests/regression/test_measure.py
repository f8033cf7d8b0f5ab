"""Interrupts, headroom, coverage, mutants, comparison, inputs by Hypothesis: held to what can be known otherwise."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner, Result
from hypothesis import HealthCheck, given, settings

import vliwsim
from tests.kernel.sources import DOUBLE, SUM, write
from vliwsim.faces.main import cli
from vliwsim.kernel.diagnose import where
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.saved_cases import save_case, saved_cases
from vliwsim.kernel.strategies import counterexample, inputs
from vliwsim.problems import InterfaceError
from vliwsim.program.kernel import Kernel
from vliwsim.regression.claims import Options
from vliwsim.regression.interrupts import inject
from vliwsim.regression.judge import Judge
from vliwsim.regression.legality import unsafe_bundles
from vliwsim.regression.measure import measured
from vliwsim.regression.mutants import mutants

PROGRAMS = Path(__file__).resolve().parents[2] / "programs"


def command(*arguments: object) -> Result:
    return CliRunner().invoke(cli, [str(a) for a in arguments], standalone_mode=False)


def measures(source: Path, **options: Any) -> dict[str, Any]:
    judge = Judge(str(source), None, Options(**options))
    return measured(judge, judge.cases)


# ------------------------------------------------------------------------------------------------------- interrupts


def index_of(kernel: Kernel, place: str) -> int:
    bundles = kernel.program.bundles
    return next(k for k, b in enumerate(bundles) for w in range(b.beats) if where(kernel, k, w) == place)


@pytest.mark.parametrize(
    ("name", "inputs"),
    [
        ("energy/energy.vliw", {"n": 40}),
        ("energy/energy.vliw", {"n": 4}),
        ("weighted_sum/unrolled.vliw", {"n": 48}),
        ("weighted_sum/plain.vliw", {"n": 12}),
        ("weighted_sum/straight.vliw", {}),
        ("calibrate/calibrate.vliw", {"n": 32}),
        ("window_scale/window_scale.vliw", {"n": 24}),
    ],
)
def test_every_bundle_where_an_interrupt_does_harm_is_one_that_the_check_calls_unsafe(
    name: str, inputs: dict[str, int]
) -> None:
    kernel = vliwsim.load_kernel(str(PROGRAMS / name))
    unsafe = unsafe_bundles(kernel.kernel)
    assert unsafe is not None
    found = inject(kernel.run(given=inputs, reference=False).setup, 100_000)
    assert found.tried
    assert {index_of(kernel.kernel, place) for place in found.unsafe} <= unsafe
    if not unsafe:
        assert not found.harms


def test_an_interrupt_at_every_cycle_against_one_run_each(tmp_path: Path) -> None:
    """What :func:`inject` finds with snapshots, whole runs with ``interrupt_at`` find too."""
    kernel = vliwsim.load_kernel(str(PROGRAMS / "energy" / "energy.vliw"))
    whole = kernel.run(n=16)
    harmful = {harm.cycle for harm in inject(whole.setup, 100_000).harms}
    assert harmful == {2, 3}
    for cycle in range(7):
        run = kernel.run(n=16, interrupt_at=cycle)
        assert run.matches is (cycle not in harmful)


def test_run_with_interrupts_on_the_command_line() -> None:
    result = command("run", PROGRAMS / "energy", "--give", "n=16", "--interrupt-at", "every", "--json")
    found = json.loads(result.output)["interrupts"]
    assert result.return_value == 1
    assert found["unsafe"] == ["start@2", "start@3"]
    assert [harm["cycle"] for harm in found["harms"]] == [2, 3]
    safe = command("run", PROGRAMS / "weighted_sum" / "plain.vliw", "--give", "n=16", "--interrupt-at", "every")
    assert safe.return_value == 0
    assert "change nothing" in safe.output
    assert "longest stretch without a safe point: 3 cycles" in safe.output


# ---------------------------------------------------------------------------------------------- headroom and coverage


def test_saturations_against_numpy(tmp_path: Path) -> None:
    """``sub.h2.sat`` of calibrate: one execution a word of two samples; it saturates if either does."""
    kernel = vliwsim.load_kernel(str(PROGRAMS / "calibrate" / "calibrate.vliw"))
    random = np.random.default_rng(3)
    x = random.integers(-32768, 32767, 64, np.int16, endpoint=True)
    run = kernel.run(x=x, offset=9000, gain=20000)
    from vliwsim.regression.measure import Measures

    seen = Measures(kernel.kernel)
    seen.add(run)
    rows = seen.headroom()["saturations"]
    exact = x.astype(int) - 9000
    words = ((exact < -32768) | (exact > 32767)).reshape(-1, 2).any(axis=1)
    subtractions = [row for row in rows if row["operation"] == "sub.h2.sat"]
    assert sum(row["done"] for row in subtractions) == 32
    assert sum(row["saturated"] for row in subtractions) == int(words.sum()) > 0
    assert sum(row["saturated"] for row in rows if row["operation"].startswith("mul")) == 0
    output = next(row for row in seen.headroom()["rows"] if row["name"] == "output y")
    assert (output["low"], output["high"]) == (int(run.outputs["y"].min()), int(run.outputs["y"].max()))  # type: ignore[union-attr]


def test_ranges_and_free_bits(tmp_path: Path) -> None:
    code = "def double(x):\n    return x * 2\ndef cases():\n    yield 'a', {'x': [100, -128, 3]}\n"
    rows = {row["name"]: row for row in measures(write(tmp_path, DOUBLE, code), headroom=True)["headroom"]["rows"]}
    assert rows["output y"] == {"name": "output y", "type": "i16", "low": -256, "high": 200, "says": "7 bits free"}
    assert (rows["g2"]["low"], rows["g2"]["high"]) == (-128, 100)
    assert (rows["g3"]["low"], rows["g3"]["high"], rows["g3"]["says"]) == (-256, 200, "23 bits free")


def test_distance_to_an_ideal(tmp_path: Path) -> None:
    code = (
        "def double(x):\n    return x * 2\ndef double_ideal(x):\n    return 2.0 * x + 0.5\n"
        "def cases():\n    yield 'a', {'x': [30, -40]}\n"
    )
    found = measures(write(tmp_path, DOUBLE, code), headroom=True)["headroom"]["ideal"]
    snr = 10 * np.log10((60.5**2 + 79.5**2) / (2 * 0.5**2))
    assert found == [{"output": "y", "says": f"{snr:.1f} dB above its difference from the ideal"}]


def test_what_was_never_seen(tmp_path: Path) -> None:
    code = "def total(x):\n    return int(x.astype(int).sum())\ndef cases():\n    yield 'one', {'x': [5]}\n"
    source = write(tmp_path, SUM, code)
    assert measures(source, coverage=True)["coverage"]["missing"] == [
        {"line": 13, "operation": "count", "says": "branch never taken"}
    ]
    source = write(tmp_path, SUM, code.replace("[5]", "[5, 6]"))
    covered = measures(source, coverage=True)["coverage"]
    assert (covered["missing"], covered["seen"]) == ([], covered["all"])


def test_mutants_are_found_and_those_that_are_not_are_listed(tmp_path: Path) -> None:
    strong = "def total(x):\n    return int(x.astype(int).sum())\n"
    weak = strong + "def cases():\n    yield 'none', {'x': [0]}\n"
    judged = [Judge(str(write(tmp_path, SUM, code)), None, Options(mutants=100)).verdict() for code in (strong, weak)]
    good, bad = (verdict.measures["mutants"] for verdict in judged)
    made = [mutant for mutant in mutants(assemble_source(str(tmp_path / "total.vliw")))]
    assert good["made"] == bad["made"] <= len(made)
    assert good["refused"] + good["found"] + len(good["survivors"]) == good["made"]
    assert len(bad["survivors"]) > len(good["survivors"])
    lost = {"line": 14, "says": "g4 → g5"}
    assert lost in bad["survivors"]  # a zero that is added to nothing is no different
    assert lost not in good["survivors"]
    assert all(mutant.text != (tmp_path / "total.vliw").read_text() for mutant in made)


# ------------------------------------------------------------------------------------------------------- comparison


def test_four_schedules_on_one_screen() -> None:
    result = command("compare", PROGRAMS / "weighted_sum")
    assert result.return_value == 0
    lines = result.output.splitlines()
    assert lines[0].startswith("Equal on ")
    assert len(lines) < 40
    cells = {line[:12].strip(): line[12:].split() for line in lines if line.strip()}
    assert [name for name in cells if name in ("code bytes", "cycles")] == ["cycles", "code bytes"]
    text = " ".join(next(line for line in lines if line.startswith("cycles")).split())
    assert text == "cycles 2 n + 2 – 11/16 n + 2 1/4 n + 8"


def test_a_difference_between_kernels(tmp_path: Path) -> None:
    one, other = tmp_path / "one", tmp_path / "other"
    for folder in (one, other):
        folder.mkdir()
        write(folder, DOUBLE)
    (other / "double.vliw").write_text(DOUBLE.replace("add g3, g2, g2", "sll g3, g2, 2"))
    result = command("compare", one / "double.vliw", other / "double.vliw", "--json")
    data = json.loads(result.output)
    assert result.return_value == 1
    assert [kernel["equal"] for kernel in data["kernels"]] == [None, False] or data["kernels"][1]["equal"] is False
    assert "y[0] is" in data["kernels"][1]["first_difference"]
    assert data["kernels"][0]["formula"] == data["kernels"][1]["formula"] == "6 n + 2"
    write(other, SUM)
    refused = command("compare", one / "double.vliw", other / "total.vliw")
    assert {p.name for p in refused.exception.problems} == {"other-interface"}


def test_cycles_that_depend_on_where_arrays_stand(tmp_path: Path) -> None:
    """Without their banks, the two streams of the plain schedule meet in a bank at some distances."""
    text = (PROGRAMS / "weighted_sum" / "plain.vliw").read_text()
    free = text.replace("align 8 bank 0", "align 8").replace("align 8 bank 2", "align 8").replace("2 * n + 2", "3 * n")
    for name, source in (("bound", text), ("free", free)):
        (tmp_path / f"{name}.vliw").write_text(source)
    (tmp_path / "reference.py").write_text((PROGRAMS / "weighted_sum" / "reference.py").read_text())
    data = json.loads(command("compare", tmp_path, "--sizes", "16,32,48,64", "--json").output)
    bound, free_ = data["kernels"]
    assert bound["moved"] == []
    assert free_["moved"]


# ------------------------------------------------------------------------------------------------------- strategies

KERNELS = {name: vliwsim.load_kernel(str(PROGRAMS / name / f"{name}.vliw")) for name in ("calibrate", "peak")}


@pytest.mark.parametrize("name", KERNELS)
def test_inputs_fit_and_kernels_hold_on_them(name: str) -> None:
    kernel, sizes = KERNELS[name], set()

    @settings(max_examples=30, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
    @given(inputs(kernel))
    def holds(given: dict[str, Any]) -> None:
        run = kernel.run(given=given)
        sizes.add(run.sizes["n"])
        assert run.ok

    holds()
    assert len(sizes) > 2


def test_a_failure_shrinks_and_is_kept_as_a_case(tmp_path: Path) -> None:
    source = write(tmp_path, DOUBLE.replace("@0 lh g2", "@0 lhu g2").replace("add g3, g2, g2", "add.sat g3, g2, g2"))
    source.write_text(DOUBLE.replace("add g3, g2, g2", "min g3, g2, 20000").replace("sh g3", "sh g2"))
    (tmp_path / "reference.py").write_text("import numpy as np\ndef double(x):\n    return np.minimum(x, 20000)\n")
    kernel = vliwsim.load_kernel(str(source))
    found = counterexample(kernel, examples=300)
    assert found is not None
    assert found["n"] == 1
    (value,) = found["x"].tolist()
    assert value > 20001  # within 1 lsb is right
    assert counterexample(kernel, examples=300)["x"].tolist() == [value]  # type: ignore[index]
    path = save_case(kernel.kernel, "clipped", found)
    assert json.loads(path.read_text()) == {"kernel": "double", "inputs": {"n": 1, "x": [value]}}
    with pytest.raises(InterfaceError, match="there already"):
        save_case(kernel.kernel, "clipped", found)
    assert [name for name, _ in saved_cases(kernel.kernel)] == ["clipped"]
    assert "clipped" in kernel.cases()
    assert kernel.run(case="clipped").matches is False
    assert counterexample(vliwsim.load_kernel(str(PROGRAMS / "energy")), examples=20) is None


@pytest.mark.parametrize(
    "text", ["", "[]", '{"kernel": "double"}', '{"kernel": "double", "inputs": 3}', "\x00", "[" * 9999]
)
def test_a_file_that_is_no_case_is_named(text: str, tmp_path: Path) -> None:
    source = write(tmp_path, DOUBLE)
    (tmp_path / "cases").mkdir()
    (tmp_path / "cases" / "odd.json").write_text(text)
    with pytest.raises(InterfaceError, match=r"odd\.json is no case"):
        vliwsim.load_kernel(str(source)).cases()


@pytest.mark.parametrize("name", ["", "../out", "a/b", ".hidden", "x" * 200])
def test_a_case_stays_in_its_folder(name: str, tmp_path: Path) -> None:
    kernel = vliwsim.load_kernel(str(write(tmp_path, DOUBLE)))
    with pytest.raises(InterfaceError, match="case called"):
        save_case(kernel.kernel, name, {"x": [1]})
