"""Every shipped operation: compiled and evaluated agree, undefined bytes included, and results stay in range."""

from __future__ import annotations

import random
from functools import cache

import pytest

from tests.description.language_help import agree, every_halves
from vliwsim.description.operations import OperationSet
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations, validate

FAMILIES = sorted(path.stem for path in (isa_folder() / "operations").glob("*.toml"))


@cache
def shipped() -> OperationSet:
    return load_operations(FAMILIES)


def test_the_shipped_tables_are_valid_and_their_examples_hold() -> None:
    assert [str(problem) for problem in validate(shipped())] == []


@pytest.mark.parametrize("family", FAMILIES)
def test_compiled_and_evaluated_agree(family: str) -> None:
    for operation in load_operations([family]).by_name.values():
        draw = random.Random(operation.name)
        for halves in every_halves(operation.meaning):
            agree(operation.meaning, draw, 60, halves)
