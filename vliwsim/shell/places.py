"""Places as the source writes them: ``loop@2``, ``loop@2 pass 7``, ``cycle 31``, ``end``, ``wrong y``."""

from __future__ import annotations

import re

import attrs

from vliwsim.shell.faults import listed, nearest, unclear
from vliwsim.shell.layout import Layout

_CYCLE = re.compile(r"(?:cycle\s+)?(\d+)\Z")
_BUNDLE = re.compile(r"([A-Za-z_]\w*)(?:\s*@\s*(\d+))?(?:\s+pass\s+(\d+))?\Z")


@attrs.frozen
class Place:
    """``kind``: ``cycle`` (at ``number``), ``end``, ``wrong`` (of output ``name``, empty for any) or ``bundle``.

    For a bundle ``name`` is the label, ``number`` the beat, ``pass_`` the pass from 1, None for the next one.
    """

    kind: str
    name: str = ""
    number: int = 0
    pass_: int | None = None


def place(layout: Layout, text: str) -> Place:
    """Parse a place; raises :class:`~vliwsim.shell.faults.Unclear`."""
    text = " ".join(text.split())
    if match := _CYCLE.match(text):
        if len(match[1]) > 15:
            raise unclear(f"cycle {match[1]:.20}…", "cycles of 15 digits", name="unknown-place")
        return Place("cycle", number=int(match[1]))
    if text == "end" and "end" not in layout.sections:
        return Place("end")
    if text == "wrong" or text.startswith("wrong "):
        return Place("wrong", text.partition(" ")[2])
    match = _BUNDLE.match(text)
    if not match:
        known = "loop@2, loop@2 pass 7, cycle 31, end, wrong y"
        raise unclear(f"{text or 'nothing'} is no place", known, name="unknown-place")
    label = match[1]
    if label not in layout.sections:
        labels = listed(layout.sections)
        raise unclear(f"no label {label}", labels, nearest(label, layout.sections), name="unknown-label")
    section = layout.sections[label]
    beat = int(match[2][:9]) if match[2] else 0
    if beat >= max(1, section.beats):
        last = section.beats - 1
        raise unclear(f"{label} has no beat {beat}", f"{label}@0 to {label}@{last}", name="unknown-place")
    number = int(match[3][:15]) if match[3] else None
    if number == 0:
        raise unclear("pass 0", "passes count from 1", f"{label}@{beat} pass 1", name="unknown-place")
    return Place("bundle", label, beat, number)
