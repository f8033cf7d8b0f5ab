"""Checks as a log in the Static Analysis Results Interchange Format, SARIF 2.1.0 (OASIS Standard)."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from urllib.parse import quote

import vliwsim
from vliwsim.check.rules import ALLOWS, RULES
from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED, VIOLATED, Incident
from vliwsim.check.words import CANNOT_EXCLUDE, Words
from vliwsim.problems import Place, Problem

SCHEMA = "https://docs.oasis-open.org/sarif/sarif/v2.1.0/errata01/os/schemas/sarif-schema-2.1.0.json"
LEVELS = {VIOLATED: "error", UNDECIDED: "warning", NEEDS_INPUT: "note"}
Json = dict[str, object]


def log(checked: Sequence[Words], failed: Sequence[Problem]) -> Json:
    """The log of some checks, and of the problems that kept others from being made."""
    names = [*RULES, CANNOT_EXCLUDE, "undecided", "item-not-said"]
    names += sorted({p.name for p in failed} - set(names))
    results = [result for words in checked for result in _results(words, names)]
    results += [_result(names, p.name, "error", p, None) for p in failed]
    driver = {
        "name": "vliwsim",
        "version": vliwsim.__version__,
        "rules": [_rule(name) for name in names],
    }
    run = {"tool": {"driver": driver}, "columnKind": "unicodeCodePoints", "results": results}
    return {"$schema": SCHEMA, "version": "2.1.0", "runs": [run]}


def _rule(name: str) -> Json:
    allows = ALLOWS.get(name)
    return {"id": name, "shortDescription": {"text": f"allowed: {allows}"}} if allows else {"id": name}


def _results(words: Words, names: list[str]) -> list[Json]:
    found = []
    for judgement in words.verdict.judgements.values():
        if judgement.outcome == PROVED:
            continue
        level = LEVELS[judgement.outcome]
        for incident in judgement.incidents:
            told = words.problem(judgement, incident)
            found.append(_result(names, told.name, level, told, words, incident))
        if judgement.outcome == UNDECIDED and not judgement.incidents:
            found.append(_result(names, "undecided", level, words.undecided(judgement), words))
    found += [_result(names, note.name, "note", note, words) for note in words.notes()]
    return found


def _result(
    names: list[str], name: str, level: str, told: Problem, words: Words | None, incident: Incident | None = None
) -> Json:
    text = told.found + (f"; try {told.remedy}" if told.remedy else "")
    if words is not None:
        text = f"on {words.core.name}: {text}"
    result: Json = {"ruleId": name, "ruleIndex": names.index(name), "level": level, "message": {"text": text}}
    if told.place:
        result["locations"] = [{"physicalLocation": _physical(told.place)}]
    if words is not None and incident is not None and incident.sure:
        steps = [step for moment in incident.path for step in _steps(words, moment.bundle, moment.did)]
        if steps:
            result["codeFlows"] = [{"threadFlows": [{"locations": steps}]}]
    return result


def _steps(words: Words, bundle: int, did: str) -> list[Json]:
    """A beat of a path, at its first operation; an idle beat has none to point at."""
    place = words.place((bundle, 0))
    if place is None:
        return []
    text = words.at(bundle) if did == "issue" else f"{words.at(bundle)} ({did})"
    return [{"location": {"physicalLocation": _physical(place), "message": {"text": text}}}]


def _physical(place: Place) -> Json:
    region = {"startLine": place.line, "startColumn": place.column, "endColumn": place.column + place.length}
    return {"artifactLocation": {"uri": uri(place.file)}, "region": region}


def uri(file: str) -> str:
    """A path as a URI: relative ones stay relative (RFC 3986), absolute ones get the file scheme (RFC 8089)."""
    path = Path(file)
    if path.is_absolute():
        return path.as_uri()
    return quote(path.as_posix(), safe="/")
