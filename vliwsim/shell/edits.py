"""What-if: a register or elements changed here, on a branch of time."""

from __future__ import annotations

import re

from vliwsim.kernel.elements import ELEMENTS, convert
from vliwsim.machine.state import Batch, State
from vliwsim.shell.faults import unclear
from vliwsim.shell.forms import PACKED
from vliwsim.shell.history import Edit
from vliwsim.shell.moment import resting
from vliwsim.shell.session import Session

_EDIT = re.compile(r"\s*([A-Za-z_]\w*)\s*(?:\[([^\]:]*)(:([^\]:]*))?\])?\s*=(?!=)(.*)\Z", re.DOTALL)


def suppose(session: Session, text: str, form: str | None = None) -> str:
    """Branch time here with ``g14 = 7`` or ``x[3] = 0.5``; what was changed, as text. Raises ``Unclear``.

    ``form``: the element type the value is of, for a register; an array's elements have the array's.
    """
    match = _EDIT.match(text)
    if not match:
        raise unclear(text.strip() or "nothing", "a register or element, =, and a value", "suppose g14 = 7")
    name, low, ranged, high, value_text = match.groups()
    value = session.value(value_text)
    if isinstance(value, bool):
        value = int(value)
    if low is None and name not in session.names.arrays:
        return _register(session, name, value, form)
    array = session.names.array(name)
    first, end = session.range_of(array, low, (high or "") if ranged else None)
    raw = _raw(array.element.name, value)
    size = array.element.bytes

    def change(state: State) -> frozenset[Edit]:
        for index in range(first, end):
            state.memory.store(array.start + index * size, size, raw & ((1 << 8 * size) - 1))
        return frozenset(("byte", b) for b in range(array.start + first * size, array.start + end * size))

    session.branch(change)
    return f"{name}[{first}]" if end == first + 1 else f"{name}[{first}:{end}]"


def _register(session: Session, name: str, value: int | float, form: str | None) -> str:
    number = session.names.register(name)
    kind = form
    if kind is None and name in session.names.scalars:
        kind = session.names.scalars[name][1].name
    if kind in PACKED or kind in ("hex", "bits"):
        kind = None
    raw = _raw(kind, value) & 0xFFFFFFFF
    if session.layout.core.register_names[number] in session.layout.core.zero_registers:
        raise unclear(f"{name} is always 0 on this core", "another register")

    def change(state: State) -> frozenset[Edit]:
        state.operands[number] = raw
        if not resting(state) and state.beat in state.flight:  # what lands in this very beat would replace it
            sites = session.machine.ready.sites
            kept: list[Batch] = []
            for numbers, values in state.flight[state.beat]:
                pairs = [(n, v) for n, v in zip(numbers, values) if sites[n].write.register != number]
                if pairs:
                    kept.append((tuple(n for n, _ in pairs), tuple(v for _, v in pairs)))
            state.flight[state.beat] = kept
        return frozenset([("register", number)])

    session.branch(change)
    return session.layout.register(number)


def _raw(kind: str | None, value: int | float) -> int:
    """The raw bits of a value; a register without a form takes any number of 32 bits, a float as binary32."""
    if kind is None and isinstance(value, int):
        if not -(1 << 31) <= value < 1 << 32:
            raise unclear(f"{value} does not fit a register", "-2**31 to 2**32 - 1", name="value-range")
        return value
    element = ELEMENTS[kind or "f32"]
    made = convert(element, value, str(value))
    if made.array is None:
        problem = made.problems[0]
        raise unclear(problem.found, problem.allowed, problem.remedy, name=problem.name)
    return element.raw(made.array[()])
