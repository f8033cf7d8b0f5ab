"""Binding of arrays, scalars and sizes to an interface."""

from __future__ import annotations

from fractions import Fraction
from pathlib import Path

import attrs
import numpy as np
import pytest

from vliwsim.kernel.binding import bind
from vliwsim.kernel.placement import GAP
from vliwsim.problems import InterfaceError

from .sources import TINY, header

SIGNAL = """
    given   x    : i16[n] at g1 over 8
    given   gain : q15    in g2
    returns y    : i32[n] at g3
    needs   n % 2 == 0 and n >= 2
"""
WINDOW = """
    given   x : q15[n]            at g1
    given   c : q31[taps]         at g2
    returns y : i32[n - taps + 1] at g3
"""
EVERY = """
    given a : i8[n]  at g1
    given b : u8[n]  at g2
    given c : u16[n] at g3
    given d : u32[n] at g4
    given e : f32[n] at g5
    given f : u8     in g6
    given g : f32    in g7
"""
GOOD = {name: np.zeros(2, int) for name in "abcd"} | {"e": np.zeros(2), "f": 0, "g": 0.0}


class Unreadable:
    """Looks like an array and is none."""

    def __array__(self, *args: object, **more: object) -> np.ndarray:
        raise ValueError("not today")


BAD = [
    (SIGNAL, {}, {"missing-input"}),
    (SIGNAL, {"x": [1, 2]}, {"missing-input"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "X": 3}, {"unknown-input"}),
    (SIGNAL, {"gain": 1, "signal": 3}, {"unknown-input", "missing-input"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "y": [0, 0]}, {"not-an-input"}),
    (SIGNAL, {"x": [1, 40000], "gain": 1}, {"value-range"}),
    (SIGNAL, {"x": [1, -(2**80)], "gain": 1}, {"value-range"}),
    (SIGNAL, {"x": [1, 2**63], "gain": 1}, {"value-range"}),
    (SIGNAL, {"x": [1, 2**20000], "gain": 1}, {"value-range"}),
    (SIGNAL, {"x": np.array([1, 40000], object), "gain": 1}, {"value-range"}),
    (SIGNAL, {"x": np.array([1, 2.5], object), "gain": 1}, {"array-type"}),
    (EVERY, GOOD | {"e": [2**2000, 0]}, {"value-range"}),
    (EVERY, GOOD | {"e": [2**128, 0]}, {"value-range"}),
    (SIGNAL, {"x": [1.0, 2.0], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": [1, 2j], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": ["1", "2"], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": "12", "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": b"12", "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": [True, False], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": [None, 1], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": None, "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": [Fraction(1, 2), 1], "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": {"a": 1}, "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": np.array(["2020-01-01"], "datetime64[D]"), "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": np.zeros(2, [("a", "i2")]), "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": np.ma.masked_array([1, 2], [0, 1]), "gain": 1}, {"array-type"}),
    (SIGNAL, {"x": Unreadable(), "gain": 1}, {"array-shape"}),
    (SIGNAL, {"x": [[1, 2], [3]], "gain": 1}, {"array-shape"}),
    (SIGNAL, {"x": [[1, 2]], "gain": 1}, {"array-shape"}),
    (SIGNAL, {"x": 5, "gain": 1}, {"array-shape"}),
    (SIGNAL, {"x": [1, 2], "gain": [1, 2]}, {"array-shape"}),
    (SIGNAL, {"x": [1, 2], "gain": [1]}, {"array-shape"}),
    (SIGNAL, {"x": [1, 2], "gain": float("nan")}, {"not-finite"}),
    (SIGNAL, {"x": [1, 2], "gain": float("-inf")}, {"not-finite"}),
    (SIGNAL, {"x": [1, 2], "gain": 32768}, {"value-range"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "n": 4}, {"size-conflict"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "n": 2.0}, {"size-value"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "n": True}, {"size-value"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "n": "2"}, {"size-value"}),
    (SIGNAL, {"x": [1, 2], "gain": 1, "n": [2]}, {"size-value"}),
    (SIGNAL, {"x": [1, 2, 3], "gain": 1}, {"needs-violated"}),
    (SIGNAL, {"x": [], "gain": 1}, {"needs-violated"}),
    (SIGNAL, {"x": np.zeros(70_000, int), "gain": 1}, {"memory-too-small"}),
    (SIGNAL, {"x": [1.5, 2], "gain": "loud"}, {"array-type"}),
    (WINDOW, {"x": [0.5, 0.5], "c": [0.5, 0.5, 0.5, 0.5]}, {"size-value"}),
    (WINDOW, {"x": [0.5, np.nan], "c": [np.inf]}, {"not-finite"}),
    (EVERY, GOOD | {"a": [128, 0]}, {"value-range"}),
    (EVERY, GOOD | {"b": [-1, 0]}, {"value-range"}),
    (EVERY, GOOD | {"c": [65536, 0]}, {"value-range"}),
    (EVERY, GOOD | {"d": [2**32, 0]}, {"value-range"}),
    (EVERY, GOOD | {"e": [1e39, 0]}, {"value-range"}),
    (EVERY, GOOD | {"f": 256}, {"value-range"}),
    (EVERY, GOOD | {"g": 1e60}, {"value-range"}),
    (EVERY, GOOD | {"a": [1, 2, 3]}, {"size-conflict"}),
    ("given x : i16[2 * n] at g1", {"x": [1, 2, 3]}, {"size-unknown"}),
    ("given x : i16[2 * n] at g1", {"x": [1, 2, 3], "n": 2}, {"array-length"}),
    ("given x : i16[n] at g1\ngiven w : i16[n + 1] at g2", {"x": [1, 2], "w": [1, 2]}, {"array-length"}),
    ("given x : i16[n] at g1\nneeds x[0] != 0", {"x": [0, 2]}, {"needs-violated"}),
    ("given x : i16[n] at g1\nneeds x[3] != 0", {"x": [0, 2]}, {"no-value"}),
    ("given x : i16[n] at g1\nneeds 8 // n == 2", {"x": []}, {"no-value"}),
    ("given x : i16[n] at g1 align n", {"x": [1, 2, 3]}, {"align-value"}),
    ("given x : i16[n] at g1 align n / 2", {"x": [1, 2, 3]}, {"attribute-value"}),
    ("given x : i16[n] at g1 bank n", {"x": [1, 2, 3, 4]}, {"bank-value"}),
    ("given x : i16[n] at g1 align 8 bank 1", {"x": [1]}, {"bank-value"}),
    ("given x : i16[n] at g1 over n - 4", {"x": [1]}, {"over-value"}),
    ("given x : i16[n] at g1\ngiven k : i16 = n * 30000 in g2", {"x": [1, 2]}, {"value-range"}),
    ("given x : i16[n] at g1\ngiven k : i16 = n / 2 in g2", {"x": [1, 2]}, {"array-type"}),
    ("given x : i16[n] at g1\ntable t : i16[4] = 20000 * i", {"x": [1]}, {"value-range"}),
    ("given x : i16[n] at g1\ntable t : i16[4] from none.npy", {"x": [1]}, {"table-file"}),
    ("given x : i16[n] at g1\ngiven n : i16 in g2", {"x": [1], "n": 2}, {"size-conflict"}),
]


@pytest.mark.parametrize(("interface", "given", "names"), BAD)
def test_what_does_not_fit_is_refused_by_name(interface: str, given: dict[str, object], names: set[str]) -> None:
    with pytest.raises(InterfaceError) as caught:
        bind(header(interface), given)
    assert {p.name for p in caught.value.problems} == names
    assert all(p.found and (p.allowed or p.name == "no-value") for p in caught.value.problems)


def test_all_problems_come_at_once() -> None:
    with pytest.raises(InterfaceError) as caught:
        bind(header(EVERY), {"a": [200], "b": ["x"], "q": 1, "f": 2j})
    found = sorted(p.name for p in caught.value.problems)
    assert found == ["array-type", "array-type", "missing-input", "unknown-input", "value-range"]
    assert "c: u16[n], d: u32[n], e: f32[n], g: f32" in str(caught.value)


def test_a_misspelt_name_gets_the_nearest() -> None:
    with pytest.raises(InterfaceError, match="try      gain="):
        bind(header(SIGNAL), {"x": [1, 2], "gian": 1, "gain": 1})


def test_registers_hold_addresses_and_values() -> None:
    setup = bind(header(SIGNAL), {"x": np.arange(6), "gain": -0.5})
    x, y = setup.area("x"), setup.area("y")
    assert setup.registers == {1: x.start, 2: 0xFFFFC000, 3: y.start}
    assert setup.sizes == {"n": 6}
    assert setup.values["gain"] == -16384
    assert (x.bytes, x.over, y.bytes, y.over) == (12, 8, 24, 0)
    assert setup.memory == ((x.start, np.arange(6, dtype="<i2").tobytes()),)


def test_arrays_stand_apart_and_aligned() -> None:
    setup = bind(header(SIGNAL), {"x": np.arange(6), "gain": 0})
    x, y = setup.area("x"), setup.area("y")
    assert x.start >= GAP
    assert y.start - (x.start + x.bytes + x.over) >= GAP
    assert x.start % 8 == y.start % 8 == 0


@pytest.mark.parametrize("bank", range(4))
def test_an_array_begins_in_the_bank_it_asks_for(bank: int) -> None:
    setup = bind(header(f"given x : i16[n] at g1 bank {bank}"), {"x": [1]})
    assert setup.area("x").start // 4 % 4 == bank


def test_alignment_is_at_least_what_is_asked() -> None:
    setup = bind(header("given a : i8[n] at g1\ngiven x : i16[n] at g2 align 1024"), {"a": [1], "x": [1]})
    assert setup.area("x").start == 1024


def test_binding_is_deterministic() -> None:
    one, other = (bind(header(SIGNAL), {"gain": 1, "x": [1, 2]}) for _ in range(2))
    assert (one.registers, one.memory, one.areas) == (other.registers, other.memory, other.areas)
    swapped = bind(header(SIGNAL), {"x": [1, 2], "gain": 1})
    assert swapped.areas == one.areas


def test_floats_become_q15_to_nearest_even_with_saturation_said_once() -> None:
    ties = np.array([0.5, 1.5, 2.5, -0.5, -1.5]) / 32768
    setup = bind(header(WINDOW), {"x": [*ties, 1.0, -1.0, 0.25, 7.0], "c": [1.0, -1.0]})
    assert setup.arrays["x"].tolist() == [0, 2, 2, 0, -2, 32767, -32768, 8192, 32767]
    assert setup.arrays["c"].tolist() == [2**31 - 1, -(2**31)]
    assert [n.found for n in setup.notes] == [
        "x: floats scaled by 2**15, rounded to nearest even; 2 of 9 saturated",
        "c: floats scaled by 2**31, rounded to nearest even; 1 of 2 saturated",
    ]


def test_integers_for_q_types_are_raw() -> None:
    setup = bind(header(WINDOW), {"x": [1, -1, 5], "c": np.array([7], np.uint8)})
    assert setup.arrays["x"].tolist() == [1, -1, 5]
    assert setup.arrays["c"].tolist() == [7]
    assert not setup.notes


def test_float64_for_f32_is_rounded_and_said() -> None:
    setup = bind(header(EVERY), GOOD | {"e": [0.1, 0.5], "g": 0.25})
    assert setup.arrays["e"].dtype == np.float32
    assert setup.registers[7] == 0x3E800000  # IEEE 754: 0.25 is 2**-2
    assert [n.found for n in setup.notes] == ["e: 1 of 2 values rounded to binary32"]


def test_integers_of_any_width_are_values_of_f32() -> None:
    setup = bind(header(EVERY), GOOD | {"e": [2**70, -1]})
    assert setup.arrays["e"].tolist() == [2.0**70, -1.0]


def test_nan_and_infinity_are_values_of_f32() -> None:
    setup = bind(header(EVERY), GOOD | {"e": [np.nan, -np.inf]})
    assert np.isnan(setup.arrays["e"][0])
    assert setup.arrays["e"][1] == -np.inf
    assert not setup.notes


@pytest.mark.parametrize(
    "given",
    [
        np.arange(12, dtype=">i4")[::3],
        np.arange(4, dtype="u8") * 3,
        [0, 3, 6, 9],
        range(0, 12, 3),
        np.array([0, 3, 6, 9], object),
    ],
)
def test_any_layout_of_integers_binds_by_value(given: object) -> None:
    setup = bind(header("given x : i16[n] at g1"), {"x": given})
    assert setup.arrays["x"].tolist() == [0, 3, 6, 9]
    assert setup.arrays["x"].flags.c_contiguous


def test_the_caller_keeps_his_array() -> None:
    mine = np.array([1, 2], np.int16)
    setup = bind(header("given x : i16[n] at g1"), {"x": mine})
    setup.arrays["x"][0] = 9
    assert mine.tolist() == [1, 2]


def test_sizes_follow_from_linear_formulas() -> None:
    setup = bind(header("given x : i16[4 * n + 2] at g1\nreturns y : i16[n] at g2"), {"x": np.zeros(42, int)})
    assert setup.sizes == {"n": 10}
    assert setup.area("y").bytes == 20


def test_a_scalar_input_may_be_a_size() -> None:
    kernel = header("given x : i16[n] at g1\ngiven n : i32 in g2")
    assert bind(kernel, {"x": [1, 2, 3]}).registers[2] == 3
    assert bind(kernel, {"x": [1, 2, 3], "n": 3}).registers[2] == 3


def test_a_size_that_no_array_gives_is_given_by_name() -> None:
    kernel = header("given x : i16[n] at g1\nscratch s : i32[m] at g2\ngiven k : i32 = m + n in g3")
    with pytest.raises(InterfaceError, match="no value for m"):
        bind(kernel, {"x": [1]})
    setup = bind(kernel, {"x": [1], "m": 5})
    assert setup.registers[3] == 6
    assert setup.area("s").bytes == 20


def test_an_empty_array_is_an_array() -> None:
    setup = bind(header("given x : i16[n] at g1"), {"x": []})
    assert setup.sizes == {"n": 0}
    assert setup.area("x").bytes == 0


def test_computed_values_see_addresses_lengths_and_each_other() -> None:
    kernel = header("""
        given x    : i16[n]            at g1
        given last : i32 = addr(x) + 2 * len(x) - 2 in g2
        given half : i32 = n // 2      in g3
        given four : f32 = half / 4    in g4
    """)
    setup = bind(kernel, {"x": range(10)})
    assert setup.registers[2] == setup.area("x").start + 18
    assert setup.registers[3] == 5
    assert setup.registers[4] == 0x3FA00000  # IEEE 754: 1.25


def test_tables_from_a_formula_and_from_a_file(tmp_path: Path) -> None:
    np.save(tmp_path / "taps.npy", np.array([0.5, -0.25]))
    kernel = header("table ramp : i16[4] = 3 * i + 1\ntable taps : q15[2] from taps.npy", path=tmp_path / "frame.vliw")
    setup = bind(kernel, {})
    assert setup.arrays["ramp"].tolist() == [1, 4, 7, 10]
    assert setup.arrays["taps"].tolist() == [16384, -8192]


@pytest.mark.parametrize("damage", ["pickle", "short", "text", "header", "shape", "archive", "link"])
def test_a_bad_table_file_is_refused(damage: str, tmp_path: Path) -> None:
    folder, file = tmp_path / "kernel", tmp_path / "kernel" / "taps.npy"
    folder.mkdir()
    if damage == "pickle":
        np.save(file, np.array([{}, {}]), allow_pickle=True)
    elif damage == "archive":
        with file.open("wb") as stream:
            np.savez(stream, a=1)
    elif damage == "link":
        np.save(tmp_path / "other.npy", np.zeros(2))
        file.symlink_to(tmp_path / "other.npy")
    else:
        np.save(file, np.zeros(3 if damage == "shape" else 2))
        data = file.read_bytes()
        cut = {
            "short": data[:-3],
            "text": b"0 0\n",
            "header": data.replace(b"'shape': (2,)", b"'shape': 9**9"),
            "shape": data,
        }
        file.write_bytes(cut[damage])
    with pytest.raises(InterfaceError) as caught:
        bind(header("table taps : q15[2] from taps.npy", path=folder / "frame.vliw"), {})
    expected = "array-length" if damage == "shape" else "table-file"
    assert [p.name for p in caught.value.problems] == [expected]


def test_a_header_that_announces_more_than_there_is_allocates_nothing(tmp_path: Path) -> None:
    file = tmp_path / "taps.npy"
    np.save(file, np.zeros(2))
    huge = file.read_bytes().replace(b"(2,), }          ", b"(99999999999,), }")
    assert b"99999999999" in huge
    file.write_bytes(huge)
    with pytest.raises(InterfaceError, match="announces 799999999992 bytes"):
        bind(header("table taps : q15[2] from taps.npy", path=tmp_path / "frame.vliw"), {})


@pytest.mark.parametrize("order", ["little", "big"])
def test_memory_has_the_byte_order_of_the_core(order: str) -> None:
    core = attrs.evolve(TINY, memory=attrs.evolve(TINY.memory, endianness=order))
    setup = bind(header("given x : i32[n] at g1", core), {"x": [0x01020304]})
    assert setup.memory[0][1] == (0x01020304).to_bytes(4, order)  # type: ignore[arg-type]


def test_undefined_from_the_start_are_returns_and_scratch() -> None:
    setup = bind(header("returns y : i16[4] at g1\nscratch s : i16[4]\nchanges z : i16[4] at g2"), {"z": [1, 2, 3, 4]})
    assert [address for address, _ in setup.memory] == [setup.area("z").start]
