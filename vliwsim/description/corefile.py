"""Core files: reading, deltas on a base, changes of single values, and back to plain data.

What a core is stands in :mod:`vliwsim.description.core`. A file, the bases below it and the changes above it are layers
of plain data; laid over each other they make the plain form that :mod:`vliwsim.description.corebuild` makes a core of.
Every problem is reported at the layer that said the wrong thing.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import attrs

from vliwsim.description.core import Core
from vliwsim.description.corebuild import PARTS, build_core, most
from vliwsim.description.corelayers import Changes, Layer, Plain, chain, changed, core_names, file_of, lay
from vliwsim.description.toml_places import key_text
from vliwsim.problems import CoreError, Problem

__all__ = ["core_digest", "core_names", "describe", "evolve", "load_core"]


def load_core(name_or_path: str | Path, changes: Changes = ()) -> Core:
    """The core of that name or, for a path that ends in ``.toml``, of that file, with ``changes`` made.

    Raises :class:`~vliwsim.problems.CoreError` with every mistake of the file, its bases and the changes.
    """
    problems: list[Problem] = []
    layers = chain(file_of(str(name_or_path)), problems)
    return _build(layers, changes, problems)


def evolve(core: Core, changes: Changes) -> Core:
    """``core`` with some values changed, checked as a whole again; also :meth:`Core.evolve`."""
    return _build([Layer(_plain(core), None)], changes, [])


def describe(core: Core) -> Plain:
    """Every parameter of ``core`` as nested plain data in the shape of a core file, defaults included."""
    plain = _plain(core)
    slots: Plain = {}
    for name, table in plain["slot"].items():
        cluster, _, unit = name.partition(".")
        slots.setdefault(cluster, {})[unit] = table
    return {**plain, "slot": slots}


def core_digest(core: Core, operations: str = "") -> str:
    """sha256, in hex, of every parameter of ``core`` and of ``operations``, its operation set's digest.

    Name and summary do not count: cores that behave alike have one digest. Nor do folders: files of operations count by
    name, and by what ``operations`` says of their contents.
    """
    import hashlib
    import json

    plain = _plain(core)
    for label in ("name", "summary"):
        del plain[label]
    plain["operations"] = [Path(entry).name for entry in plain["operations"]]
    for ordered in ("cluster", "slot"):
        plain[ordered] = list(plain[ordered].items())
    text = json.dumps({"core": plain, "operations": operations}, sort_keys=True, ensure_ascii=True)
    return hashlib.sha256(text.encode()).hexdigest()


def _build(layers: list[Layer], changes: Changes, problems: list[Problem]) -> Core:
    """The core that the layers and changes make; raises :class:`CoreError` with ``problems`` and all others."""
    if own := changed(changes, problems):
        layers = [*layers, Layer(own, None)]
    plain: Plain = {}
    for layer in layers:
        problems += [layer.problem(finding) for finding in lay(plain, layer.data)]
    said = {problem.key for problem in problems}
    core, findings = build_core(plain)
    for finding in most(findings):
        owner = max(reversed(layers), key=lambda layer: layer.depth(finding.path))
        if key_text(finding.path) not in said:
            problems.append(owner.problem(finding))
    if problems:
        raise CoreError(sorted(problems, key=_reading_order(layers)))
    return core


def _reading_order(layers: list[Layer]) -> Callable[[Problem], tuple[int, int, int]]:
    """Problems by file, the lowest base first, then by line; those of changes, which have no place, last."""
    files = {layer.source.file: k for k, layer in enumerate(layers) if layer.source}

    def key(problem: Problem) -> tuple[int, int, int]:
        place = problem.place
        return (files[place.file], place.line, place.column) if place else (len(layers), 0, 0)

    return key


def _plain(core: Core) -> Plain:
    """The plain form of a core, every parameter written out."""

    def fields(part: Any, *left_out: str) -> Plain:
        return {
            field.name: _copied(getattr(part, field.name))
            for field in attrs.fields(type(part))
            if field.name not in ("name", *left_out)
        }

    waits = {region.name: fields(region) for region in core.memory.waits}
    links: Plain = {}
    for link in core.links:
        links.setdefault(link.source, {})[link.reader] = fields(link, "source", "reader")
    plain: Plain = {
        "name": core.name,
        "summary": core.summary,
        "operations": list(core.operations),
        "zero_registers": list(core.zero_registers),
        "cluster": {cluster.name: fields(cluster) for cluster in core.clusters},
        "slot": {slot.name: fields(slot) for slot in core.slots},
        "latency": {
            "otherwise": core.latency.otherwise,
            **core.latency.classes,
            "operations": dict(core.latency.operations),
        },
        "link": links,
        "guards": {"registers": _ranges(core)},
        "branch": fields(core.branch),
        "issue": fields(core.issue),
        "memory": {**fields(core.memory, "waits"), "wait": waits},
        "words": fields(core.words),
        "interrupt": fields(core.interrupt),
    }
    assert set(PARTS) <= set(plain)
    return plain


def _copied(value: object) -> object:
    return list(value) if isinstance(value, tuple) else dict(value) if isinstance(value, Mapping) else value


def _ranges(core: Core) -> list[str]:
    """The guards as a core file would list them."""
    if core.guards == core.register_names:
        return ["all"]
    runs: list[list[int]] = []
    clusters = core.register_clusters
    for number in core.guard_numbers:
        if runs and number == runs[-1][-1] + 1 and clusters[number] == clusters[number - 1]:
            runs[-1].append(number)
        else:
            runs.append([number])
    names = core.register_names
    return [names[run[0]] if len(run) == 1 else f"{names[run[0]]}..{names[run[-1]]}" for run in runs]
