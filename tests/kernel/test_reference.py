"""References: loading, calling, what they return, and how they fail."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

from vliwsim.kernel.binding import bind
from vliwsim.kernel.outputs import Output
from vliwsim.kernel.reference import call_reference, load_reference
from vliwsim.problems import ReferenceFailure

from .sources import header

INTERFACE = """
    given   x    : i16[n] at g1
    given   gain : q15    in g2
    given   trim : f32    in g3
    given   half : i32 = n // 2 in g4
    changes acc  : i32    in g5
    returns y    : q15[n] at g6
    let     bias = 3
"""
GIVEN = {"x": [1, 2, 3, 4], "gain": 0.5, "trim": 0.25, "acc": 7}
ONE = "given x : i16[n] at g1\nreturns total : i32 in g2"
FLOAT = "given x : f32[n] at g1\nreturns y : f32[n] at g2"


def expect(folder: Path, code: str, interface: str = INTERFACE, given: dict[str, object] = GIVEN) -> dict[str, Output]:
    """The outputs that a reference.py of this code expects."""
    (folder / "reference.py").write_text(code)
    kernel = header(interface, path=folder / "frame.vliw")
    reference = load_reference(kernel)
    assert reference is not None
    return call_reference(reference, bind(kernel, given))


def test_no_file_is_no_reference(tmp_path: Path) -> None:
    assert load_reference(header(ONE, path=tmp_path / "frame.vliw")) is None


def test_it_gets_what_its_parameters_name(tmp_path: Path) -> None:
    code = """
import numpy as np
def frame(x, n, gain, trim, half, bias, acc, extra=9):
    assert x.dtype == np.int16 and (n, gain, half, bias, acc, extra) == (4, 16384, 2, 3, 7, 9)
    assert type(trim) is np.float32 and type(gain) is int
    return {"y": x, "acc": acc + 1}
"""
    outputs = expect(tmp_path, code)
    assert list(outputs) == ["acc", "y"]  # in interface order
    assert outputs["acc"] == 8
    assert np.asarray(outputs["y"]).dtype == np.int16


def test_two_stars_get_everything_given(tmp_path: Path) -> None:
    code = "def frame(x, **more):\n    assert sorted(more) == ['acc', 'gain', 'n', 'trim']\n    return more['acc'], x"
    assert expect(tmp_path, code)["acc"] == 7


@pytest.mark.parametrize("returned", ["(3, x)", "[3, x]", "{'acc': 3, 'y': x}", "3, x / 32768"])
def test_forms_of_several_outputs(returned: str, tmp_path: Path) -> None:
    outputs = expect(tmp_path, f"def frame(x):\n    return {returned}")
    assert outputs["acc"] == 3
    assert np.asarray(outputs["y"]).tolist() == [1, 2, 3, 4]


@pytest.mark.parametrize(
    "returned", ["x.sum()", "int(x.sum())", "(x.sum(),)", "[10]", "{'total': 10}", "x.sum(keepdims=True)"]
)
def test_forms_of_one_output(returned: str, tmp_path: Path) -> None:
    outputs = expect(tmp_path, f"def frame(x):\n    return {returned}", ONE, {"x": [1, 2, 3, 4]})
    assert outputs == {"total": 10}


def test_it_may_change_its_copies(tmp_path: Path) -> None:
    (tmp_path / "reference.py").write_text("def frame(x):\n    x[:] = 0\n    return 0")
    kernel = header(ONE, path=tmp_path / "frame.vliw")
    reference, setup = load_reference(kernel), bind(kernel, {"x": [1, 2]})
    assert reference is not None
    call_reference(reference, setup)
    assert setup.arrays["x"].tolist() == [1, 2]


def test_modules_beside_it_can_be_imported_and_nothing_is_left(tmp_path: Path) -> None:
    (tmp_path / "gear_numbers.py").write_text("TEETH = 41")
    path = list(sys.path)
    code = "from gear_numbers import TEETH\ndef frame(x):\n    return TEETH"
    assert expect(tmp_path, code, ONE, {"x": [1]}) == {"total": 41}
    assert sys.path == path
    assert not (tmp_path / "__pycache__").exists()


def test_floats_may_be_anything_ieee(tmp_path: Path) -> None:
    outputs = expect(tmp_path, "def frame(x):\n    return x * 0.1 + float('nan')", FLOAT, {"x": [1.0]})
    assert np.isnan(outputs["y"]).all()


@pytest.mark.parametrize(
    ("code", "name", "says", "line"),
    [
        ("def other():\n    pass", "reference-function", "has no function frame, only other", 1),
        ("frame = 3", "reference-function", "has no function frame", 1),
        ("x = 1\ndef frame(:\n", "reference-raised", "SyntaxError while loading it", 2),
        ("import numpy\nraise OSError('no disk')", "reference-raised", "OSError while loading it: no disk", 2),
        ("import no_such_module_here", "reference-raised", "ModuleNotFoundError while loading it", 1),
        ("import sys\nsys.exit(0)", "reference-raised", "SystemExit while loading it: 0", 2),
        ("def frame(x):\n    y = 1\n    return x + y['a']", "reference-raised", "TypeError while calling frame", 3),
        ("def frame(x):\n    assert False", "reference-raised", "AssertionError while calling frame", 2),
        ("def f(x):\n    return f(x)\ndef frame(x):\n    return f(x)", "reference-raised", "RecursionError", 2),
        ("\n\ndef frame(signal, n):\n    return 0", "reference-parameter", "frame asks for signal", 3),
        ("def frame(x, /):\n    return 0", "reference-parameter", "frame asks for x", 1),
        ("def frame(x):\n    pass", "reference-returned", "None for total", 1),
        ("def frame(x):\n    return 1, 2", "reference-returned", "total of shape (2,)", 1),
        ("def frame(x):\n    return {'sum': 1}", "reference-returned", "no total, sum, which is no output", 1),
        ("def frame(x):\n    return x", "reference-returned", "total of shape (3,)", 1),
        ("def frame(x):\n    return 2**31", "reference-returned", "total = 2147483648", 1),
        ("def frame(x):\n    return 1.0", "reference-returned", "total holds floats", 1),
        ("def frame(x):\n    return 1j", "reference-returned", "total holds complex numbers", 1),
        ("def frame(x):\n    return 'ten'", "reference-returned", "total holds text", 1),
        ("def frame(x):\n    return x.sum() > 0", "reference-returned", "total holds truth values", 1),
        ("def frame(x):\n    return object()", "reference-returned", "total holds Python objects", 1),
    ],
)  # fmt: skip
def test_failures(code: str, name: str, says: str, line: int, tmp_path: Path) -> None:
    with pytest.raises(ReferenceFailure) as caught:
        expect(tmp_path, code, ONE, {"x": [1, 2, 3]})
    (found,) = caught.value.problems
    assert found.name == name
    assert says in found.found
    assert found.place is not None
    assert found.place.file == str(tmp_path / "reference.py")
    assert found.place.line == line
    assert caught.value.status == 2


def test_q_outputs_must_be_finite(tmp_path: Path) -> None:
    with pytest.raises(ReferenceFailure, match=r"the reference's y\[1\] = inf"):
        expect(tmp_path, "def frame(x):\n    return 0, [0.5, float('inf'), 0, 0]")


def test_a_wrong_length_is_told_with_both(tmp_path: Path) -> None:
    with pytest.raises(ReferenceFailure, match=r"returns y of shape \(3,\)\n  allowed  shape \(4,\)"):
        expect(tmp_path, "def frame(x):\n    return 0, x[:3]")


def test_a_file_that_is_no_text_is_refused(tmp_path: Path) -> None:
    (tmp_path / "reference.py").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(ReferenceFailure, match="reference-file"):
        load_reference(header(ONE, path=tmp_path / "frame.vliw"))


def test_ctrl_c_in_a_reference_is_ctrl_c(tmp_path: Path) -> None:
    with pytest.raises(KeyboardInterrupt):
        expect(tmp_path, "def frame(x):\n    raise KeyboardInterrupt", ONE, {"x": [1]})
