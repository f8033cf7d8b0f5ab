"""What is known of values: facts, what follows from them, and what operations tell, against numbers."""

from __future__ import annotations

from itertools import product
from random import Random

import pytest

from vliwsim.description.operations import Kind, Operation
from vliwsim.description.tables import load_operations
from vliwsim.flow.follow import telling, told_from, zero_test
from vliwsim.flow.values import ALWAYS, Constant, Knowledge, Literal, both, literal

FAMILIES = ("integer", "fixed", "packed", "bits", "memory", "control", "float")
OPERATIONS = load_operations(FAMILIES).by_name
CORNERS = (0, 1, 2, 0x80000000, 0xFFFFFFFF, 0x10000, 0xFF, 0x7FFFFFFF)


def told(operation: Operation) -> str:
    kind = telling(operation)
    assert kind is not None
    return kind


TELLING = [operation for operation in OPERATIONS.values() if telling(operation)]


def test_the_operations_that_tell() -> None:
    assert {o.name: telling(o) for o in TELLING} == {
        "li": "copy",
        "mv": "copy",
        "fmv.s": "copy",
        "seqz": "zero",
        "snez": "nonzero",
        "czero.eqz": "passed nonzero",
        "czero.nez": "passed zero",
    }


@pytest.mark.parametrize("operation", TELLING, ids=lambda o: o.name)
def test_what_an_operation_tells_is_so(operation: Operation) -> None:
    r = Random(1)
    numbers = [*CORNERS, *(r.getrandbits(32) for _ in range(40))]
    for values in product(numbers, repeat=len(operation.inputs)):
        (result,) = operation.evaluate(values)
        a, b = values[0], values[-1]
        expected = {
            "copy": a,
            "zero": int(a == 0),
            "nonzero": int(a != 0),
            "passed nonzero": a if b else 0,
            "passed zero": 0 if b else a,
        }[told(operation)]
        assert result == expected


def test_no_other_operation_is_a_copy_of_its_input() -> None:
    """An operation that told something and was overlooked costs only precision; there are few."""
    r = Random(2)
    copies = []
    for operation in OPERATIONS.values():
        if operation.kind is not Kind.COMPUTE or len(operation.inputs) != 1 or telling(operation):
            continue
        if any(o.half or o.pair or o.role.value == "constant" for o in operation.operands):
            continue
        samples = [*CORNERS, *(r.getrandbits(32) for _ in range(50))]
        if all(operation.evaluate([value]) == (value,) for value in samples):
            copies.append(operation.name)
    assert copies == []


def test_branches_that_compare_with_zero() -> None:
    tests = {n: zero_test(o) for n, o in OPERATIONS.items() if o.kind is Kind.BRANCH and zero_test(o) is not None}
    assert {"beq": False, "bne": True}.items() <= tests.items()
    for name in ("blt", "bgeu", "bltz", "bgez"):
        assert tests.get(name) is None
    assert list(told_from(OPERATIONS["czero.eqz"])) == [0, 1]


def test_knowledge_never_contradicts_numbers() -> None:
    """Random values with the relations that are claimed of them; facts about them are learned in any order."""
    r = Random(5)
    for _ in range(2000):
        values: list[int] = [r.choice((0, 0, 1, 2)) for _ in range(3)]
        knowledge = Knowledge()
        for _ in range(r.randrange(1, 6)):
            parent, other = r.randrange(len(values)), r.randrange(len(values))
            kind = r.choice(("count", "zero", "passed"))
            new = len(values)
            if kind == "count":
                values.append(max(values[parent] - 1, 0))
                knowledge.imply(new, [Literal(parent, True)])
            elif kind == "zero":
                values.append(int(values[parent] == 0))
                knowledge.imply(new, [Literal(parent, False)])
            else:
                values.append(values[other] if values[parent] else 0)
                knowledge.imply(new, [Literal(parent, True), Literal(other, True)])
        for index in r.sample(range(len(values)), r.randrange(1, len(values))):
            assert knowledge.learn([Literal(index, values[index] != 0)])
        assert all((values[index] != 0) == nonzero for index, nonzero in knowledge.facts.items())


def test_a_drained_count_stays_drained() -> None:
    knowledge = Knowledge()
    for step in range(1, 9):
        knowledge.imply(step, [Literal(step - 1, True)])
    assert knowledge.learn([Literal(4, False)])
    assert all(knowledge.facts[step] is False for step in range(4, 9))
    assert knowledge.learn([Literal(3, True)])
    assert all(knowledge.facts[step] is True for step in range(4))
    assert not knowledge.learn([Literal(6, True)])


def test_conditions() -> None:
    assert literal(Constant(0), True) is None
    assert literal(Constant(3), True) == ALWAYS
    one, other = literal(7, True), literal(7, False)
    assert both(one, other) is None
    assert both(one, ALWAYS) == one
    knowledge = Knowledge({7: True})
    assert knowledge.settle(one or ALWAYS) == ALWAYS
    assert knowledge.settle(other or ALWAYS) is None
    assert not knowledge.possible(other)
