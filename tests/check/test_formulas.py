"""Ranges of header formulas and residues of addresses against brute force."""

from __future__ import annotations

from itertools import product
from random import Random

import pytest

from vliwsim.check.formulas import ANY, Range, Reader
from vliwsim.check.inputs import ALIGN, BYTES, inputs_of
from vliwsim.check.residues import UNKNOWN, WHOLE, Residue, constant
from vliwsim.kernel import placement
from vliwsim.kernel.elements import ELEMENTS
from vliwsim.kernel.loading import assemble_source
from vliwsim.problems import SourceError
from vliwsim.program.source.expressions import formula


def holds(found: Range, value: int) -> bool:
    inside = found.low <= value <= found.high and value % found.step == found.rest
    address = found.address
    return inside and (value - address.offset) % address.modulus == 0 and address.symbol is None


NEEDS = (
    "n % 4 == 0 and n >= 4",
    "n >= 1 and n % 8 == 3",
    "0 < n <= 20 and k != 0",
    "n > 2 and k < n and k >= 0",
    "n == 12",
    "(n > 3 or k > 3) and n >= 0 and k >= 0",
    "not n > 3 and n >= 0",
    "7 >= n and n > 2",
)
VALUES = (
    "n // 4", "n // 4 - 1", "n * 2 - k", "-n", "n % 4", "max(n, 3)", "min(n, k) + 1", "n << 2", "n & 6",
    "n if k else 5", "(n + 3) // 2 * 2", "8 * n + 4", "n - n", "abs(n)", "n * k", "n // k if k else 0", "n > 3",
)  # fmt: skip


@pytest.mark.parametrize("needs", NEEDS)
@pytest.mark.parametrize("value", VALUES)
def test_what_is_said_of_a_formula_holds(needs: str, value: str) -> None:
    reader = Reader({"n": ANY, "k": ANY})
    required, wanted = formula(needs), formula(value)
    reader.require(required)
    found = reader.range_of(wanted)
    met = 0
    for n, k in product(range(-6, 40), range(-6, 24)):
        names = {"n": n, "k": k}
        if required.value(names):
            met += 1
            try:
                result = int(wanted.value(names))
            except SourceError:
                continue
            assert holds(found, result), (n, k, result, found)
            assert holds(reader.names["n"], n)
            nonzero = found.nonzero()
            assert nonzero is None or nonzero == (result != 0)
    assert met


SHARP = {
    ("n % 4 == 0 and n >= 4", "n // 4"): True,
    ("n % 16 == 0 and n > 0", "n // 16"): True,
    ("n % 8 == 0 and n >= 16", "n // 8 - 1"): True,
    ("n % 8 == 0 and n >= 8", "n // 8 - 1"): None,
    ("n == 3", "n - 3"): False,
    ("n % 2 == 1", "n"): True,
}


@pytest.mark.parametrize(("needs", "value"), SHARP)
def test_what_decides_is_found(needs: str, value: str) -> None:
    reader = Reader({"n": ANY})
    reader.require(formula(needs))
    assert reader.range_of(formula(value)).nonzero() is SHARP[needs, value]


def test_residues_against_all_values_they_stand_for() -> None:
    r = Random(3)
    for _ in range(3000):
        one, other = (Residue.of(None, r.randrange(64), r.choice((1, 2, 4, 8, 16))) for _ in range(2))
        a, b = (x.offset + x.modulus * r.randrange(-4, 5) for x in (one, other))
        factor = r.randrange(-6, 7)
        results = (
            (one.moved(other), a + b),
            (one.moved(other, -1), a - b),
            (one.times(factor), a * factor),
            (one.either(other), r.choice((a, b))),
            (one.within(4), a),
        )
        for residue, value in results:
            assert (value - residue.offset) % residue.modulus == 0


def test_residues_of_symbols() -> None:
    x, y = Residue("x", 0, WHOLE), Residue("y", 0, WHOLE)
    assert x.moved(constant(8)) == Residue("x", 8, WHOLE)
    assert x.moved(constant(8)).moved(x, -1) == constant(8)
    assert x.moved(y) == UNKNOWN
    assert x.either(x.moved(constant(16))) == Residue("x", 0, 16)
    assert x.either(y) == UNKNOWN
    assert constant(-8) == Residue(None, WHOLE - 8, WHOLE)


def test_the_numbers_of_the_kernel_room_are_the_same_here() -> None:
    assert placement.ALIGN == ALIGN
    assert {name: element.bytes for name, element in ELEMENTS.items()} == BYTES


def test_inputs_of_a_shipped_kernel() -> None:
    kernel = assemble_source("energy")
    numbers = kernel.core.register_numbers
    found = inputs_of(kernel)
    assert found.defined == {numbers["g10"], numbers["h10"], numbers["g20"]}
    assert dict(found.facts)[numbers["g20"]] is True  # n % 4 == 0 and n >= 4, so n // 4 is not 0
    assert found.residues[numbers["h10"]] == Residue("x", 4, WHOLE)
    assert found.absolute(found.residues[numbers["h10"]]) == Residue(None, 4, 8)
    assert found.outputs == (("total", numbers["g11"]),)
