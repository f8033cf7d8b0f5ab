"""The shipped operations as the tests of this folder use them: by value instead of by raw register bits.

A value is an int in its type's signedness, a tuple of lanes (lane 0 first), or the 32 bits of a binary32 number.
"""

from __future__ import annotations

import functools
import itertools
import random
import struct
from collections.abc import Callable, Iterator, Mapping

from vliwsim.description.language.types import ValueType
from vliwsim.description.operations import Kind, Operation, OperationSet
from vliwsim.description.tables import load_operations

FAMILIES = ("integer", "fixed", "packed", "bits", "memory", "control", "float")
_NAMED = {"nan": 0x7FC00000, "inf": 0x7F800000, "-inf": 0xFF800000, "-0.0": 0x80000000}

Model = Callable[..., object]


@functools.cache
def operations() -> OperationSet:
    """Every shipped operation."""
    return load_operations(FAMILIES)


def names(*families: str) -> list[str]:
    return [name for name, found in operations().by_name.items() if found.family in families]


def operation(name: str) -> Operation:
    return operations().by_name[name]


def float_bits(number: float) -> int:
    return int(struct.unpack("<I", struct.pack("<f", number))[0])


def raw(kind: ValueType, value: object) -> int:
    """The bits of a value written as in a table's examples."""
    if kind.packed:
        assert isinstance(value, (list, tuple))
        assert len(value) == kind.lanes
        return sum(raw_lane(kind, lane) << k * kind.bits for k, lane in enumerate(value))
    if kind.floating:
        if isinstance(value, str):
            return _NAMED[value] if value in _NAMED else int(value, 16)
        return float_bits(value) if isinstance(value, float) else int(str(value))
    return raw_lane(kind, value)


def raw_lane(kind: ValueType, value: object) -> int:
    assert type(value) is int, value
    assert kind.low <= value < 1 << kind.bits, (kind.name, value)
    return value & (1 << kind.bits) - 1


def read(kind: ValueType, bits: object) -> object:
    """The value of raw bits."""
    assert type(bits) is int
    if kind.packed:
        return tuple(kind.value(bits >> k * kind.bits) for k in range(kind.lanes))
    return bits if kind.floating else kind.value(bits)


def by_value(name: str, slow: bool = False) -> Callable[..., object]:
    """The operation as a function of values; several outputs come as a tuple."""
    found = operation(name)
    given, made = found.meaning.input_types.values(), found.meaning.output_types.values()
    fast = found.compiled()

    def run(*values: object) -> object:
        inputs = [raw(kind, value) for kind, value in zip(given, values, strict=True)]
        if slow:
            results = found.evaluate(inputs)
        else:
            result = fast(*inputs)
            results = result if isinstance(result, tuple) else (result,)
        for kind, bits in zip(made, results, strict=True):
            if kind.signed and kind.bits < 32 and not kind.packed and found.kind is not Kind.STORE:
                assert bits == kind.value(bits) & 0xFFFFFFFF, "a narrow result fills its register"
        outputs = tuple(read(kind, bits) for kind, bits in zip(made, results, strict=True))
        return outputs[0] if len(outputs) == 1 else outputs

    return run


# Inputs


def extremes(kind: ValueType) -> list[int]:
    """Values of one lane at which arithmetic goes wrong first."""
    found = {0, 1, 2, 3, 5, kind.low, kind.low + 1, kind.high, kind.high - 1, kind.high // 2, kind.high // 2 + 1}
    found |= {kind.value(x) for x in (-1, -2, -3, 0x55555555, 0xAAAAAAAA)}
    found |= {kind.value(1 << k) for k in (3, kind.bits // 2 - 1, kind.bits // 2)}
    if kind.bits >= 32:
        found |= {31, 32, 33, 63, 64} | {kind.value(-x) for x in (31, 32, 33, 100)}
    return sorted(x for x in found if kind.low <= x <= kind.high)


def draw(kind: ValueType, chance: random.Random) -> object:
    """A random value: uniform, of random length, with low zeros (for ties), or extreme."""
    lanes = []
    for _ in range(kind.lanes):
        way = chance.randrange(4)
        if way == 0:
            lanes.append(chance.randint(kind.low, kind.high))
        elif way == 1:
            length = chance.randrange(kind.bits + 1)
            lanes.append(kind.value(chance.getrandbits(kind.bits) >> length if chance.random() < 0.5 else
                                    ~(chance.getrandbits(kind.bits) >> length)))  # fmt: skip
        elif way == 2:
            lanes.append(kind.value((chance.getrandbits(kind.bits) | 1) << chance.randrange(kind.bits)))
        else:
            lanes.append(chance.choice(extremes(kind)))
    return tuple(lanes) if kind.packed else lanes[0]


def inputs(found: Operation, count: int) -> Iterator[tuple[object, ...]]:
    """Combinations of extremes (a random part of them where there are many), limits in all lanes, random values."""
    kinds = list(found.meaning.input_types.values())
    chance = random.Random(found.name)
    if not any(kind.packed for kind in kinds):
        grid = list(itertools.product(*(extremes(kind) for kind in kinds)))
        yield from grid if len(grid) <= 4 * count else chance.sample(grid, 4 * count)
    for number in range(count):
        at_limits = number % 3 == 0 and any(kind.packed for kind in kinds)
        yield tuple(limits(kind, chance) if at_limits else draw(kind, chance) for kind in kinds)


def limits(kind: ValueType, chance: random.Random) -> object:
    """The lowest or highest value in every lane."""
    lanes = tuple(chance.choice((kind.low, kind.high)) for _ in range(kind.lanes))
    return lanes if kind.packed else lanes[0]


def check(name: str, model: Model, count: int = 300) -> None:
    """Holds the operation, compiled and evaluated, to a plain model over values."""
    found, fast, slow = operation(name), by_value(name), by_value(name, slow=True)
    for number, values in enumerate(inputs(found, count)):
        want = model(*values)
        assert fast(*values) == want, (name, values)
        if number % 8 == 0:
            assert slow(*values) == want, (name, values)


def covered(models: Mapping[str, Model], *families: str) -> None:
    """Every operation of the families has a model."""
    assert sorted(models) == sorted(names(*families))
