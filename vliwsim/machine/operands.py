"""Operand values of the bundle at the point of issue: guards and inputs."""

from __future__ import annotations

from vliwsim.description.values import Undefined, Value, join
from vliwsim.machine.hazards import Cause, HazardMet
from vliwsim.machine.issued import stop
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation, Prepared
from vliwsim.machine.state import State


def guards_on(ready: Preparation, state: State, prepared: Prepared) -> tuple[bool, ...]:
    """Which guards are on; ``undefined-used`` at the first undefined one."""
    on = []
    for k, part in enumerate(prepared.parts):
        guard = part.instruction.guard
        if guard is None:
            on.append(True)
            continue
        value = state.operands[guard.register]
        if isinstance(value, Undefined):
            raise undefined_used(ready, state, prepared, k, f"guard {ready.core.register_names[guard.register]}")
        on.append((value == 0) == guard.negated)
    return tuple(on)


def undefined_used(ready: Preparation, state: State, prepared: Prepared, instruction: int, what: str) -> HazardMet:
    return stop(
        "undefined-used",
        state,
        prepared.index,
        f"{what} is undefined",
        [Cause(prepared.index, instruction, state.beat)],
    )


def input_values(state: State, part: Part, loaded: Value = 0) -> list[Value]:
    """The values of an operation's inputs, pairs joined; ``loaded`` and the link where it asks for them."""
    values: list[Value] = []
    for wanted in part.inputs:
        if wanted.index < 0:
            values.append(loaded if wanted.name == "loaded" else part.link or 0)
        elif wanted.pair:
            values.append(join(state.operands[wanted.index], state.operands[wanted.index + 1]))
        else:
            values.append(state.operands[wanted.index])
    return values
