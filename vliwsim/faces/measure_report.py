"""What was measured beside the claims, as text: interrupts, headroom, coverage, mutants."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any


def blocks(measures: Mapping[str, Any]) -> Iterator[str]:
    """A block of lines a measure."""
    for name, block in _BLOCKS.items():
        if name in measures:
            yield "\n".join(block(measures[name]))


def _interrupts(data: Mapping[str, Any]) -> Iterator[str]:
    longest = data.get("longest")
    yield f"interrupts: {data['tried']} in {data['cases']} cases, unsafe at {', '.join(data['unsafe']) or 'no bundle'}"
    if data["check"] is not None:
        yield f"  vliwsim check calls unsafe: {', '.join(data['check']) or 'none'}"
    if longest:
        place = f"{longest['place']} (cycle {longest['first']}) to {longest['until']}, case {longest['case']}"
        yield f"  longest stretch without a safe point: {longest['cycles']} cycles, {place}"


def _headroom(data: Mapping[str, Any]) -> Iterator[str]:
    yield f"headroom over {data['cases']} cases:"
    rows = [
        (f"{row['name']} {row['type']}", _number(row["low"]), _number(row["high"]), row["says"]) for row in data["rows"]
    ]
    yield from _table(rows, ("value", "smallest", "largest", "")) if rows else ["  no values seen"]
    for row in data["saturations"]:
        yield f"  line {row['line']} {row['operation']}: saturated {row['saturated']} of {row['done']} times"
    for row in data["ideal"]:
        yield f"  {row['output']}: {row['says']}"


def _number(value: float) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)


def _coverage(data: Mapping[str, Any]) -> Iterator[str]:
    yield f"coverage over {data['cases']} cases: {data['seen']} of {data['all']} seen"
    for row in data["missing"]:
        yield f"  line {row['line']} {row['operation']}: {row['says']}"


def _mutants(data: Mapping[str, Any]) -> Iterator[str]:
    survive = len(data["survivors"])
    yield f"mutants: {data['made']} made, {data['refused']} refused, {data['found']} found, {survive} survive"
    for row in data["survivors"]:
        yield f"  line {row['line']}: {row['says']}"


_BLOCKS: Mapping[str, Callable[[Mapping[str, Any]], Iterator[str]]] = {
    "interrupts": _interrupts,
    "headroom": _headroom,
    "coverage": _coverage,
    "mutants": _mutants,
}


def _table(rows: Sequence[Sequence[str]], heads: Sequence[str]) -> Iterator[str]:
    """Left-aligned names, right-aligned numbers, free text last."""
    widths = [max(len(row[k]) for row in [heads, *rows]) for k in range(len(heads) - 1)]
    for row in [heads, *rows]:
        cells = [f"{row[0]:<{widths[0]}}", *(f"{cell:>{w}}" for cell, w in zip(row[1:-1], widths[1:])), row[-1]]
        yield f"  {'  '.join(cells)}".rstrip()
