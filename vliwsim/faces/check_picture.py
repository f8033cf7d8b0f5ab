"""A path to an incident, drawn: time to the right, a row for each operation behind it, its flight as a tail."""

from __future__ import annotations

from collections.abc import Iterator

import attrs

from vliwsim.check.verdict import Incident, Moment, Site
from vliwsim.check.words import Words

WIDTH = 80
MARGIN = 4
MOST_BEATS = 11
"""Beats that are drawn; what was before them is left out."""


@attrs.frozen
class Issue:
    """An operation on the path: sent in column ``column``, landing in ``lands`` (None: it sends nothing on)."""

    site: Site
    column: int
    lands: int | None


def picture(words: Words, incident: Incident) -> list[str]:
    """The lines of the picture, at most 80 characters each; none for an incident without a path."""
    path = incident.path
    if not path:
        return []
    sites = [*incident.sites, *_sender(incident)]
    issues = [issue for site in sites if (issue := _issue(words, incident, site))]
    last = max([len(path) - 1, *(i.lands for i in issues if i.lands is not None and _meets(incident, i))])
    first = min([len(path) - 2, *(i.column - 1 for i in issues)])
    first = max(0, first, last + 1 - MOST_BEATS)
    count = last + 1 - first
    names = [words.core.slots[_slot(words, site)].name for site in sites]
    label = max([len(name) for name in (*names, "beat")]) + 2
    width = max(5, min(12, (WIDTH - MARGIN - label - 1) // count))
    lines = [*_header(words, path, first, last, label, width)]
    for issue in sorted(issues, key=lambda i: (i.column, i.site)):
        lines.append(_row(words, incident, issue, first, last, label, width))
    column = label + width * (last - first)
    behind = " " * column + "▲ " + incident.rule
    lines.append(behind if len(behind) <= WIDTH - MARGIN else f"{incident.rule} ▲".rjust(column + 1))
    return [(" " * MARGIN + line).rstrip()[:WIDTH] for line in lines]


def _sender(incident: Incident) -> list[Site]:
    """Of a value that should not be there, who sent it: the last to land on the path."""
    if incident.rule not in ("wrong-item", "undefined-used"):
        return []
    for moment in reversed(incident.path):
        for site, register in reversed(moment.landed):
            if register == incident.register:
                return [site]
    return []


def _slot(words: Words, site: Site) -> int:
    return words.bundles[site[0]].instructions[site[1]].slot


def _meets(incident: Incident, issue: Issue) -> bool:
    """Whether it is this result's landing that the incident is about."""
    return incident.rule in ("lands-twice", "write-ports") and issue.lands is not None


def _issue(words: Words, incident: Incident, site: Site) -> Issue | None:
    """When on the path an operation was sent that an incident is about."""
    path, end = incident.path, len(incident.path) - 1
    columns = [k for k, moment in enumerate(path) if moment.bundle == site[0] and moment.did == "issue"]
    if not columns:
        columns = [k for k, moment in enumerate(path) if moment.bundle == site[0]]
    if not columns:
        return None
    latency = words.flight(site, incident)
    landing = [k for k in columns if k + latency == end]
    last = [k for k in columns if k + latency <= end] if site in _sender(incident) else []
    sent = landing[-1] if landing and incident.rule in ("lands-twice", "write-ports") else [*columns, *last][-1]
    return Issue(site, sent, sent + latency if latency else None)


def _header(words: Words, path: tuple[Moment, ...], first: int, last: int, label: int, width: int) -> Iterator[str]:
    """Two lines: sections where they begin, and beats."""
    sections, beats = [" " * label], ["beat".ljust(label)]
    shown = ""
    for column in range(first, last + 1):
        if column < len(path):
            moment = path[column]
            section, _, beat = words.at(moment.bundle, moment.within).partition("@")
            text = f"@{beat}" if moment.did == "issue" else f"({moment.did})"
        else:
            section, text = "drain", f"+{column - len(path) + 1}"
        sections.append((section if section != shown else "").ljust(width)[: width * 3])
        beats.append(text[: width - 1].ljust(width))
        shown = section
    yield "".join(sections) if first == 0 else "… ".rjust(label) + "".join(sections[1:])
    yield "".join(beats)


def _row(words: Words, incident: Incident, issue: Issue, first: int, last: int, label: int, width: int) -> str:
    name = words.core.slots[_slot(words, issue.site)].name.ljust(label)
    end = width * (last - first + 1)
    line = [" "] * end
    at = (issue.column - first) * width
    mnemonic = words.mnemonic(issue.site)[: max(1, width - 1)]
    if at >= 0:
        line[at : at + len(mnemonic)] = mnemonic
    tail = max(0, at + len(mnemonic)) if at >= 0 else 0
    if issue.lands is not None:
        lands = (issue.lands - first) * width
        for k in range(tail, min(lands, end)):
            line[k] = "━"
        register = incident.register
        mark = words.core.register_names[register] if register is not None and _writes(words, issue, register) else "●"
        if lands < end:
            line[lands : lands + len(mark)] = mark
        elif lands > 0:
            line[end - 1] = "›"
    return name + "".join(line)


def _writes(words: Words, issue: Issue, register: int) -> bool:
    from vliwsim.program.effects import effects

    instruction = words.bundles[issue.site[0]].instructions[issue.site[1]]
    return any(write.register == register for write in effects(words.core, instruction).writes)
