"""What the tests of the meaning language share: meanings from two texts, and raw values worth trying."""

from __future__ import annotations

import random
from collections.abc import Iterator

from vliwsim.description.language.faults import Origin
from vliwsim.description.language.meaning import Meaning, read_meaning
from vliwsim.description.operations import Role
from vliwsim.description.values import Undefined, UndefinedOperand, Value, value_of
from vliwsim.problems import OperationError

FLOATS = (0, 1, 0x7FFFFF, 0x800000, 0x3F800000, 0x3F800001, 0x4B800000, 0x7F7FFFFF, 0x7F800000, 0x7F800001, 0x7FC00000)


def meaning(operands: str, does: str, name: str = "probe") -> Meaning:
    return read_meaning(name, operands, does, Origin("probe.toml", name))


def checked(operands: str, does: str) -> Meaning:
    made = meaning(operands, does)
    assert made.statements is not None
    return made


def fault_names(operands: str, does: str) -> list[str]:
    """The names of the problems of a meaning, in order; none when it is accepted."""
    try:
        checked(operands, does)
    except OperationError as error:
        refused = error
    else:
        return []
    assert str(refused)
    assert all(problem.found for problem in refused.problems)
    return [problem.name for problem in refused.problems]


def widths(made: Meaning, halves: tuple[int | None, ...] = ()) -> list[int]:
    """Bits of the raw value of each input."""
    operands = {operand.name: operand for operand in made.operands}
    chosen = halves or (None,) * len(made.inputs)
    found = []
    for name, half in zip(made.inputs, chosen, strict=True):
        kind, operand = made.input_types[name], operands.get(name)
        if operand is None or operand.role is Role.CONSTANT or kind.width >= 32:
            found.append(kind.width)
        else:
            found.append(16 if operand.half and half is None else 32)
    return found


def a_raw(width: int, draw: random.Random) -> int:
    top = 1 << width - 1
    kind = draw.randrange(10)
    if kind == 0 and width == 32:
        return draw.choice(FLOATS) | draw.choice((0, 1 << 31))
    if kind == 1:
        return draw.choice((0, 1, top - 1, top, 2 * top - 1))
    if kind == 2:
        return draw.randrange(40) % (2 * top)
    if kind == 3:
        return (2 * top - 1 - draw.randrange(40)) % (2 * top)
    if kind == 4 and width >= 32:
        halves = (0, 1, 0x7FFF, 0x8000, 0xFFFF)
        return sum(draw.choice(halves) << 16 * k for k in range(width // 16))
    return draw.getrandbits(width)


def constants(made: Meaning) -> list[bool]:
    roles = {operand.name: operand.role for operand in made.operands}
    return [roles.get(name) is Role.CONSTANT for name in made.inputs]


def raw_inputs(made: Meaning, draw: random.Random, halves: tuple[int | None, ...] = ()) -> list[int]:
    values = [a_raw(width, draw) for width in widths(made, halves)]
    for k, (name, constant) in enumerate(zip(made.inputs, constants(made), strict=True)):
        if constant:
            values[k] = made.input_types[name].value(values[k]) & 0xFFFFFFFF
    return values


def every_halves(made: Meaning) -> Iterator[tuple[int | None, ...]]:
    """All ways to choose halves (or to give them as immediates)."""
    halved = {operand.name for operand in made.operands if operand.half}

    def ways(names: tuple[str, ...]) -> Iterator[tuple[int | None, ...]]:
        if not names:
            yield ()
            return
        for rest in ways(names[1:]):
            for half in (None, 0, 1) if names[0] in halved else (None,):
                yield (half, *rest)

    return ways(made.inputs)


def blotted(value: int, width: int, draw: random.Random) -> Value:
    """The value with some of its bytes undefined."""
    size = max(width // 8, 1)
    return value_of(value, draw.choice((0, 1, (1 << size) - 1, draw.getrandbits(size))) & (1 << size) - 1, size)


def as_tuple(result: object) -> tuple[object, ...]:
    return result if isinstance(result, tuple) else () if result is None else (result,)


def same_results(one: tuple[object, ...], other: tuple[object, ...]) -> bool:
    if len(one) != len(other):
        return False
    return all(
        a.same(b) if isinstance(a, Undefined) else type(b) is int and type(a) is int and a == b
        for a, b in zip(one, other, strict=True)
    )


def agree(made: Meaning, draw: random.Random, tries: int, halves: tuple[int | None, ...] = ()) -> None:
    """Compiled and evaluated agree on defined inputs; with undefined ones, compiled agrees or refuses."""
    fast = made.compiled(halves)
    sizes = widths(made, halves)
    fixed = constants(made)
    for _ in range(tries):
        values = raw_inputs(made, draw, halves)
        slow = made.evaluate(values, halves)
        assert same_results(as_tuple(fast(*values)), slow), (made.does, values, fast(*values), slow)
        spoilt = [
            value if constant or half_immediate else blotted(value, width, draw)
            for value, width, constant, half_immediate in zip(
                values,
                sizes,
                fixed,
                [w == 16 and n not in ("loaded",) for w, n in zip(sizes, made.inputs)],
                strict=True,
            )
        ]
        slow = made.evaluate(spoilt, halves)
        try:
            found = as_tuple(fast(*spoilt))
        except UndefinedOperand:
            continue
        assert same_results(found, slow), (made.does, spoilt, found, slow)
