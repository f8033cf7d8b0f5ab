"""Hazards and notes of the machine, said in terms of the source: lines, stamps, arrays."""

from __future__ import annotations

import re
from collections.abc import Iterable
from typing import Protocol

from vliwsim.description.operations import Kind
from vliwsim.kernel.binding import Setup, excerpt
from vliwsim.problems import Place, Problem, problem
from vliwsim.program.kernel import Kernel


class Cause(Protocol):
    """An operation behind a hazard; see :class:`vliwsim.machine.hazards.Cause`."""

    bundle: int
    instruction: int
    beat: int


class Hazard(Protocol):
    """See :class:`vliwsim.machine.hazards.Hazard`."""

    name: str
    beat: int
    cycle: int
    bundle: int
    found: str
    causes: tuple[Cause, ...]
    allowed: str


def where(kernel: Kernel, bundle: int, within: int = 0) -> str:
    """A bundle as the source names it: ``loop@2``."""
    if not 0 <= bundle < len(kernel.map.bundle_at):
        return "behind the last bundle"
    label, beat = kernel.map.bundle_at[bundle]
    return f"{label}@{beat + within}"


def line_of(kernel: Kernel, bundle: int, instruction: int) -> Place | None:
    """Where the source says an instruction, if it says it."""
    places = kernel.map.instruction_places
    if 0 <= bundle < len(places) and 0 <= instruction < len(places[bundle]):
        return places[bundle][instruction]
    return None


def hazard_problem(setup: Setup, hazard: Hazard) -> Problem:
    """The diagnostic of a hazard: at the operation that met it, naming every operation behind it."""
    kernel = setup.kernel
    causes = list(hazard.causes)
    here = [c for c in causes if c.bundle == hazard.bundle and c.beat == hazard.beat]
    main = next(iter([*here, *causes]), None)
    place = line_of(kernel, main.bundle, main.instruction) if main else _last_line(kernel, hazard.bundle)
    found = f"{hazard.found}, at {where(kernel, hazard.bundle)} in cycle {hazard.cycle}"
    if len(causes) > 1:
        found += ": " + "; ".join(_sent(kernel, cause, hazard) for cause in causes)
    found += _near(setup, hazard)
    return problem(
        hazard.name,
        found,
        hazard.allowed,
        _remedy(kernel, hazard),
        place=place,
        excerpt=excerpt(kernel, place),
        kind="illegal",
    )


def _last_line(kernel: Kernel, bundle: int) -> Place | None:
    """The place of the nearest operation at or before a bundle."""
    for index in range(min(bundle, len(kernel.map.instruction_places) - 1), -1, -1):
        if kernel.map.instruction_places[index]:
            return kernel.map.instruction_places[index][0]
    return None


def _sent(kernel: Kernel, cause: Cause, hazard: Hazard) -> str:
    place, label = line_of(kernel, cause.bundle, cause.instruction), where(kernel, cause.bundle)
    if label.partition("@")[0] == where(kernel, hazard.bundle).partition("@")[0]:
        label = "@" + label.partition("@")[2]
    ago = hazard.beat - cause.beat
    beats = "" if ago == 0 else f", {ago} beat{'s' if ago > 1 else ''} before"
    return f"{f'line {place.line}, ' if place else ''}sent {label}{beats}"


def _near(setup: Setup, hazard: Hazard) -> str:
    """For an access outside all arrays, which array is nearest below or above, and how far."""
    match = re.search(r"(\d+) bytes? at address (0x[0-9a-f]+)", hazard.found)
    if hazard.name != "out-of-array" or not match or not setup.areas:
        return ""
    size, address = int(match[1]), int(match[2], 16)
    below = [a for a in setup.areas if a.start <= address]
    if below:
        area = max(below, key=lambda a: a.start)
        past = address + size - area.start - area.bytes
        over = f" and its over of {area.over}" if area.over else ""
        return f"; {area.name} is {area.bytes} bytes at {area.start:#x}, so this reaches {past} past its end{over}"
    area = min(setup.areas, key=lambda a: a.start)
    return f"; {area.start - address} bytes before {area.name}"


def _remedy(kernel: Kernel, hazard: Hazard) -> str:
    """The obvious change, where there is one."""
    if hazard.name == "lands-twice" and len(hazard.causes) > 1:
        last = hazard.causes[-1]
        place, (_, beat) = line_of(kernel, last.bundle, last.instruction), kernel.map.bundle_at[last.bundle]
        return f"line {place.line} at @{beat + 1}" if place else ""
    if hazard.name == "ran-off-the-end":
        return "halt in the last bundle"
    if hazard.name == "out-of-array" and hazard.found.startswith("l"):
        return "over N on the array, if the value is not used"
    return ""


NOTES = {
    "undefined-read": "computes with an undefined value",
    "early-read": "reads a register before a result in flight lands",
}
"""Notes of the machine and what they say."""


def note_problems(kernel: Kernel, notes: Iterable[tuple[str, int, int, int]]) -> tuple[Problem, ...]:
    """Notes of the machine, (name, bundle index, instruction index, first beat) each, as problems of kind ``note``."""
    problems = []
    for name, bundle, instruction, beat in sorted(notes, key=lambda n: (n[3], n[1], n[2], n[0])):
        place = line_of(kernel, bundle, instruction)
        operation = kernel.program.bundles[bundle].instructions[instruction].operation
        says = "reads undefined bytes" if operation.kind is Kind.LOAD and name == "undefined-read" else NOTES[name]
        found = f"{operation.name} at {where(kernel, bundle)} {says}, first in beat {beat}"
        problems.append(problem(name, found, place=place, excerpt=excerpt(kernel, place), kind="note"))
    return tuple(problems)
