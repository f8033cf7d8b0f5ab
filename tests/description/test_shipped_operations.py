"""The shipped operation tables as a whole: valid, exemplified, numbered, and named in one order."""

from __future__ import annotations

import re
from collections import Counter
from fractions import Fraction

import pytest

from tests.standards import exact, shipped
from tests.standards import test_operations_bits as bits
from tests.standards import test_operations_fixed as fixed
from tests.standards import test_operations_float as floating
from tests.standards import test_operations_integer as integer
from tests.standards import test_operations_packed as packed
from vliwsim.description.operations import Kind, Operation, Role
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import validate

MODELS = integer.MODELS | fixed.MODELS | packed.MODELS | bits.MODELS
CLASSES = {"arithmetic", "shift", "multiply", "divide", "load", "store", "control", "float", "float_divide"}
BLOCKS = {
    "integer": (0x001, 0x03F),
    "fixed": (0x040, 0x0BF),
    "packed": (0x0C0, 0x17F),
    "bits": (0x180, 0x1BF),
    "memory": (0x1C0, 0x1DF),
    "control": (0x1E0, 0x1FF),
    "float": (0x200, 0x23F),
}
"""Codes of each family; what is above is for in-house operations."""

ALL = [shipped.operation(name) for name in shipped.operations().by_name]


def test_every_operation_is_valid_and_every_example_holds_compiled_and_evaluated() -> None:
    assert [str(problem) for problem in validate(shipped.operations())] == []


def test_the_families_are_the_files() -> None:
    assert {path.stem for path in (isa_folder() / "operations").glob("*.toml")} == set(shipped.FAMILIES) == set(BLOCKS)


def test_there_are_enough() -> None:
    assert len(ALL) >= 170
    assert set(Counter(found.family for found in ALL)) == set(BLOCKS)


def test_codes_are_unique_and_in_the_block_of_their_family() -> None:
    assert len({found.code for found in ALL}) == len(ALL)
    for found in ALL:
        low, high = BLOCKS[found.family]
        assert low <= found.code <= high, found.name


def test_every_operation_has_a_known_class_and_a_summary_of_its_own() -> None:
    assert {found.operation_class for found in ALL} == CLASSES
    repeated = Counter(found.summary for found in ALL)
    told_apart_by_their_operands = {"sum", "difference"}
    assert {summary for summary, count in repeated.items() if count > 1} == told_apart_by_their_operands


def test_every_operation_has_examples() -> None:
    for found in ALL:
        assert len(found.examples) >= 2 or found.name in ("halt", "jump"), found.name
        assert len(set(map(repr, found.examples))) == len(found.examples), found.name


def test_classes_go_with_what_an_operation_does() -> None:
    for found in ALL:
        kind = found.kind
        assert (found.operation_class == "load") == (kind is Kind.LOAD), found.name
        assert (found.operation_class == "store") == (kind is Kind.STORE), found.name
        assert (found.operation_class == "control") == (kind in (Kind.BRANCH, Kind.HALT)), found.name
        assert (found.operation_class in ("float", "float_divide")) == (found.family == "float"), found.name


# Examples by the plain models


def values(found: Operation, example: tuple[tuple[object, ...], tuple[object, ...]]) -> tuple[list[object], object]:
    """An example's inputs and outputs as values."""
    kinds = found.meaning.input_types.values(), found.meaning.output_types.values()
    given, made = (
        [shipped.read(kind, shipped.raw(kind, value)) for kind, value in zip(types, side, strict=True)]
        for types, side in zip(kinds, example, strict=True)
    )
    return given, made[0] if len(made) == 1 else tuple(made)


@pytest.mark.parametrize("name", MODELS)
def test_examples_by_the_plain_model(name: str) -> None:
    """Written by hand, given by the meaning, and given by a model that shares nothing with it."""
    found = shipped.operation(name)
    for example in found.examples:
        given, made = values(found, example)
        assert MODELS[name](*given) == made, example


# Ties


def rounds(found: Operation) -> bool:
    return found.does.count("round(") > 0


def test_every_rounding_operation_shows_a_tie() -> None:
    """The bits a rounding drops are exactly one half in at least one example, by the plain models' own fractions."""
    rounding = [found for found in ALL if rounds(found)]
    assert len(rounding) >= 20
    for found in rounding:
        assert tie_in(found, lambda *given, name=found.name: MODELS[name](*given)), found.name


def tie_in(found: Operation, model: shipped.Model) -> bool:
    seen = False
    for example in found.examples:
        exact.TIES.clear()
        model(*values(found, example)[0])
        seen = seen or bool(exact.TIES)
    return seen


def real(pattern: int) -> Fraction:
    """A finite binary32 exactly; 0 stands for what is not finite."""
    number = floating.number(pattern)
    return Fraction(number) if number - number == 0 else Fraction(0)


EXACT: dict[str, shipped.Model] = {
    "fadd.s": lambda a, b: real(a) + real(b),
    "fsub.s": lambda a, b: real(a) - real(b),
    "fmul.s": lambda a, b: real(a) * real(b),
    "fdiv.s": lambda a, b: real(a) / real(b) if real(b) else Fraction(0),
    "fmadd.s": lambda a, b, c: real(a) * real(b) + real(c),
    "fmsub.s": lambda a, b, c: real(a) * real(b) - real(c),
    "fnmsub.s": lambda a, b, c: -real(a) * real(b) + real(c),
    "fnmadd.s": lambda a, b, c: -real(a) * real(b) - real(c),
    "fmadd.s.acc": lambda acc, a, b: real(acc) + real(a) * real(b),
    "fnmsub.s.acc": lambda acc, a, b: real(acc) - real(a) * real(b),
    "fcvt.s.w": Fraction,
    "fcvt.s.wu": Fraction,
    "fcvt.s.q31": lambda a: Fraction(a, 2**31),
}
"""The exact result, before it is rounded to binary32."""


@pytest.mark.parametrize("name", EXACT)
def test_every_rounding_float_operation_shows_a_tie(name: str) -> None:
    """A square root is never a tie, and fcvt.s.q15 is exact; all others are here or in the next test."""
    assert tie_in(shipped.operation(name), lambda *given: floating.nearest_float(EXACT[name](*given), 0))


@pytest.mark.parametrize("name", [name for name, row in floating.TO_INTEGER.items() if row[2] is exact.even])
def test_every_conversion_to_the_nearest_integer_shows_a_tie(name: str) -> None:
    low, high, rounding, scale = floating.TO_INTEGER[name]
    assert tie_in(shipped.operation(name), lambda a: floating.converted(a, low, high, rounding, scale))


# Limits


@pytest.mark.parametrize("name", [name for name in MODELS if "sat" in name.split(".")])
def test_every_saturating_operation_shows_its_limits(name: str) -> None:
    """On every side on which the plain model is ever limited, with extreme and random inputs, an example is too."""
    found, model = shipped.operation(name), MODELS[name]
    exact.LIMITED.clear()
    for given in shipped.inputs(found, 300):
        model(*given)
    reached = set(exact.LIMITED)
    exact.LIMITED.clear()
    for example in found.examples:
        model(*values(found, example)[0])
    assert reached == exact.LIMITED != set()


# Names

SUFFIXES = [
    ["b4", "h2", "pair", "half"],
    ["h2", "half"],
    ["q15", "q31"],
    ["q15"],
    ["wide", "re", "im", "low", "high", "halved"],
    ["acc", "less"],
    ["rnd", "even", "zero", "floor"],
    ["sat"],
    ["flag"],
]
"""Mode suffixes in their order, as the head of integer.toml says it."""

STANDARD = re.compile(
    r"sext\.[bh]|zext\.[bh]|orc\.b|czero\.(eqz|nez)|f(add|sub|mul|div|sqrt|min|max|n?madd|n?msub|sgnj[nx]?|mv|neg|abs)\.s"
    r"|f(eq|lt|le|class)\.s|fcvt\.(w|wu|q15|q31)\.s|fcvt\.s\.(w|wu|q15|q31)"
)
"""Names with dots of RISC-V's own, and ours in their form."""


@pytest.mark.parametrize("name", [found.name for found in ALL if "." in found.name])
def test_mode_suffixes_come_in_one_order(name: str) -> None:
    standard = STANDARD.match(name)
    rest = name[standard.end() :].split(".")[1:] if standard else name.split(".")[1:]
    if name.startswith(("crc", "reverse")):
        assert rest in (["byte"], ["word"], ["low"])
        return
    places = iter(SUFFIXES)
    for suffix in rest:
        assert any(suffix in place for place in places), f"{suffix} in {name}"


def test_an_accumulator_is_an_operand_that_is_also_a_result() -> None:
    for found in ALL:
        accumulates = {"acc", "less"} & set(found.name.split("."))
        roles = [operand.role for operand in found.operands]
        if accumulates:
            assert Role.INOUT in roles, found.name
        assert (Role.STICKY in roles) == found.name.endswith(".flag"), found.name
