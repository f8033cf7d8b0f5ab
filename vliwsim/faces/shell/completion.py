"""What Tab offers: commands, then what each command wants."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from vliwsim.faces.shell.commands import COMMANDS
from vliwsim.kernel.interface import interface_of
from vliwsim.shell.conditions import EVENTS
from vliwsim.shell.faults import Unclear
from vliwsim.shell.forms import FORMS
from vliwsim.shell.session import Session


def offers(session: Session, text: str) -> tuple[str, list[str]]:
    """For the text before the cursor: the word to complete, and what it may become, in order."""
    head, blank, _ = text.lstrip().partition(" ")
    if not blank:
        return head, [name for name in COMMANDS if name.startswith(head)]
    word = _last_word(text)
    try:
        from vliwsim.faces.shell.commands import named

        command = COMMANDS[named(head)]
    except Unclear:
        return word, []
    before = text[: len(text) - len(word)].split()[1:]
    found: dict[str, None] = {}
    for want in command.wants:
        found.update(dict.fromkeys(_WANTS[want](session, command.name, before)))
    return word, [name for name in found if name.startswith(word)]


def _last_word(text: str) -> str:
    """The word that the cursor is in: letters, digits, and what joins a label and its beat."""
    at = len(text)
    while at and (text[at - 1].isalnum() or text[at - 1] in "_@."):
        at -= 1
    return text[at:]


def _registers(session: Session) -> Iterable[str]:
    """The source's own names first."""
    return (*session.kernel.register_names, *session.names.scalars, *session.kernel.core.register_names)


def _places(session: Session, command: str, before: list[str]) -> Iterator[str]:
    layout = session.layout
    if before[:1] == ["wrong"]:
        yield from interface_of(session.kernel).outputs
        return
    if before and before[0] == "cycle":
        return
    if before:
        yield "pass"
        return
    for section in session.kernel.map.sections:
        yield from (f"{section.label}@{beat}" for beat in range(min(section.beats, 100)))
    yield from (*layout.sections, "cycle", "end", "wrong")


def _conditions(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if command == "seek" and not before:
        yield "back"
    last = before[-1] if before else ""
    if last == "landed":
        yield from _registers(session)
    elif last == "stored":
        yield from session.names.arrays
    elif last == "differs":
        yield from interface_of(session.kernel).outputs
    else:
        yield from EVENTS
        yield from session.names.arrays
        yield from _registers(session)
        yield from (name for name in session.names.fixed if "(" not in name)
        yield from ("cycle", "beat", "pass", "and", "or", "not")


def _values(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if before[-1:] == ["as"]:
        yield from FORMS
        return
    if command == "draw" and before[-1:] == ["with"]:
        yield "reference"
    yield from session.names.arrays
    yield from _registers(session)
    if before:
        yield from ("as", *(("with", "over") if command == "draw" else ()))


def _elements(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield from session.names.arrays
        yield from _registers(session)


def _origins(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield "stall"
        yield from _elements(session, command, before)


def _only_registers(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield from _registers(session)


def _outputs(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield from interface_of(session.kernel).outputs


def _alarms(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield from map(str, session.alarms)


def _commands(session: Session, command: str, before: list[str]) -> Iterator[str]:
    if not before:
        yield from COMMANDS
        yield from sorted(session.kernel.operations.by_name)


_WANTS = {
    "places": _places,
    "conditions": _conditions,
    "values": _values,
    "elements": _elements,
    "origins": _origins,
    "registers": _only_registers,
    "outputs": _outputs,
    "alarms": _alarms,
    "commands": _commands,
}
"""What each want of a command offers, given the words before the cursor."""
