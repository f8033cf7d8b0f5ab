"""Worked examples of operations: values as people write them, and the check that the meaning gives them.

An example is ``[[inputs…], [outputs…]]`` in the order of the operation's ``inputs`` and ``outputs``. An integer is
written in the operand's own type (or as its unsigned bits), lanes as a list from lane 0, a float as a number, as
``"nan"``, ``"inf"``, ``"-inf"``, or as its bits ``"0x7fc00000"``; what is loaded or stored as an integer of its size.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence

from vliwsim.description.language.types import ValueType
from vliwsim.description.operations import Operation
from vliwsim.problems import Place, Problem


class BadValue(ValueError):
    """A value of an example that its operand cannot have; the message says what was found and what is allowed."""


def brief(value: object) -> str:
    """A value of a data file, short, for a message."""
    try:
        text = repr(value)
    except ValueError:
        text = "a number of thousands of digits"
    return text if len(text) <= 60 else text[:59] + "…"


def raw_of(value: object, kind: ValueType, register: bool = True) -> int:
    """The raw value of what an example says; ``register``: extended to a whole register as results are."""
    if kind.packed and isinstance(value, (list, tuple)):
        if len(value) != kind.lanes:
            raise BadValue(f"{len(value)} lanes for {kind.name}, not {kind.lanes}")
        lane = ValueType(kind.name, kind.bits, kind.signed)
        return sum(raw_of(part, lane, register=False) << k * kind.bits for k, part in enumerate(value))
    if kind.floating:
        return _float_bits(value)
    number = _integer(value, kind)
    width = kind.width
    if not -(1 << width - 1) <= number < 1 << width:
        raise BadValue(f"{brief(number)} for {kind.name}, which has {width} bits")
    if register and not kind.packed and width < 32:
        return kind.value(number) & 0xFFFFFFFF
    return number & (1 << width) - 1


def _integer(value: object, kind: ValueType) -> int:
    if isinstance(value, str) and len(value) < 40:
        try:
            return int(value, 16 if value.lower().startswith("0x") else 10)
        except ValueError:
            pass
    if not isinstance(value, int):
        wanted = f"a list of {kind.lanes} integers" if kind.packed else "an integer"
        raise BadValue(f"{brief(value)} for {kind.name}, not {wanted}")
    return int(value)


def _float_bits(value: object) -> int:
    from vliwsim.description.language.floats import from_float

    try:
        if isinstance(value, str):
            if value.lower().startswith("0x"):
                bits = int(value, 16)
                if bits >> 32:
                    raise BadValue(f"{value!r} for f32, which has 32 bits")
                return bits
            return from_float(float(value))
        if isinstance(value, (int, float)) and not isinstance(value, bool):
            return from_float(float(value))
    except (ValueError, OverflowError):
        pass
    raise BadValue(f'{brief(value)} for f32, not a number, "nan", "inf" or bits such as "0x7fc00000"')


def shown(raw: int, kind: ValueType) -> object:
    """A raw value in the operand's own type, as an example would say it."""
    if kind.floating:
        number = struct.unpack("<f", struct.pack("<I", raw & 0xFFFFFFFF))[0]
        return f"0x{raw:08x}" if number != number else number
    if kind.packed:
        return [kind.value(raw >> k * kind.bits) for k in range(kind.lanes)]
    return kind.value(raw)


def check_examples(operation: Operation, place: Place | None = None) -> list[Problem]:
    """Runs every example through both the compiled function and the slow evaluator; what differs, or is malformed."""
    problems: list[Problem] = []
    for number, example in enumerate(operation.examples):
        key = f"{operation.name}.examples[{number}]"
        try:
            given, expected = _raw_example(operation, example)
        except BadValue as error:
            problems.append(Problem("bad-example", str(error), _form(operation), place=place, key=key))
            continue
        compiled = operation.compiled()(*given)
        fast = compiled if isinstance(compiled, tuple) else () if compiled is None else (compiled,)
        slow = operation.evaluate(given)
        if tuple(slow) != fast:
            problems.append(
                Problem("engines-differ", f"{fast} compiled, {slow} evaluated", "one meaning", place=place, key=key)
            )
        if fast != expected:
            types = operation.meaning.output_types
            gives = ", ".join(f"{name} = {shown(raw, types[name])}" for name, raw in zip(operation.outputs, fast))
            wants = ", ".join(f"{name} = {shown(raw, types[name])}" for name, raw in zip(operation.outputs, expected))
            problems.append(
                Problem(
                    "example-fails",
                    f"{gives} from {brief(list(example[0]))}",
                    f"{wants}, as the example says",
                    "correct the meaning or the example",
                    place=place,
                    key=key,
                )
            )
    return problems


def _raw_example(operation: Operation, example: object) -> tuple[list[int], tuple[int, ...]]:
    if (
        not isinstance(example, (list, tuple))
        or len(example) != 2
        or not all(isinstance(p, (list, tuple)) for p in example)
    ):
        raise BadValue("not a list of inputs and a list of outputs")
    given, expected = example
    if len(given) != len(operation.inputs) or len(expected) != len(operation.outputs):
        raise BadValue(f"{len(given)} inputs and {len(expected)} outputs")
    meaning = operation.meaning
    halves = {operand.name for operand in operation.operands if operand.half}
    constants = {o.name for o in operation.operands if o.role.value == "constant"}
    inputs = [
        raw_of(value, kind, register=name != "loaded" and name not in halves)
        if name not in constants
        else _constant(value, kind)
        for value, (name, kind) in zip(given, meaning.input_types.items())
    ]
    outputs = [
        raw_of(value, kind, register=name != "stored")
        for value, (name, kind) in zip(expected, meaning.output_types.items())
    ]
    return inputs, tuple(outputs)


def _constant(value: object, kind: ValueType) -> int:
    number = _integer(value, kind)
    if not kind.low <= number <= kind.high:
        raise BadValue(f"{brief(number)} for the constant {kind.name}, {kind.low} to {kind.high}")
    return number & 0xFFFFFFFF


def _form(operation: Operation) -> str:
    return f"[[{', '.join(operation.inputs)}], [{', '.join(operation.outputs)}]]"


def examples_of(value: object) -> tuple[tuple[tuple[object, ...], tuple[object, ...]], ...]:
    """The examples of a table as tuples (their shape is judged by :func:`check_examples`)."""
    assert isinstance(value, Sequence)
    return tuple(_tuples(example) for example in value)  # type: ignore[misc]


def _tuples(value: object) -> object:
    return tuple(_tuples(part) for part in value) if isinstance(value, list) else value
