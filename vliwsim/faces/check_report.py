"""A check as text and as JSON: the verdict sentence, rules by outcome, paths drawn, reads before a landing."""

from __future__ import annotations

from collections.abc import Iterator
from textwrap import wrap

from vliwsim.check.interrupts import SAFE, SHIELDED, UNSAFE
from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED, VIOLATED, Incident, Judgement, Verdict
from vliwsim.check.words import Words, sentence
from vliwsim.faces.check_picture import WIDTH, picture

FEW = 3
"""Incidents of a rule that are shown without ``--notes``."""


def verdict_sentence(words: Words) -> str:
    """One sentence: which kernel on which core, and whether it is legal."""
    verdict, kernel = words.verdict, words.kernel
    title = f"{kernel.name} on {kernel.core.name}"
    if verdict.violated:
        return f"{title}: illegal: {sentence([j.rule for j in verdict.violated])}."
    if verdict.undecided:
        return f"{title}: not decided: {sentence([j.rule for j in verdict.undecided])}."
    data = [j.rule for j in verdict.judgements.values() if j.outcome == NEEDS_INPUT]
    if data:
        return f"{title}: legal on every path; only data decide {sentence(data)}."
    return f"{title}: legal on every path, for every input."


def report(words: Words, notes: bool = False) -> str:
    """The whole report, no trailing newline. ``notes``: show every incident and every read, not only the first."""
    parts = [wrap(verdict_sentence(words), WIDTH, break_on_hyphens=False), list(_grouped(words, notes))]
    for judgement in words.verdict.violated:
        shown = judgement.incidents if notes else judgement.incidents[:FEW]
        for incident in shown:
            lines = str(words.problem(judgement, incident)).splitlines()
            drawn = picture(words, incident)
            parts.append([*lines, *(["", *drawn] if drawn else [])])
        if len(shown) < len(judgement.incidents):
            parts.append([f"  and {len(judgement.incidents) - len(shown)} more {judgement.rule} (--notes)"])
    parts.append([*_early(words, notes), *_waits(words), *_interrupts(words), *_size(words.verdict)])
    return "\n\n".join("\n".join(lines) for lines in parts if lines)


def _paragraph(head: str, text: str, column: int) -> Iterator[str]:
    """``text`` behind ``head``, broken at 80 columns and hung below its beginning."""
    lines = wrap(text, WIDTH - column, break_on_hyphens=False) or [""]
    yield f"{head:<{column}}{lines[0]}".rstrip()
    for line in lines[1:]:
        yield " " * column + line


def _grouped(words: Words, notes: bool) -> Iterator[str]:
    """Rules by outcome, what to act on first."""
    judgements = list(words.verdict.judgements.values())
    for outcome in (VIOLATED, UNDECIDED, NEEDS_INPUT):
        for number, judgement in enumerate(j for j in judgements if j.outcome == outcome):
            head = f"  {outcome if not number else '':<12} {judgement.rule}"
            yield from _paragraph(head, _summary(words, judgement, notes), 32)
    proved = [j.rule for j in judgements if j.outcome == PROVED and not j.because]
    if proved:
        yield from _paragraph(f"  {PROVED}", ", ".join(proved), 15)
    idle = [j for j in judgements if j.outcome == PROVED and j.because]
    for number, judgement in enumerate(idle):
        yield from _paragraph(f"  {'never' if not number else '':<12} {judgement.rule}", judgement.because, 32)


def _summary(words: Words, judgement: Judgement, notes: bool) -> str:
    if judgement.outcome == UNDECIDED:
        at = words.verdict.blown_up
        return judgement.because + (f", most at {words.at(at)}" if at is not None else "")
    if judgement.outcome == VIOLATED:
        return sentence(list(dict.fromkeys(words.at(i.bundle) for i in judgement.incidents))[:6])
    found = [words.found(incident) for incident in judgement.incidents]
    if notes or len(found) == 1:
        return "; ".join(found)
    return f"{found[0]}, and {len(found) - 1} more"


def _early(words: Words, notes: bool) -> Iterator[str]:
    early = words.verdict.early
    if not early:
        return
    meant = sum(read.meant is True for read in early)
    unsaid = sum(read.meant is None for read in early)
    wrong = len(early) - meant - unsaid
    counts = [f"{n} {what}" for n, what in ((meant, "meant"), (unsaid, "not said"), (wrong, "wrong")) if n]
    text = f"{len(early)} read{'s' if len(early) > 1 else ''} with a result in flight: {', '.join(counts)}"
    if unsaid:
        text += " (say `item N` behind an operation to have it proved)"
    yield from _paragraph("  early", text, 15)
    shown = early if notes else [read for read in early if read.meant is None][:1]
    for read in shown:
        yield from _paragraph("", words.early(read), 15)


def _waits(words: Words) -> Iterator[str]:
    waits = words.verdict.waits
    if not waits:
        return
    said = [f"{words.at(w.bundle)} {w.least if w.least == w.most else f'{w.least} to {w.most}'}" for w in waits]
    yield from _paragraph("  held", "beats that the core waits: " + ", ".join(said), 15)


def _interrupts(words: Words) -> Iterator[str]:
    found = words.verdict.interrupts
    if found is None:
        return
    by = {kind: [b for b, k in found.bundles.items() if k == kind] for kind in (SAFE, SHIELDED, UNSAFE)}
    text = f"safe at {len(by[SAFE])} of {len(found.bundles)} bundles"
    if by[SHIELDED]:
        text += f", kept out by branches at {len(by[SHIELDED])}"
    if by[UNSAFE]:
        bundle = by[UNSAFE][0]
        reason = found.reasons[bundle]
        text += f", harmful at {len(by[UNSAFE])} (at {words.at(bundle)}: {_why(words, found.reasons[bundle].register)}"
        text += f" {words.name((reason.bundle, reason.instruction))} uses it before that)"
    if found.longest is None:
        where = sentence(list(dict.fromkeys(words.at(b).partition("@")[0] for b in found.stretch)))
        text += f"; none in {where}, however long it runs"
    else:
        beats = "1 beat" if found.longest == 1 else f"{found.longest} beats"
        text += f"; at most {beats} without" if found.longest else "; at any time"
    yield from _paragraph("  interrupts", text, 15)


def _why(words: Words, register: int) -> str:
    return f"what is in flight for {words.core.register_names[register]} would land, and"


def _size(verdict: Verdict) -> Iterator[str]:
    yield f"  {'walked':<12} {verdict.contexts} contexts{'' if verdict.complete else ', not all there are'}"


def as_json(words: Words) -> dict[str, object]:
    """The check as plain JSON data."""
    verdict, kernel = words.verdict, words.kernel
    interrupts = verdict.interrupts
    return {
        "kernel": kernel.name,
        "core": kernel.core.name,
        "file": kernel.path,
        "verdict": verdict_sentence(words),
        "legal": False if verdict.violated else None if verdict.undecided else True,
        "rules": [
            {
                "rule": judgement.rule,
                "outcome": judgement.outcome,
                "because": judgement.because,
                "incidents": [_incident(words, incident) for incident in judgement.incidents],
            }
            for judgement in verdict.judgements.values()
        ],
        "early_reads": [
            {
                "at": words.at(read.site[0]),
                "by": words.mnemonic(read.site),
                "line": place.line if (place := words.place(read.site)) else None,
                "register": words.core.register_names[read.register],
                "in_flight": [
                    {"from": words.at(site[0]), "by": words.mnemonic(site), "beats": beats, "certain": sure}
                    for site, beats, sure in read.flights
                ],
                "meant": read.meant,
            }
            for read in verdict.early
        ],
        "held": [{"at": words.at(w.bundle), "least": w.least, "most": w.most} for w in verdict.waits],
        "interrupts": interrupts
        and {
            "bundles": {words.at(bundle): kind for bundle, kind in interrupts.bundles.items()},
            "longest_without": interrupts.longest,
        },
        "contexts": verdict.contexts,
        "complete": verdict.complete,
        "diagnostics": [p.as_json() for p in words.problems()],
    }


def _incident(words: Words, incident: Incident) -> dict[str, object]:
    return {
        "found": words.found(incident),
        "certain": incident.sure,
        "at": words.at(incident.bundle),
        "operations": [
            {"at": words.at(site[0]), "by": words.mnemonic(site), "line": place.line if place else None}
            for site in incident.sites
            for place in [words.place(site)]
        ],
        "path": [words.at(m.bundle, m.within) if m.did == "issue" else f"({m.did})" for m in incident.path],
    }
