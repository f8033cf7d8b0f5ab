"""Layers of plain data that make up a core: a file, the bases below it, the changes above it.

The plain form is a core file's, with three differences: slots stand in one table by their full names, in file order;
names of operations (``mul.half``) are one key; and paths of a user's own files are absolute.
"""

from __future__ import annotations

import operator
import re
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any, NamedTuple

from vliwsim.description.coreparts import Finding, described
from vliwsim.description.places import isa_folder
from vliwsim.description.toml_places import KeyPath, TomlFile, key_text, listed, nearest, read_toml, shown
from vliwsim.problems import CoreError, Problem

LONGEST_CHAIN = 16
"""Files in a chain of bases."""

Changes = Mapping[str, object] | Sequence[str]
"""``{"latency.load": 5}`` or ``["latency.load=5"]``, the values of the second form written as in TOML."""

Plain = dict[str, Any]

_WORD = re.compile(r"\s*[A-Za-z_][\w.+-]*\s*")


def core_names() -> list[str]:
    """Names of the shipped cores, sorted."""
    return sorted(path.stem for path in (isa_folder() / "cores").glob("*.toml"))


class Layer(NamedTuple):
    """Plain data and the file it is from; None for the changes a user asks for and for an existing core."""

    data: Plain
    source: TomlFile | None

    def depth(self, path: KeyPath) -> int:
        """How many parts of ``path`` this layer says."""
        if self.source:
            return self.source.known(_spelled(path, self.source))
        here: Any = self.data
        known = 0
        for part in _address(path):
            within = isinstance(part, int) and part < len(here) if isinstance(here, list) else False
            if not within and not (isinstance(here, dict) and part in here):
                break
            here = here[part]
            known += 2 if known == 1 and path[0] == "slot" else 1
        return known

    def problem(self, finding: Finding) -> Problem:
        if self.source:
            path = _spelled(finding.path, self.source)
            return self.source.problem(finding.name, path, finding.found, finding.allowed, finding.remedy)
        return Problem(finding.name, finding.found, finding.allowed, finding.remedy, key=key_text(finding.path))


def file_of(name_or_path: str) -> Path:
    if name_or_path.endswith(".toml"):
        return Path(name_or_path)
    names = core_names()
    if name_or_path not in names:
        allowed = f"a shipped core ({listed(names)}) or the path of a .toml file"
        raise CoreError(Problem("unknown-core", shown(name_or_path), allowed, nearest(name_or_path, names)))
    return isa_folder() / "cores" / f"{name_or_path}.toml"


def chain(path: Path, problems: list[Problem]) -> list[Layer]:
    """The layers of a file, the lowest base first. Mistakes go to ``problems``; raises if a base cannot be used."""
    layers: list[Layer] = []
    seen: list[Path] = []
    while True:
        source = read_toml(path, CoreError)
        seen.append(path.resolve())
        findings: list[Finding] = []
        data = _normal(source)
        _own_operations(data, path.parent, findings)
        layer = Layer(data, source)
        layers.insert(0, layer)
        below = _base(source.data.get("base"), path, seen, findings)
        problems += [layer.problem(finding) for finding in findings]
        if any(finding.path == ("base",) for finding in findings):
            raise CoreError(problems)
        if below is None:
            layers[-1].data.setdefault("name", _name_of(layers[-1]))
            return layers
        path = below


def _name_of(layer: Layer) -> str:
    """The name of a core whose file gives none: the file's."""
    assert layer.source
    return re.sub(r"[^a-z0-9_-]", "_", Path(layer.source.file).stem.lower())[:40]


def _base(base: object, path: Path, seen: list[Path], findings: list[Finding]) -> Path | None:
    """The file that ``base`` in the file ``path`` names; None for no base, and for a bad one with its finding."""
    if base is None:
        return None
    if not isinstance(base, str):
        findings.append(Finding("wrong-type", ("base",), described(base), "the name or path of a core"))
        return None
    if base.endswith(".toml"):
        below = _inside(base, path.parent, ("base",), findings)
    else:
        try:
            below = file_of(base)
        except CoreError as why:
            problem = why.problems[0]
            findings.append(Finding("unknown-core", ("base",), problem.found, problem.allowed, problem.remedy))
            return None
    if below and below.resolve() in seen:
        findings.append(Finding("base-cycle", ("base",), f"{shown(base)}, which is based on this file", "no cycle"))
    elif len(seen) > LONGEST_CHAIN:
        findings.append(Finding("base-cycle", ("base",), f"more than {LONGEST_CHAIN} bases", "a shorter chain"))
    return below


def _inside(entry: str, folder: Path, path: KeyPath, findings: list[Finding]) -> Path | None:
    """The file ``entry`` names in ``folder``. A core file from a stranger reaches no file outside its own folder."""
    try:
        found = (folder / entry).resolve()
        inside = found.is_relative_to(folder.resolve()) and not Path(entry).is_absolute()
    except (OSError, ValueError, RuntimeError):
        findings.append(Finding("unknown-file", path, shown(entry), "the path of a file in the core file's folder"))
        return None
    if not inside:
        allowed = "a file in the core file's folder or below it"
        findings.append(Finding("outside-folder", path, shown(entry), allowed, "copy it there"))
        return None
    if not found.is_file():
        findings.append(Finding("unknown-file", path, f"no file {shown(entry)}", "a file in the core file's folder"))
        return None
    return found


def _own_operations(data: Plain, folder: Path, findings: list[Finding]) -> None:
    """Make the paths of a file's own operation files absolute."""
    entries = data.get("operations")
    if not isinstance(entries, list):
        return
    for k, entry in enumerate(entries):
        if isinstance(entry, str) and entry.endswith(".toml"):
            found = _inside(entry, folder, ("operations", k), findings)
            entries[k] = str(found) if found else entry


def lay(plain: Plain, data: Plain) -> list[Finding]:
    """Lay ``data`` over ``plain``: first what it removes, then what it says; tables merge, all else replaces."""
    findings: list[Finding] = []
    removed = data.get("remove", [])
    if not isinstance(removed, list) or not all(isinstance(entry, str) for entry in removed):
        findings.append(
            Finding("wrong-type", ("remove",), described(removed), 'an array of key paths: ["slot.g.flow"]')
        )
        removed = []
    for k, entry in enumerate(removed[:1000]):
        try:
            path = _key_path(entry)
        except ValueError:
            findings.append(Finding("bad-name", ("remove", k), shown(entry), 'a key path such as "slot.g.flow"'))
            continue
        if not _remove(plain, path):
            known = [key_text(there) for there in _paths(plain)]
            remedy = nearest(entry, known)
            findings.append(Finding("nothing-to-remove", ("remove", k), shown(entry), "what the base has", remedy))
    _merge(plain, {key: value for key, value in data.items() if key not in ("base", "remove")})
    return findings


def _merge(plain: Plain, data: Plain, depth: int = 4) -> None:
    for key, value in data.items():
        if isinstance(value, dict):
            if isinstance(plain.get(key), dict) and depth:
                _merge(plain[key], value, depth - 1)
            elif depth:
                plain[key] = {}
                _merge(plain[key], value, depth - 1)
            else:
                plain[key] = value
        else:
            plain[key] = value


def _remove(plain: Plain, path: KeyPath) -> bool:
    """Take ``path`` out of the plain form; false if it is not there."""
    if len(path) == 2 and path[0] == "slot" and isinstance(plain.get("slot"), dict):
        slots = [name for name in plain["slot"] if name.startswith(f"{path[1]}.")]
        for name in slots:
            del plain["slot"][name]
        return bool(slots)
    *above, last = _address(path)
    here: Any = plain
    for part in above:
        here = here.get(part) if isinstance(here, dict) else None
    if not isinstance(here, dict) or last not in here:
        return False
    del here[last]
    return True


def _paths(plain: Plain) -> Iterable[KeyPath]:
    """Key paths of all tables and values of a plain form, for suggestions."""
    for part, table in plain.items():
        yield (part,)
        for name, value in table.items() if isinstance(table, dict) else ():
            path = (part, *name.split(".", 1)) if part == "slot" else (part, name)
            yield path
            yield from ((*path, key) for key in value) if isinstance(value, dict) else ()


# Key paths: as files write them, and as the plain form holds them


def _address(path: KeyPath) -> KeyPath:
    """Where the plain form holds what a file says at ``path``: slots by full name, operation names in one piece."""
    if path[:1] == ("slot",) and len(path) >= 3 and isinstance(path[2], str):
        path = ("slot", f"{path[1]}.{path[2]}", *path[3:])
        head = 3 if path[2:3] == ("busy",) else len(path)
    else:
        head = 2 if path[:2] == ("latency", "operations") else len(path)
    names = path[head:]
    return (*path[:head], ".".join(str(name) for name in names)) if names else path


def _spelled(path: KeyPath, source: TomlFile) -> KeyPath:
    """``path`` as the file spells it: an operation's name may stand there without quotes, as keys of nested tables."""
    last = path[-1] if path else 0
    if isinstance(last, str) and "." in last and path not in source.places:
        return (*path[:-1], *last.split("."))
    return path


def _key_path(text: str) -> KeyPath:
    """The parts of a dotted TOML key. Raises ValueError for anything else."""
    if "\n" in text or "=" in text or len(text) > 400:
        raise ValueError(text)
    here: Any = tomllib.loads(f"{text} = 0")
    path: list[str] = []
    while isinstance(here, dict):
        (key, here), *others = here.items()
        assert not others
        path.append(key)
    return tuple(path)


def _normal(source: TomlFile) -> Plain:
    """A file's data in the plain form."""
    data = {key: value for key, value in source.data.items() if key != "slot"}
    if isinstance(data.get("operations"), list):
        data["operations"] = list(data["operations"])  # type: ignore[call-overload]
    latency = data.get("latency")
    if isinstance(latency, dict) and isinstance(latency.get("operations"), dict):
        data["latency"] = {**latency, "operations": _names_in_one(latency["operations"])}
    slots = source.data.get("slot")
    if slots is not None:
        data["slot"] = _slots_in_one(slots, source)
    return data


def _names_in_one(table: Plain, name: str = "", depth: int = 8) -> Plain:
    """Operation names: ``mul.half = 2`` without quotes is a table in a table to TOML."""
    out: Plain = {}
    for key, value in table.items():
        whole = f"{name}.{key}" if name else key
        if isinstance(value, dict) and value and depth:
            out |= _names_in_one(value, whole, depth - 1)
        else:
            out[whole] = value
    return out


def _slots_in_one(slots: object, source: TomlFile | None = None) -> object:
    """Tables of units in tables of clusters as one table by full names, in file order."""
    if not isinstance(slots, dict):
        return slots
    flat: Plain = {}
    for cluster, units in slots.items():
        if not isinstance(units, dict) or "." in cluster:
            flat[cluster] = units
            continue
        for unit, table in units.items():
            busy = table.get("busy") if isinstance(table, dict) else None
            flat[f"{cluster}.{unit}"] = {**table, "busy": _names_in_one(busy)} if isinstance(busy, dict) else table
    if source and len(slots) > 1:
        order = {path: k for k, path in enumerate(source.places)}
        last = len(order)
        flat = dict(sorted(flat.items(), key=lambda item: order.get(("slot", *item[0].split(".", 1)), last)))
    return flat


# Changes


def changed(changes: Changes, problems: list[Problem]) -> Plain:
    """Changes as one layer of plain data; what is wrong with their form goes to ``problems``."""
    if isinstance(changes, str):
        changes = [changes]
    pairs: Iterable[tuple[object, object]]
    pairs = changes.items() if isinstance(changes, Mapping) else ((text, None) for text in changes)
    layer: Plain = {}
    for key, value in pairs:
        try:
            named = isinstance(changes, Mapping)
            path, value = (_key_path(str(key)), _ordinary(value)) if named else _split_change(str(key))
        except (ValueError, RecursionError):
            allowed = "KEY=VALUE with the value as in TOML, such as latency.load=5"
            if isinstance(changes, Mapping):
                allowed = "a key path such as latency.load"
            problems.append(Problem("bad-change", shown(key), allowed))
            continue
        if path[0] == "base":
            problems.append(Problem("bad-change", shown(key), "any key but base", "load the other core instead"))
            continue
        _put(layer, path, value)
    if isinstance(layer.get("operations"), list):
        layer["operations"] = [
            str(Path(entry).absolute()) if isinstance(entry, str) and entry.endswith(".toml") else entry
            for entry in layer["operations"]
        ]
    return layer


def _split_change(text: str) -> tuple[KeyPath, object]:
    key, equals, value = text.partition("=")
    if not equals or "\n" in text or len(text) > 1 << 16:
        raise ValueError(text)
    path = _key_path(key)
    try:
        return path, tomllib.loads(f"it = {value}")["it"]
    except tomllib.TOMLDecodeError:
        if not _WORD.fullmatch(value):
            raise
        return path, value.strip()  # a word without quotes, which shells take away: issue.rule=interlocked


def _ordinary(value: object) -> object:
    """Integers of other libraries as plain ones, tuples as arrays."""
    if isinstance(value, Mapping):
        return {str(key): _ordinary(inner) for key, inner in value.items()}
    if isinstance(value, list | tuple):
        return [_ordinary(inner) for inner in value]
    if not isinstance(value, bool) and hasattr(value, "__index__"):
        return operator.index(value)
    return value


def _put(layer: Plain, path: KeyPath, value: object) -> None:
    """Set ``path`` of a layer in the plain form."""
    if path[0] == "slot" and len(path) < 3:
        value = _slots_in_one({path[1]: value} if len(path) > 1 else value)
        path = path[:1]
    here = layer
    *above, last = _address(path)
    for part in above:
        inner = here.setdefault(str(part), {})
        if not isinstance(inner, dict):  # an earlier change made it no table: that mistake stays, to be reported
            return
        here = inner
    if isinstance(value, dict) and isinstance(here.get(str(last)), dict):
        _merge(here[str(last)], value)
    else:
        here[str(last)] = value
