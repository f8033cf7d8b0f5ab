"""The manual page of an operation, as data: made from the same row that everything else is made from."""

from __future__ import annotations

from vliwsim.description.examples import brief
from vliwsim.description.language.types import type_named
from vliwsim.description.operations import Kind, Operand, Operation, Role

_ROLES = {
    Role.RESULT: "written",
    Role.SOURCE: "read",
    Role.INOUT: "read and written",
    Role.STICKY: "ORed into its register",
    Role.ADDRESS: "an address: [r], [r + 8], [r then +8], [+8 then r], …",
    Role.TARGET: "a label, or a register with a code address",
    Role.CONSTANT: "a constant",
}


def syntax(operation: Operation) -> str:
    """How the operation is written: its name and its operands' names, an address in brackets."""
    shown = ", ".join(_written(operand) for operand in operation.operands)
    return f"{operation.name} {shown}".rstrip()


def manual(operation: Operation) -> list[tuple[str, str]]:
    """The page as (heading, text) in order; a text may have several lines."""
    page = [
        ("Written", syntax(operation)),
        ("Does", operation.summary),
        ("Exactly", "\n".join(line.strip() for line in operation.does.strip().splitlines())),
    ]
    if operation.operands:
        page.append(("Operands", "\n".join(_described(operation, operand) for operand in operation.operands)))
    page.append(("Class", f"{operation.operation_class} (its slots and latency are the core's)"))
    page.append(("Code", f"{operation.code:#x}"))
    page.append(("Family", operation.family))
    if operation.examples:
        page.append(("Examples", "\n".join(_example(operation, example) for example in operation.examples)))
    return page


def _written(operand: Operand) -> str:
    if operand.role is Role.ADDRESS:
        return f"[{operand.name}]"
    return f"{operand.name}.lo|hi" if operand.half else operand.name


def _described(operation: Operation, operand: Operand) -> str:
    if operand.role in (Role.ADDRESS, Role.TARGET):
        return f"{operand.name}  {_ROLES[operand.role]}"
    kind = type_named(operand.type)
    words = [_typed(operand), _ROLES[operand.role]]
    if operation.count and operand.role is Role.INOUT:
        words[1] = "read, and written when the branch is taken"
    if operand.half:
        words.append("the low or high half of a register")
    if operand.pair:
        words.append("an even:odd pair of registers, named by the even one")
    if operand.role is Role.CONSTANT:
        words.append(f"{kind.low} to {kind.high}")
    if kind.packed:
        words.append(f"{kind.lanes} lanes, lane 0 lowest")
    return f"{operand.name}  {', '.join(words)}"


def _typed(operand: Operand) -> str:
    return "binary32" if operand.type == "f32" else operand.type


def _example(operation: Operation, example: tuple[tuple[object, ...], tuple[object, ...]]) -> str:
    """``a = 3, b = -4 gives d = -12``."""
    given, expected = example
    before = ", ".join(f"{name} = {_value(value)}" for name, value in zip(operation.inputs, given))
    after = ", ".join(
        f"{_output(operation, name)} = {_value(value)}" for name, value in zip(operation.outputs, expected)
    )
    return f"{before} gives {after}" if before else after


def _output(operation: Operation, name: str) -> str:
    return "memory" if name == "stored" and operation.kind is Kind.STORE else name


def _value(value: object) -> str:
    if isinstance(value, tuple):
        return f"[{', '.join(_value(part) for part in value)}]"
    return value if isinstance(value, str) else brief(value)
