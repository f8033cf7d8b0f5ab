"""Conditions: expressions with events in them, judged at a moment.

``landed g6``: a result reaches g6 in this beat. ``stored y[3]``: this bundle stores to it. ``stalled`` (or ``stalled
bank``): this cycle issues nothing. ``illegal``: a hazard stops the run here. ``differs`` (or ``differs y``): this
bundle stores something else than the reference expects, or the run is over and an output is wrong.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

import attrs

from vliwsim.description.operations import Kind
from vliwsim.description.values import Value, join
from vliwsim.machine.issued import Issued
from vliwsim.machine.parts import Part
from vliwsim.machine.state import CAUSES, State
from vliwsim.shell.faults import unclear
from vliwsim.shell.moment import guard_is_on, resting, seen
from vliwsim.shell.terms import Array, Term, UndefinedHere, term

if TYPE_CHECKING:
    from vliwsim.shell.session import Session

EVENTS = ("landed", "stored", "stalled", "illegal", "differs")
"""The words that only conditions have."""

_EVENT = re.compile(
    r"\b(?:landed\s+(?P<register>[A-Za-z_]\w*)"
    r"|stored\s+(?P<array>[A-Za-z_]\w*)\s*(?:\[(?P<index>[^\]:]*)(?P<range>:(?P<stop>[^\]:]*))?\])?"
    rf"|stalled(?:\s+(?P<cause>{'|'.join(CAUSES)})\b)?"
    r"|(?P<illegal>illegal)\b"
    r"|(?P<differs>differs)\b(?:\s+(?!and\b|or\b|if\b|else\b)(?P<output>[A-Za-z_]\w*))?)"
)


@attrs.frozen(eq=False)
class Condition:
    """A parsed condition. ``eventful``: it has an event in it, so that holding twice in a row is two happenings."""

    text: str
    eventful: bool
    term: Term
    events: dict[str, Callable[[State], bool]]
    _reads: bool = True
    """Whether it asks for registers, which costs time."""

    def holds(self, session: Session, state: State) -> bool:
        """Whether it holds at the moment of ``state``; where something it asks for is undefined it does not.

        Raises :class:`~vliwsim.shell.faults.Unclear` where it has no value.
        """
        registers = seen(session.machine, state) if self._reads else []
        events = {name: (lambda e=event: e(state)) for name, event in self.events.items()}
        try:
            return bool(self.term.value(session.names, state, registers, events))
        except UndefinedHere:
            return False


def condition(session: Session, text: str) -> Condition:
    """Parse a condition; raises :class:`~vliwsim.shell.faults.Unclear`."""
    if not text.strip():
        raise unclear("no condition", "an expression, landed g6, stored y[3], stalled, illegal, differs")
    events: dict[str, Callable[[State], bool]] = {}
    made: dict[str, str] = {}

    def event(match: re.Match[str]) -> str:
        name = f"event_{len(events)}_"
        events[name] = _event(session, match)
        made[name] = match[0]
        return name

    written = _EVENT.sub(event, text)
    left = re.search(r"\b(landed|stored|stalled|illegal|differs)\b", written)
    if left and left[1] not in session.names.all():
        raise unclear(f"{left[1]} with nothing behind it", "landed g6, stored y[3]")
    parsed = term(session.names, written, made)
    return Condition(text.strip(), bool(events), parsed, events, parsed.reads_registers(session.names))


def _event(session: Session, match: re.Match[str]) -> Callable[[State], bool]:
    if match["register"]:
        number = session.names.register(match["register"])
        return lambda state: _landed(session, state, number)
    if match["array"]:
        array = session.names.array(match["array"])
        low, high = session.range_of(array, match["index"], match["stop"] if match["range"] else None)
        return lambda state: _stored(session, state, array, low, high)
    if match["illegal"]:
        return lambda state: session.hazard_at(state.cycle) is not None
    if match["differs"]:
        names = [session.output_named(match["output"])] if match["output"] else None
        session.need_reference()
        return lambda state: _differs(session, state, names)
    cause = match["cause"]
    return lambda state: (found := session.looker.stalls(state)) is not None and cause in (None, found)


def _landed(session: Session, state: State, register: int) -> bool:
    if resting(state):
        return False
    sites = session.machine.ready.sites
    return any(sites[n].write.register == register for batch, _ in state.flight.get(state.beat, ()) for n in batch)


Stores = Sequence[tuple[int, int, Value]]
"""(address, bytes, value) of each."""


def _some_store(session: Session, state: State, wanted: Callable[[Stores], bool]) -> bool:
    """Whether the bundle of this cycle issues and makes stores that are ``wanted``.

    Where no bundle ever waits, what it would store is worked out first, and stepped only if that is wanted: most are
    not, and a step by definition takes ten times as long.
    """
    if resting(state) or state.halt_beat is not None:
        return False
    parts = session.machine.ready[state.at].parts
    if not any(part.operation.kind is Kind.STORE for part in parts):
        return False
    if not session.machine.core.interlocked and not wanted(_would_store(parts, seen(session.machine, state))):
        return False
    did = session.looker.step(state)
    return isinstance(did, Issued) and wanted(did.stores)


def _would_store(parts: Sequence[Part], registers: list[Value]) -> Stores:
    """What these operations store, if they issue and nothing is illegal."""
    found = []
    for part in parts:
        access, reach = part.operation.access, part.reach
        if access and access.store and reach and guard_is_on(part, registers):
            address = reach.address(registers[reach.base], registers[reach.step])
            inputs = [
                join(registers[i.index], registers[i.index + 1]) if i.pair else registers[i.index] for i in part.inputs
            ]
            if isinstance(address, int):
                found.append((address, access.bytes, part.operation.evaluate(inputs, part.halves)[-1]))
    return found


def _stored(session: Session, state: State, array: Array, low: int, high: int) -> bool:
    first, end = array.start + low * array.element.bytes, array.start + high * array.element.bytes

    def inside(stores: Stores) -> bool:
        return any(address < end and address + size > first for address, size, _ in stores)

    return _some_store(session, state, inside)


def _differs(session: Session, state: State, names: list[str] | None) -> bool:
    """A wrong element stored by this bundle, or at the end any output that is wrong."""
    if state.finished:
        return session.judge.wrong(state, names) is not None
    return _some_store(session, state, lambda stores: session.judge.stores_wrong(stores, names))
