"""Whole runs: what comes out, what it cost, what was illegal, and how that is said."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import vliwsim
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.problems import InterfaceError, OptionError, ReferenceFailure, VliwsimError

from .sources import DOUBLE, REFERENCES, SUM, write

KEYS = [
    "kernel", "core", "sizes", "case", "cycles", "bundles", "stalls", "drain", "budget", "within_budget", "code_bytes",
    "matches", "outputs", "diagnostics",
]  # fmt: skip


def run(
    folder: Path, source: str, *, core: str | None = None, changes: dict[str, object] | None = None, **more: object
) -> KernelRun:
    path = write(folder, source)
    return vliwsim.load_kernel(str(path), core=core, changes=changes).run(**more)  # type: ignore[arg-type]


def adds_up(one: KernelRun) -> bool:
    account = one.account
    placed = sum(s.cycles for s in account.sections) + account.stalled
    return one.cycles == one.bundles + sum(one.stalls.values()) + one.drain == placed


def test_a_right_run(tmp_path: Path) -> None:
    one = run(tmp_path, SUM, x=[5, -7, 100])
    assert one.outputs == {"sum": 98}
    assert one.matches is True
    assert one.ok
    assert one.legal
    assert (one.cycles, one.bundles, one.drain, one.budget) == (17, 17, 0, 17)
    assert one.verdict == "total on pair7, n = 3: right, legal, on budget."
    assert [(s.label, s.bundles, s.passes, s.beats) for s in one.account.sections] == [
        ("start", 1, 1, 1),
        ("loop", 15, 3, 5),
        ("finish", 1, 1, 1),
    ]
    assert [(s.slot, s.used) for s in one.account.busiest] == [("g.sum", 3), ("g.mem", 3), ("g.flow", 3)]
    assert adds_up(one)


CUT = """
kernel total
core pair7
given n : i32 in g16
returns sum : i32 in g1
start:
@0 li g1, 0
loop:
@0 count g16, loop ; add g1, g1, 1
tail:
@5 idle
finish:
@0 halt
"""


def test_passes_of_an_idle_section_that_a_branch_cuts_short(tmp_path: Path) -> None:
    # By hand: 10 bundles of loop; behind 9 of them 3 beats of tail (pair7's branch latency 4), behind the last all 6.
    one = run(tmp_path, CUT, n=9, reference=False)
    costs = [(s.label, s.bundles, s.passes, s.whole) for s in one.account.sections]
    assert costs == [("start", 1, 1, True), ("loop", 10, 10, True), ("tail", 33, 10, False), ("finish", 1, 1, True)]
    assert one.outputs == {"sum": 10}
    assert adds_up(one)


def test_arrays_come_back_in_their_type(tmp_path: Path) -> None:
    one = run(tmp_path, DOUBLE, x=np.array([1, -2, 16384], ">i4"))
    y = one.outputs["y"]
    assert isinstance(y, np.ndarray)
    assert y.dtype == np.int16
    assert y.tolist() == [2, -4, -32768]


def test_q15_and_f32_outputs(tmp_path: Path) -> None:
    source = SUM.replace("returns sum   : i32", "returns sum   : q15")
    one = run(tmp_path, source, x=[30000, 10000], reference=False)
    assert one.outputs["sum"] == 40000 - 65536  # the low 16 bits
    source = SUM.replace("returns sum   : i32", "returns sum   : f32")
    one = run(tmp_path, source, x=[0x3F80], reference=False)
    assert one.outputs["sum"] == np.uint32(0x3F80).view(np.float32)


def test_a_wrong_run_says_where(tmp_path: Path) -> None:
    one = run(tmp_path, DOUBLE.replace("add g3, g2, g2", "add g3, g2, 5"), x=[5, 6, 7])
    difference = one.differences["y"]
    assert difference is not None
    # 10, 11, 12 for 10, 12, 14: within 1 lsb lets the second pass
    assert (difference.index, difference.got, difference.expected) == (2, 12, 14)
    assert (difference.differing, difference.size, difference.distance) == (1, 3, 2)
    assert one.matches is False
    assert not one.ok
    assert "wrong, legal" in one.verdict


def test_within_lets_small_differences_pass_and_says_so(tmp_path: Path) -> None:
    one = run(tmp_path, DOUBLE.replace("add g3, g2, g2", "add g3, g2, 5"), x=[5, 6, 4])
    assert one.outputs["y"].tolist() == [10, 11, 9]  # type: ignore[union-attr]
    assert one.matches
    assert one.verdict == "double on pair7, n = 3: right (within tolerance: y), legal."


def test_over_budget(tmp_path: Path) -> None:
    one = run(tmp_path, SUM.replace("5 * n + 2", "4 * n"), x=[1, 2])
    assert one.matches
    assert one.account.within_budget is False
    assert not one.ok
    assert one.verdict.endswith("right, legal, 4 cycles over budget.")


def test_interrupt_service_is_not_in_the_budget(tmp_path: Path) -> None:
    one = run(tmp_path, SUM, x=[1, 2, 3], interrupt_at=6)
    assert one.stalls["interrupt"] == 40
    assert one.ok
    assert adds_up(one)


def test_no_reference_is_not_compared(tmp_path: Path) -> None:
    path = write(tmp_path, SUM)
    (tmp_path / "reference.py").unlink()
    one = vliwsim.load_kernel(str(path)).run(x=[1])
    assert one.matches is None
    assert one.ok
    assert "not compared" in one.verdict


def test_an_undefined_output_is_an_error_that_names_the_element(tmp_path: Path) -> None:
    one = run(tmp_path, DOUBLE.replace("= n - 1", "= n - 3"), x=[1, 2, 3, 4, 5])
    assert [p.name for p in one.problems] == ["undefined-output"]
    assert one.problems[0].found == "y[3] is undefined, and 1 more of 5 elements"
    difference = one.differences["y"]
    assert difference is not None
    assert (difference.index, difference.got, difference.expected) == (3, None, 8)
    assert not one.ok


def test_a_hazard_is_said_in_the_words_of_the_source(tmp_path: Path) -> None:
    source = SUM.replace("@4 add g4, g4, g2", "@3 addi g2, g4, 1\n@4 add g4, g4, g2").replace(
        "addi g2, g4, 1", "add g2, g4, 1"
    )
    one = run(tmp_path, source, x=[1, 2])
    assert one.reason == "hazard"
    assert not one.legal
    assert str(one.problems[0]) == "\n".join(
        [
            f"{tmp_path / 'total.vliw'}:12:4  lands-twice  (illegal)",
            "    @0 lh g2, [g10 then +2]",
            "       ^",
            "  found    two results reach g2, at loop@4 in cycle 5: line 12, sent @0, 4 beats before; "
            "line 14, sent @3, 1 beat before",
            "  allowed  one result a register a beat",
            "  try      line 14 at @4",
        ]
    )
    assert one.outputs == {}
    assert one.matches is False
    assert one.cycles == 5
    assert one.verdict == "total on pair7, n = 2: illegal after 5 cycles."


def test_a_read_past_an_array_names_the_array(tmp_path: Path) -> None:
    one = run(tmp_path, SUM.replace("= n - 1", "= n"), x=[1, 2])
    (found,) = one.problems
    assert found.name == "out-of-array"
    assert "x is 4 bytes at 0x40, so this reaches 2 past its end" in found.found


def test_a_run_that_never_halts_is_given_up(tmp_path: Path) -> None:
    one = run(
        tmp_path, SUM.replace("count g16, loop", "jump loop").replace("g10 then +2", "g10 + 0"), x=[1], limit=1000
    )
    assert (one.reason, one.cycles) == ("limit", 1000)
    assert [p.name for p in one.problems] == ["cycle-limit"]
    assert not one.ok
    assert adds_up(one)


@pytest.mark.parametrize("core", ["pair7", "lone4", "lone2", "ring16"])
def test_accounts_add_up_on_every_core(core: str, tmp_path: Path) -> None:
    one = run(
        tmp_path, SUM.replace("g16", "g12"), core=core, changes={"branch.latency": 4, "latency.load": 4}, x=[1, 2, 3, 4]
    )
    assert one.reason == "halt"
    assert one.outputs["sum"] == 10
    assert adds_up(one)


def test_json_has_the_agreed_shape(tmp_path: Path) -> None:
    data = run(tmp_path, SUM, x=[1, 2]).as_json()
    assert list(data) == KEYS
    assert list(data["stalls"]) == ["bank", "wait", "straddle", "penalty", "hold", "fresh", "interrupt"]  # type: ignore[call-overload]
    assert data["outputs"] == {"sum": {"matches": True, "first_difference": None}}
    assert json.loads(json.dumps(data, allow_nan=False)) == data


def test_trace_is_a_record_a_beat(tmp_path: Path) -> None:
    one = run(tmp_path, SUM, x=[1, 2], trace=True)
    assert one.trace is not None
    assert [r.cycle for r in one.trace] == list(range(one.bundles))
    plain = run(tmp_path, SUM, x=[1, 2])
    assert plain.trace is None
    assert plain.as_json() == one.as_json()


def test_tracing_does_not_outlive_the_run(tmp_path: Path) -> None:
    kernel = vliwsim.load_kernel(str(write(tmp_path, SUM)))
    assert kernel.run(x=[1], trace=True).trace
    assert kernel.run(x=[1]).trace is None


class TestFromPython:
    def test_three_lines(self) -> None:
        kernel = vliwsim.load_kernel("energy")
        result = kernel.run(x=np.ones(64, np.int16))
        assert result.outputs["total"] == 64
        assert result.cycles == 64 // 4 + 9

    def test_it_shows_itself(self, tmp_path: Path) -> None:
        kernel = vliwsim.load_kernel(str(write(tmp_path, SUM)))
        assert repr(kernel) == "<kernel total on pair7: (x: i16[n]) gives (sum: i32)>"
        assert repr(kernel.run(x=[1])) == "<total on pair7, n = 1: right, legal, on budget; 7 cycles>"

    def test_cases_and_a_case(self, tmp_path: Path) -> None:
        kernel = vliwsim.load_kernel(str(write(tmp_path, SUM)))
        cases = kernel.cases()
        assert "alternating" in cases
        assert kernel.run(**cases["alternating"]).ok
        assert kernel.run(case="alternating").case == "alternating"

    def test_changes_and_core_objects(self, tmp_path: Path) -> None:
        path = str(write(tmp_path, SUM))
        core = vliwsim.load_core("pair7", {"latency.load": 2})
        assert vliwsim.load_kernel(path, core).core.latency.of_class("load") == 2
        both = vliwsim.load_kernel(path, core, {"latency.multiply": 9}).core
        assert (both.latency.of_class("load"), both.latency.of_class("multiply")) == (2, 9)

    def test_an_input_named_like_an_option(self, tmp_path: Path) -> None:
        source = SUM.replace("x     : i16[n]", "limit : i16[n]")
        path = write(tmp_path, source, REFERENCES["total"].replace("(x)", "(limit)").replace("x.", "limit."))
        assert vliwsim.load_kernel(str(path)).run(given={"limit": [3, 4]}).outputs == {"sum": 7}

    @pytest.mark.parametrize("path", ["nowhere.vliw", "../energy", "energy*", "", "programs", "energy/reference"])
    def test_no_such_kernel(self, path: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.chdir(tmp_path)
        with pytest.raises(VliwsimError):
            vliwsim.load_kernel(path)

    @pytest.mark.parametrize("path", ["energy", "programs/energy", "programs/energy/energy.vliw", "energy/energy.vliw"])
    def test_shipped_kernels_are_found_anywhere(
        self, path: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
    ) -> None:
        monkeypatch.chdir(tmp_path)
        assert vliwsim.load_kernel(path).name == "energy"

    def test_a_folder_of_several_schedules_asks_which(self, tmp_path: Path) -> None:
        write(tmp_path, SUM)
        write(tmp_path, DOUBLE)
        with pytest.raises(VliwsimError, match=r"holds 2 sources double\.vliw total\.vliw"):
            vliwsim.load_kernel(str(tmp_path))

    def test_errors_are_exceptions_that_say_all(self, tmp_path: Path) -> None:
        kernel = vliwsim.load_kernel(str(write(tmp_path, SUM, "def total(x):\n    return 1 / 0")))
        with pytest.raises(InterfaceError):
            kernel.run(x=[1.5])
        with pytest.raises(ReferenceFailure, match="ZeroDivisionError while calling total"):
            kernel.run(x=[1])

    def test_a_bad_case_is_named(self, tmp_path: Path) -> None:
        code = REFERENCES["total"] + "def cases():\n    yield 'gale', {'x': [1.5]}\n"
        with pytest.raises(InterfaceError, match=r"x holds floats \(float64\) \(case gale\)"):
            vliwsim.load_kernel(str(write(tmp_path, SUM, code))).run()

    def test_public_names(self) -> None:
        assert set(vliwsim.__all__) <= set(dir(vliwsim))
        for name in [*vliwsim.__all__, "__version__"]:
            assert getattr(vliwsim, name)
        with pytest.raises(AttributeError, match="nothing_like_it"):
            vliwsim.nothing_like_it  # noqa: B018


class TestOtherMachines:
    def test_big_endian_memory_gives_the_same_numbers(self, tmp_path: Path) -> None:
        one = run(tmp_path, DOUBLE, changes={"memory.endianness": "big"}, x=[1, -2, 300])
        assert one.outputs["y"].tolist() == [2, -4, 600]  # type: ignore[union-attr]
        assert one.ok

    def test_waiting_for_memory_is_in_the_account(self, tmp_path: Path) -> None:
        changes = {"memory.wait.slow.start": 0, "memory.wait.slow.bytes": 4096, "memory.wait.slow.cycles": 2}
        one = run(tmp_path, SUM, changes=changes, x=[1, 2, 3])
        assert one.stalls["wait"] == 6
        assert one.outputs == {"sum": 6}
        assert (one.cycles, one.account.within_budget) == (23, False)
        assert adds_up(one)

    def test_drain_is_placed_with_the_halt(self, tmp_path: Path) -> None:
        one = run(tmp_path, SUM.replace("@0 halt", "@0 lh g5, [g10 - 2]\n@0 halt"), x=[1])
        assert one.drain == 3  # the load takes 4 beats, the halt's own not counted
        assert one.account.section("finish").drain == 3
        assert adds_up(one)

    def test_a_run_can_be_stopped_and_accounts_for_what_it_did(self, tmp_path: Path) -> None:
        source = SUM.replace("count g16, loop", "jump loop").replace("g10 then +2", "g10 + 0")
        kernel = vliwsim.load_kernel(str(write(tmp_path, source))).kernel
        seen: list[int] = []

        def watch(cycle: int) -> bool:
            seen.append(cycle)
            return len(seen) == 3

        one = run_kernel(kernel, {"x": [1]}, watch=watch)
        assert one.reason == "stopped"
        assert one.cycles == seen[-1]
        assert one.matches is None
        assert not one.ok
        assert not one.problems
        assert adds_up(one)


class TestFormulas:
    @pytest.mark.parametrize(
        ("line", "name"),
        [
            ("budget  n < 3", "budget-value"),
            ("budget  1 // (n - 2)", "no-value"),
            ("within", "within-value"),
        ],
    )
    def test_bad_values_are_told(self, line: str, name: str, tmp_path: Path) -> None:
        if line == "within":
            source = SUM.replace("in g4", "in g4 within n / 3")
        else:
            source = SUM.replace("budget  5 * n + 2", line)
        with pytest.raises(VliwsimError) as caught:
            run(tmp_path, source, x=[1, 2])
        assert [p.name for p in caught.value.problems] == [name]

    def test_a_budget_need_not_be_whole(self, tmp_path: Path) -> None:
        one = run(tmp_path, SUM.replace("5 * n + 2", "5.25 * n + 1.25"), x=[1, 2])
        assert one.budget == 11.75
        assert one.verdict.endswith("right, legal, 0.25 cycles over budget.")


def test_every_engine_gives_the_same_run() -> None:
    kernel = vliwsim.load_kernel("energy")
    runs = [kernel.run(n=4096, engine=engine) for engine in ("auto", "step", "native")]
    assert all(run.ok and run.account == runs[0].account for run in runs)
    with pytest.raises(OptionError, match="one of auto, step, native"):
        kernel.run(n=4096, engine="fastest")
