"""References that cannot be used, and cases that cannot be run."""

from __future__ import annotations

from tests.kernel.sources import DOUBLE, SUM
from tests.robustness.workshop import Content, Row, a_folder, a_pipe

GIVE = "--give x=1,2,3"
RIGHT = "    return int(x.astype(int).sum())\n"


def total(title: str, names: str | list[str], reference: Content, options: str = GIVE, **more: object) -> Row:
    """A reference for the kernel ``total``, which returns one integer."""
    listed = [names] if isinstance(names, str) else names
    files = {"probe/total.vliw": SUM, "probe/reference.py": reference}
    return Row(title, f"run probe {options}", listed, **{"status": 2, "files": files, **more})  # type: ignore[arg-type]


def double(title: str, names: str | list[str], body: str, **more: object) -> Row:
    """A reference for the kernel ``double``, which returns an array."""
    listed = [names] if isinstance(names, str) else names
    files = {"probe/double.vliw": DOUBLE, "probe/reference.py": f"import numpy as np\ndef double(x):\n    {body}\n"}
    return Row(title, f"run probe {GIVE}", listed, **{"status": 2, "files": files, **more})  # type: ignore[arg-type]


LOADING = [
    total("empty", "reference-function", ""),
    total("no function of that name", "reference-function", f"def totle(x):\n{RIGHT}", says="totle"),
    total("a number of that name", "reference-function", "total = 3\n"),
    total("a syntax error", "reference-raised", "def total(x:\n"),
    total("a zero byte", "reference-raised", "def total(x):\0\n"),
    total("bytes that are no text", "reference-file", b"def total(x): return 3 # \xff\n"),
    total("a folder", "reference-file", a_folder),
    total("a pipe", "reference-file", a_pipe, process=True),
    total("raises when loaded", "reference-raised", "raise ValueError('no')\n"),
    total("imports what is not there", "reference-raised", "import nowhere_to_be_found\n"),
    total("leaves when loaded", "reference-raised", "import sys\nsys.exit(0)\n"),
    total("nested deeper than Python reads", "reference-raised", f"x = {'(' * 500}{')' * 500}\n"),
]

CALLING = [
    total("raises", "reference-raised", "def total(x):\n    return x[99]\n", says="IndexError"),
    total("raises without a word", "reference-raised", "def total(x):\n    raise Exception\n"),
    total("raises many lines", "reference-raised", "def total(x):\n    raise Exception('a\\nb\\nc')\n"),
    total("raises with a terminal's command", "reference-raised", "def total(x):\n    raise Exception('\\x1b[2J')\n"),
    total("leaves", "reference-raised", "import sys\ndef total(x):\n    sys.exit(0)\n"),
    total("calls itself for ever", "reference-raised", "def total(x):\n    return total(x)\n"),
    total("asserts", "reference-raised", "def total(x):\n    assert x.size == 0\n"),
    total("asks for what is not given", "reference-parameter", f"def total(x, gain):\n{RIGHT}", says="gain"),
    total("takes no names", "reference-parameter", f"def total(x, /):\n{RIGHT}"),
    total("takes nothing", [], "def total():\n    return 6\n", status=0),
    total("prints", [], f"print('a')\ndef total(x):\n    print('b')\n{RIGHT}", status=0, says="right"),
    total(
        "writes on its inputs",
        [],
        "def total(x):\n    s = int(x.astype(int).sum())\n    x[:] = 0\n    return s\n",
        status=0,
    ),
    total("is wrong", [], "def total(x):\n    return 7\n", status=1, says="wrong"),
]

RETURNING = [
    total("returns nothing", "reference-returned", "def total(x):\n    pass\n", remedy="return"),
    total("returns text", "reference-returned", "def total(x):\n    return 'six'\n"),
    total("returns half", "reference-returned", "def total(x):\n    return 6.5\n"),
    total("returns infinity", "reference-returned", "def total(x):\n    return float('inf')\n"),
    total("returns too much for its type", "reference-returned", "def total(x):\n    return 1 << 40\n"),
    total("returns two values", "reference-returned", "def total(x):\n    return 6, 7\n"),
    total("returns an output nobody has", "reference-returned", "def total(x):\n    return {'som': 6}\n"),
    total("returns an object", "reference-returned", "def total(x):\n    return object()\n"),
    total("returns itself", "reference-returned", "def total(x):\n    return total\n"),
    total(
        "returns a list of itself", "reference-returned", "def total(x):\n    a = []\n    a.append(a)\n    return a\n"
    ),
    double("returns another shape", "reference-returned", "return np.zeros((3, 1), np.int16)"),
    double("returns fewer", "reference-returned", "return (x * 2)[:-1]"),
    double("returns floats", "reference-returned", "return x / 3"),
    double("returns one number", "reference-returned", "return 3"),
    double("returns complex numbers", "reference-returned", "return x * 1j"),
    double("returns objects", "reference-returned", "return np.array([{}, {}, {}], object)"),
    double("returns not-numbers", "reference-returned", "return x * np.nan"),
    double("returns what is masked", "reference-returned", "return np.ma.masked_array(x * 2, x > 1)", remedy="filled"),
    double("returns words too wide", "reference-returned", "return x.astype(np.int64) * 100000"),
]

CASES = f"def total(x):\n{RIGHT}def cases():\n"

MAKING = [
    total("cases that raise", "reference-raised", f"{CASES}    return 1 // 0\n", "--case all"),
    total(
        "cases that raise late",
        "reference-raised",
        f"{CASES}    yield 'a', {{'x': [1]}}\n    1 // 0\n",
        "--case all",
        changed=(),
    ),
    total("no cases at all", "no-case", f"{CASES}    return {{}}\n", ""),
    total("cases without names", "reference-cases", f"{CASES}    yield {{'x': [1]}}\n", "--cases"),
    total("cases that are numbers", "reference-raised", f"{CASES}    return 3\n", "--cases"),
    total(
        "a case twice",
        "reference-cases",
        f"{CASES}    yield 'a', {{'x': [1]}}\n    yield 'a', {{'x': [1]}}\n",
        "--cases",
    ),
    total(
        "a case of another input",
        ["unknown-input", "missing-input"],
        f"{CASES}    yield 'a', {{'z': [1]}}\n",
        "--case a",
    ),
    total("a case of text", "array-type", f"{CASES}    yield 'a', {{'x': 'abc'}}\n", "--case a"),
    total("a case of nothing", "missing-input", f"{CASES}    yield 'a', {{}}\n", "--case a"),
    total("a case that does not fit", "value-range", f"{CASES}    yield 'a', {{'x': [1 << 20]}}\n", "--case a"),
    total("a case that is not there", "unknown-case", f"{CASES}    yield 'a', {{'x': [1]}}\n", "--case b"),
    total(
        "cases with a wish", "reference-raised", f"def total(x):\n{RIGHT}def cases(a, b):\n    return {{}}\n", "--cases"
    ),
]

ROWS = [*LOADING, *CALLING, *RETURNING, *MAKING]
