"""What stands at a cycle: the prompt, the three lines after a move, the bundle in full, and what is in flight."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable

from vliwsim.description.operations import Role
from vliwsim.description.values import Value
from vliwsim.faces.shell.lines import Line, clipped, joined, length, tint, tinted
from vliwsim.machine.parts import Part
from vliwsim.program.code import Address, Register
from vliwsim.shell.forms import value_text, with_pattern
from vliwsim.shell.moment import Flight, Moment
from vliwsim.shell.session import Session

CAUSES = {
    "bank": "a bank conflict",
    "wait": "wait states of the memory",
    "straddle": "a target that straddles two fetch groups",
    "penalty": "a taken branch",
    "hold": "waiting for a result or a unit",
    "fresh": "an operand that crosses fresh",
    "interrupt": "the service of an interrupt",
}
"""Causes of stalls in words."""


def place_text(session: Session) -> str:
    """``31 · loop@2 · pass 7``."""
    state, layout = session.state, session.layout
    if state.finished:
        return f"{state.cycle} · end"
    if state.halt_beat is not None and not state.frozen:
        return f"{state.cycle} · drain"
    parts = [str(state.cycle), layout.where(state.at, state.within)]
    section = layout.section_at(state.at)
    number = layout.pass_of(state)
    if layout.repeats(section) or number > 1:
        parts.append(f"pass {number}")
    return " · ".join(parts)


def prompt_text(session: Session) -> str:
    """The prompt, with a word when time is on a branch."""
    return f"{place_text(session)}{' · supposing' if session.supposing else ''} ? "


def three_lines(session: Session, width: int) -> list[Line]:
    """What landed and from where, what issues now, what is still out; in short where there is too much for a line."""
    moment, room = session.moment(), width - 11
    landed, issues = _landed(session, moment), _issues(session, moment)
    if length(joined(landed, " · ", 1 << 20)) > room and len(landed) > 1:
        landed = _landed_in_short(session, moment)
    if length(joined(issues, " · ", 1 << 20)) > room and len(issues) > 1:
        issues = [_short(session, moment, k) for k in range(len(moment.parts))]
    rows = [("landed", landed), ("issues", issues), ("out", _out(session, moment))]
    return [
        [("faint", f"  {word:<7} "), *(joined(items, " · ", room) or [("faint", "nothing")])] for word, items in rows
    ]


def _landed_in_short(session: Session, moment: Moment) -> list[Line]:
    """Registers by the line that sent them: ``g2 h2 from line 19``."""
    groups: dict[str, list[Flight]] = {}
    for flight in moment.landings:
        line = session.layout.line(flight.site.bundle, flight.site.instruction)
        where = f"line {line}" if line else session.layout.where(flight.site.bundle)
        groups.setdefault(where, []).append(flight)
    lines = []
    for where, flights in groups.items():
        names: Line = []
        for flight in flights:
            name = session.layout.register(flight.register)
            names += [("", " " if names else ""), (tint(flight.register, flight.value), name)]
        lines.append([*names, ("faint", f" from {where}")])
    return lines


def _short(session: Session, moment: Moment, instruction: int) -> Line:
    """An operation by its name and its first operand."""
    line = operation_line(session, moment, instruction)
    text = "".join(piece for _, piece in line)
    cut = text.find(",")
    if cut < 0:
        return line
    out = clipped(line, cut + 1)[:-1]
    return [*out, ("faint", ")")] if text.startswith("(") else out


def _landed(session: Session, moment: Moment) -> list[Line]:
    if moment.hazard and moment.hazard.name in ("lands-twice", "write-ports"):
        return [[("wrong", "nothing, "), ("", f"{len(moment.landings)} results were to")]]
    return [_arrival(session, flight, moment.beat) for flight in moment.landings]


def _arrival(session: Session, flight: Flight, beat: int) -> Line:
    """``g6 = 9 from dot.h2, line 27``."""
    name = session.layout.register(flight.register)
    site = flight.site
    operation = session.machine.ready[site.bundle].parts[site.instruction].operation.name
    line = session.layout.line(site.bundle, site.instruction)
    where = f"line {line}" if line else session.layout.where(site.bundle)
    style = tint(flight.register, flight.value)
    return [(style, f"{name} = {value_text(flight.value)}"), ("faint", f" from {operation}, {where}")]


def _issues(session: Session, moment: Moment) -> list[Line]:
    if moment.hazard:
        return [[("wrong", f"illegal, {moment.hazard.name}: "), ("", moment.hazard.found)]]
    if moment.cause == "end":
        return [[("", f"nothing: the run is over after {moment.cycle} cycles")]]
    if moment.cause == "drain":
        return [[("", "nothing: results behind the halt are landing")]]
    if moment.cause:
        left = int(session.state.frozen[0][1]) if session.state.frozen else session.state.service
        more = f", {left} cycles to go" if left > 1 else ""
        return [[("", f"nothing: {CAUSES[moment.cause]}{more}")]]
    if not moment.parts:
        left = session.kernel.program.bundles[moment.bundle].beats - moment.within
        return [[("", "nothing: idle" + (f" for {left} beats" if left > 1 else ""))]]
    return [operation_line(session, moment, k) for k in range(len(moment.parts))]


def operation_line(session: Session, moment: Moment, instruction: int) -> Line:
    """One operation of this cycle, every register in the tint of the value it holds or will get."""
    part = moment.parts[instruction]
    text = session.layout.text(moment.bundle, instruction)
    on = moment.issued is None or moment.issued.on[instruction]
    if not on:
        return [("faint", f"({text})")]
    return tinted(text, _styles(session, moment, part))


def _styles(session: Session, moment: Moment, part: Part) -> dict[str, str]:
    styles: dict[str, str] = {}
    name = session.layout.register
    read = {r.register for r in part.effects.reads}
    if part.instruction.guard:
        read.add(part.instruction.guard.register)
    for register in sorted(read):
        styles[name(register)] = tint(register, moment.registers[register])
    for register, value in _sent(moment, part):
        if register not in read:
            styles[name(register)] = tint(register, value)
    return styles


def _sent(moment: Moment, part: Part) -> list[tuple[int, Value]]:
    results = moment.results
    return [
        (write.register, results[n]) for n, write in zip(part.numbers, part.effects.writes, strict=True) if n in results
    ]


def _out(session: Session, moment: Moment) -> list[Line]:
    """Registers by how many beats they still fly: ``in 1: g2 h2``."""
    groups: dict[int, list[Flight]] = {}
    for flight in moment.out:
        groups.setdefault(flight.lands - moment.beat, []).append(flight)
    lines = []
    for beats, flights in groups.items():
        line: Line = [("faint", "now:" if beats == 0 else f"in {beats}:")]
        for flight in flights:
            line += [("", " "), (tint(flight.register, flight.value), session.layout.register(flight.register))]
        lines.append(line)
    return lines


# ----------------------------------------------------------------------------------------------------------- in full


def here(session: Session, width: int = 80) -> list[Line]:
    """The bundle with its operand values, what it sends, what it stores."""
    moment = session.moment()
    lines: list[Line] = [[("", f"  {place_text(session)} · beat {moment.beat}")]]
    if moment.hazard:
        lines += [
            [("wrong" if k == 0 else "", f"  {row}")] for k, row in enumerate(_hazard_rows(session, moment, width))
        ]
    elif moment.cause or not moment.parts:
        lines.append([("", "  "), *_issues(session, moment)[0]])
    if moment.cause not in (None, "hold", "fresh", "interrupt") or not moment.parts:
        return lines
    for k, part in enumerate(moment.parts):
        lines += [clipped(line, width) for line in _operation_in_full(session, moment, k, part)]
    return lines


def _hazard_rows(session: Session, moment: Moment, width: int) -> list[str]:
    assert moment.hazard is not None
    rows: list[str] = []
    for row in str(session.hazard_problem(moment.hazard)).splitlines():
        rows += textwrap.wrap(row, max(30, width - 2), subsequent_indent=" " * 11) if row.startswith("  ") else [row]
    return rows


def _operation_in_full(session: Session, moment: Moment, k: int, part: Part) -> list[Line]:
    line = session.layout.line(moment.bundle, k)
    slot = session.kernel.core.slots[part.instruction.slot].name
    head: Line = [("", "  "), *operation_line(session, moment, k)]
    head.append(("faint", f"   {slot}{f', line {line}' if line else ''}"))
    lines = [head]
    reads = _named_values(session, moment, part)
    if reads:
        lines.append([("faint", "      reads  "), *_listed(reads)])
    guard = part.instruction.guard
    if guard:
        value = moment.registers[guard.register]
        on = moment.issued is None or moment.issued.on[k]
        name = session.layout.register(guard.register)
        says = "" if moment.issued is None else (", so it is on" if on else ", so it is off")
        lines.append(
            [("faint", "      guard  "), (tint(guard.register, value), f"{name} = {value_text(value)}"), ("", says)]
        )
    by_beats: dict[int, list[Line]] = {}
    results = moment.results
    for n, write in zip(part.numbers, part.effects.writes, strict=True):
        if n in results:
            text = f"{session.layout.register(write.register)} = {with_pattern(results[n])}"
            by_beats.setdefault(write.latency, []).append([(tint(write.register, results[n]), text)])
    for beats, items in sorted(by_beats.items()):
        lines.append([("faint", "      sends  "), *_listed(items), ("faint", f" in {beats} beat{'s' * (beats > 1)}")])
    stored = stored_text(session, moment, k)
    if stored:
        lines.append([("faint", "      stores "), ("", stored)])
    return lines


def _listed(items: Iterable[Line]) -> Line:
    out: Line = []
    for item in items:
        out += [("", ", "), *item] if out else item
    return out


def _named_values(session: Session, moment: Moment, part: Part) -> list[Line]:
    """The registers that an operation reads, with their values; each once."""
    found: dict[int, Line] = {}
    halves = {
        place.number: place.half
        for operand, place in zip(part.operation.operands, part.instruction.places, strict=True)
        if isinstance(place, Register) and place.half is not None and operand.role is not Role.RESULT
    }
    newer = {f.register: f.lands - moment.beat for f in reversed(moment.out)}
    bases = {p.base for p in part.instruction.places if isinstance(p, Address)}
    for read in part.effects.reads:
        value = moment.registers[read.register]
        text = f"{session.layout.register(read.register)} = {with_pattern(value)}"
        if read.register in halves and isinstance(value, int):
            half = halves[read.register]
            short = value >> 16 * int(half or 0) & 0xFFFF
            text += f", {'hi' if half else 'lo'} {short - 0x10000 if short >> 15 else short}"
        if read.register in bases:
            text += location(session, value)
        if read.register in newer:
            text += f" (newer in {newer[read.register]})"
        found.setdefault(read.register, [(tint(read.register, value), text)])
    return list(found.values())


def location(session: Session, value: Value) -> str:
    """`` in x[3]`` where an address lies in an array."""
    found = session.names.array_at(value) if isinstance(value, int) else None
    return f" at {found[0].name}[{found[1]}]" if found else ""


def stored_text(session: Session, moment: Moment, instruction: int) -> str:
    """What one operation of this cycle stores: ``y[3] = 5``."""
    if moment.issued is None:
        return ""
    storing = [
        k
        for k, part in enumerate(moment.parts)
        if moment.issued.on[k] and part.operation.access and part.operation.access.store
    ]
    if instruction not in storing:
        return ""
    address, size, value = moment.issued.stores[storing.index(instruction)]
    return store_words(session, address, size, value)


def store_words(session: Session, address: int, size: int, value: Value) -> str:
    """A store in terms of the array it goes to."""
    found = session.names.array_at(address)
    if not found or not isinstance(value, int):
        return f"{value_text(value)} to address {address:#x}"
    array, index = found
    count = max(1, size // array.element.bytes)
    width = 8 * array.element.bytes
    raws = [value >> width * k & ((1 << width) - 1) for k in range(count)]
    if array.endianness == "big":
        raws.reverse()
    from vliwsim.shell.forms import element_text

    texts = ", ".join(element_text(array.element, raw) for raw in raws)
    return f"{array.name}[{index}] = {texts}" if count == 1 else f"{array.name}[{index}:{index + count}] = {texts}"


def flight(session: Session, register: int | None = None, width: int = 80) -> list[Line]:
    """What is out, by landing beat; of one register where given."""
    moment = session.moment()
    every = [f for f in (*moment.landings, *moment.out) if register in (None, f.register)]
    if not every:
        what = session.layout.register(register) if register is not None else "anything"
        return [[("", f"  nothing is in flight{f' for {what}' if register is not None else ''}")]]
    lines: list[Line] = []
    before = None
    for f in every:
        beats = f.lands - moment.beat
        head = "lands now" if beats == 0 and f in moment.landings else f"in {beats} beat{'s' * (beats != 1)}"
        site = f.site
        text = session.layout.text(site.bundle, site.instruction)
        ago = moment.beat - f.sent
        line = session.layout.line(site.bundle, site.instruction)
        name = session.layout.register(f.register)
        sent = f"sent {session.layout.where(site.bundle)} {ago} beat{'s' * (ago != 1)} ago"
        row: Line = [
            ("faint", f"  {'' if head == before else head:<12}"),
            (tint(f.register, f.value), f"{name} = {value_text(f.value)}"),
            ("faint", f"  {sent}{f', line {line}' if line else ''}"),
            ("", f"  {text}"),
        ]
        lines.append(clipped(row, width))
        before = head
    return lines
