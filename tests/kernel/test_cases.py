"""Cases: the reference's own, generated ones, and which one a run takes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from vliwsim.kernel.binding import bind
from vliwsim.kernel.cases import PATTERNS, case_with, cases_of, find_case, generated_cases
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.reference import load_reference
from vliwsim.kernel.search import Search
from vliwsim.problems import InterfaceError, ReferenceFailure

from .sources import header

FRAME = "given x : i16[n] at g1\nreturns total : i32 in g2\nneeds n % 4 == 0 and n >= 4"
FILTER = """
    given   x     : q15[n]            at g1
    given   c     : q15[taps]         at g2
    given   down : i32               in g3
    returns y     : q15[n - taps + 1] at g4
    needs   taps >= 1 and n >= taps and 0 <= down and down < 16
"""


def by_name(interface: str) -> dict[str, dict[str, object]]:
    return {case.name: dict(case.inputs) for case in generated_cases(header(interface))}


def test_a_run_of_decent_size_comes_first() -> None:
    first = next(generated_cases(header(FRAME)))
    assert first.name == "random"
    assert first.inputs["n"] == 4096
    assert len(np.unique(first.inputs["x"])) > 3000


def test_all_patterns_and_the_smallest_sizes_are_there() -> None:
    cases = by_name(FRAME)
    assert list(cases) == [*PATTERNS, "smallest", "small-2", "small-3", "small-4"]
    assert [cases[name]["n"] for name in ("smallest", "small-2", "small-3", "small-4")] == [4, 8, 12, 16]
    medium = cases["zeros"]["n"]
    assert medium == 40
    assert np.all(cases["zeros"]["x"] == 0)  # type: ignore[operator]
    assert np.all(cases["highest"]["x"] == 32767)  # type: ignore[operator]
    assert np.all(cases["lowest"]["x"] == -32768)  # type: ignore[operator]
    assert list(cases["alternating"]["x"][:3]) == [32767, -32768, 32767]  # type: ignore[index]
    assert np.flatnonzero(cases["impulse-first"]["x"]).tolist() == [0]  # type: ignore[arg-type]
    assert np.flatnonzero(cases["impulse-last"]["x"]).tolist() == [medium - 1]


def test_odd_sizes_come_where_needs_allows_them() -> None:
    cases = by_name("given x : i16[n] at g1\nneeds n >= 3")
    assert cases["zeros"]["n"] == 37
    assert [cases[f"small-{k}"]["n"] for k in (2, 3)] == [4, 5]


def test_several_sizes_and_scalars_hold_together() -> None:
    kernel = header(FILTER)
    cases = list(generated_cases(kernel))
    assert len(cases) >= 10
    for case in cases:
        setup = bind(kernel, case.inputs)
        assert setup.area("y").bytes == 2 * (setup.sizes["n"] - setup.sizes["taps"] + 1)
    assert cases[0].inputs["n"] == 4096
    assert cases[0].inputs["taps"] == 32


def test_cases_are_the_same_every_time() -> None:
    one, other = by_name(FILTER), by_name(FILTER)
    assert list(one) == list(other)
    for name in one:
        for key, value in one[name].items():
            assert np.array_equal(value, other[name][key])  # type: ignore[arg-type]


def test_random_data_is_pinned() -> None:
    """A generator that gave other numbers on another day would make yesterday's findings unrepeatable."""
    first = next(generated_cases(header("given x : i16[n] at g1\nneeds n == 5")))
    assert list(first.inputs["x"]) == [-3431, -19322, 22034, -27480, 32617]


def test_large_arrays_shrink_to_what_memory_holds() -> None:
    kernel = header("given x : i32[32 * n] at g1\nneeds n >= 1")
    first = next(generated_cases(kernel))
    assert 400 < first.inputs["n"] < 512  # 65536 bytes are 512 × 32 words


@pytest.mark.parametrize("needs", ["n % 256 == 0 and n > 0", "n == 1000", "n > 700 and n % 7 == 3", "n == 9999"])
def test_sizes_far_from_zero_are_found(needs: str) -> None:
    assert next(generated_cases(header(f"given x : i16[n] at g1\nneeds {needs}")), None) is not None


def test_needs_about_elements_drops_the_cases_that_break_it() -> None:
    cases = by_name("given x : i16[n] at g1\nneeds n >= 1 and x[0] > 0")
    assert "highest" in cases
    assert "zeros" not in cases
    assert "lowest" not in cases


def test_impossible_needs_give_no_case() -> None:
    kernel = header("given x : i16[n] at g1\nneeds n > 3 and n < 3")
    assert list(generated_cases(kernel)) == []
    with pytest.raises(InterfaceError, match="no-case"):
        find_case(kernel, None, None)


def test_search_is_bounded() -> None:
    sizes = "\n".join(f"given x{k} : i8[n{k}] at g{k}" for k in range(6))
    kernel = header(f"{sizes}\nneeds n0 + n1 + n2 + n3 + n4 + n5 == 12345")
    assert Search(interface_of(kernel), {}).smallest(1) == []


def test_float_cases_stay_finite() -> None:
    for name, inputs in by_name("given x : f32[n] at g1\ngiven k : f32 in g2").items():
        assert np.isfinite(inputs["x"]).all(), name  # type: ignore[call-overload]


class TestOwnCases:
    def cases(self, folder: Path, code: str) -> list[str]:
        (folder / "reference.py").write_text(f"import numpy as np\ndef frame(x): return 0\n{code}")
        kernel = header(FRAME, path=folder / "frame.vliw")
        return [case.name for case in cases_of(kernel, load_reference(kernel))]

    def test_pairs_and_dicts(self, tmp_path: Path) -> None:
        assert self.cases(tmp_path, "def cases():\n yield 'calm', {'x': [0] * 4}\n yield 'storm', {}") == [
            "calm",
            "storm",
        ]
        assert self.cases(tmp_path, "def cases(): return {'calm': {'x': [0] * 4}}") == ["calm"]

    def test_generated_ones_may_be_kept(self, tmp_path: Path) -> None:
        code = "def cases(generated):\n list(generated)\n yield 'calm', {}\n yield from generated"
        assert self.cases(tmp_path, code) == ["calm", *by_name(FRAME)]

    def test_a_generated_case_can_be_named_beside_own_ones(self, tmp_path: Path) -> None:
        self.cases(tmp_path, "def cases(): return {'calm': {'x': [0] * 4}}")
        kernel = header(FRAME, path=tmp_path / "frame.vliw")
        reference = load_reference(kernel)
        assert find_case(kernel, reference, None).name == "calm"
        assert find_case(kernel, reference, "zeros").inputs["n"] == 40
        with pytest.raises(InterfaceError, match="has no case gale\n  allowed  calm"):
            find_case(kernel, reference, "gale")

    @pytest.mark.parametrize(
        ("code", "name", "says"),
        [
            ("def cases(): return 3", "reference-raised", "TypeError while calling cases"),
            ("def cases(): return ['ab']", "reference-cases", "gives str"),
            ("def cases(): return [('calm', [1])]", "reference-cases", "gives str, list"),
            ("def cases(): return [(3, {})]", "reference-cases", "gives int, dict"),
            ("def cases():\n yield 'a', {}\n yield 'a', {}", "reference-cases", "'a' twice"),
            (
                "def cases():\n yield 'a', {}\n raise OSError('gone')",
                "reference-raised",
                "OSError while calling cases: gone",
            ),
        ],
    )
    def test_bad_ones(self, code: str, name: str, says: str, tmp_path: Path) -> None:
        with pytest.raises(ReferenceFailure) as caught:
            self.cases(tmp_path, code)
        assert caught.value.problems[0].name == name
        assert says in caught.value.problems[0].found


class TestWhatARunTakes:
    def test_nothing_given_is_the_first_case(self) -> None:
        assert case_with(header(FRAME), None, None, {}).name == "random"

    def test_a_size_alone_is_random_data_of_that_size(self) -> None:
        case = case_with(header(FRAME), None, None, {"n": 12})
        assert (case.name, len(case.inputs["x"])) == ("random", 12)

    def test_a_size_that_needs_forbids_says_so(self) -> None:
        kernel = header(FRAME)
        with pytest.raises(InterfaceError, match="needs does not hold with n = 13"):
            bind(kernel, case_with(kernel, None, None, {"n": 13}).inputs)

    def test_arrays_are_all_given_or_missing(self) -> None:
        kernel = header(FILTER)
        with pytest.raises(InterfaceError, match="missing-input"):
            bind(kernel, case_with(kernel, None, None, {"x": [0.5]}).inputs)

    def test_given_values_go_on_top_of_a_named_case(self) -> None:
        case = case_with(header(FILTER), None, "zeros", {"down": 7})
        assert case.inputs["down"] == 7
        assert not np.any(case.inputs["x"])


def test_small_cases_differ_in_size() -> None:
    kernel = header("given x : i16[n] at g1\ngiven down : i32 in g2\nneeds n >= 2 and 0 <= down and down < 16")
    small = [case.inputs["n"] for case in generated_cases(kernel) if case.name.startswith("small")]
    assert small == [2, 3, 4, 5]
