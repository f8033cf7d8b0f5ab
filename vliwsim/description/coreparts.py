"""One part of a core file at a time: plain TOML data to a frozen class, every mistake of the part at once.

The table :data:`RULES` says of every class of :mod:`vliwsim.description.core` what its keys are and may be. What
concerns several parts together is judged in :mod:`vliwsim.description.corebuild`.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from typing import NamedTuple, TypeVar, cast

from vliwsim.description.core import (
    Branch,
    Cluster,
    Interrupt,
    Issue,
    Latency,
    Link,
    Memory,
    Slot,
    WaitRegion,
    Words,
)
from vliwsim.description.toml_places import KeyPath, listed, nearest, shown

CLASSES = ("arithmetic", "shift", "multiply", "divide", "load", "store", "control", "float", "float_divide")
"""The operation classes of the shipped families."""

MOST_FINDINGS = 100
"""Mistakes reported of one file; a file with more is not a core."""

IDENTIFIER = re.compile(r"[a-z][a-z0-9_]{0,39}")
OPERATION = re.compile(r"[a-z][a-z0-9_]{0,39}(\.[a-z0-9_]{1,40}){0,6}")


class Finding(NamedTuple):
    """One mistake at a key path, not yet placed in a file."""

    name: str
    path: KeyPath
    found: str
    allowed: str = ""
    remedy: str = ""


class Refused(ValueError):
    """A value is not what its key allows; the findings' paths are relative to the value."""

    def __init__(self, *findings: Finding) -> None:
        super().__init__(findings)
        self.findings = findings


Check = Callable[[object], object]
"""Gives the value to keep, or raises :class:`Refused`."""


def kind_of(value: object) -> str:
    """What TOML calls a value of this type."""
    names = {bool: "a boolean", int: "an integer", float: "a number with a point", str: "a string"}
    names |= {list: "an array", tuple: "an array", dict: "a table"}
    return names.get(type(value), "a date or time")


def described(value: object) -> str:
    """A value of the wrong type, with its type."""
    text = shown(value)
    return text if isinstance(value, dict | list | tuple) else f"{text}, {kind_of(value)}"


def refuse(name: str, found: str, allowed: str, remedy: str = "", path: KeyPath = ()) -> Refused:
    return Refused(Finding(name, path, found, allowed, remedy))


def whole(low: int, high: int, unit: str = "") -> Check:
    """An integer from ``low`` to ``high``, ends included."""
    allowed = f"an integer from {low} to {high}" + (f" ({unit})" if unit else "")

    def check(value: object) -> object:
        if isinstance(value, bool) or not isinstance(value, int):
            digits = isinstance(value, str) and re.fullmatch(r"[0-9]{1,12}", value)
            raise refuse("wrong-type", described(value), allowed, f"{value}, without quotes" if digits else "")
        if not low <= value <= high:
            raise refuse("out-of-range", shown(value), allowed)
        return value

    return check


def multiple(of: int, low: int, high: int, unit: str) -> Check:
    """An integer from ``low`` to ``high`` that ``of`` divides."""
    inner = whole(low, high, unit)

    def check(value: object) -> object:
        number = inner(value)
        assert isinstance(number, int)
        if number % of:
            raise refuse(
                "out-of-range",
                shown(value),
                f"a multiple of {of} from {low} to {high} ({unit})",
                f"{number // of * of}",
            )
        return number

    return check


def power_of_two(high: int, unit: str) -> Check:
    """1, 2, 4 … ``high``."""
    inner = whole(1, high, unit)

    def check(value: object) -> object:
        number = inner(value)
        assert isinstance(number, int)
        if number & number - 1:
            raise refuse(
                "out-of-range",
                shown(value),
                f"a power of two from 1 to {high} ({unit})",
                f"{1 << number.bit_length() - 1}",
            )
        return number

    return check


def flag(value: object) -> object:
    if not isinstance(value, bool):
        raise refuse("wrong-type", described(value), "true or false")
    return value


def one_of(*words: str) -> Check:
    """One of the given words."""
    allowed = listed(f'"{word}"' for word in words)

    def check(value: object) -> object:
        if not isinstance(value, str):
            raise refuse("wrong-type", described(value), allowed)
        if value not in words:
            raise refuse("unknown-word", shown(value), allowed, nearest(value, words))
        return value

    return check


def text(longest: int) -> Check:
    """One line of at most ``longest`` printable characters."""

    def check(value: object) -> object:
        if not isinstance(value, str):
            raise refuse("wrong-type", described(value), "a string")
        if len(value) > longest or not value.isprintable():
            raise refuse("out-of-range", shown(value), f"one printable line of at most {longest} characters")
        return value

    return check


def matching(pattern: re.Pattern[str], allowed: str) -> Check:
    """A string of this form."""

    def check(value: object) -> object:
        if not isinstance(value, str):
            raise refuse("wrong-type", described(value), allowed)
        if not pattern.fullmatch(value):
            raise refuse("bad-name", shown(value), allowed)
        return value

    return check


def several(check: Check, what: str, least: int = 0, most: int = 64) -> Check:
    """An array of different elements, each as ``check`` wants it; gives a tuple."""

    def whole_check(value: object) -> object:
        if not isinstance(value, list | tuple):
            raise refuse("wrong-type", described(value), f"an array of {what}", f"[{shown(value)}]")
        if not least <= len(value) <= most:
            raise refuse("out-of-range", f"{len(value)} elements", f"{least} to {most} {what}")
        findings: list[Finding] = []
        kept: list[object] = []
        for k, element in enumerate(value):
            try:
                checked = check(element)
            except Refused as why:
                findings += [f._replace(path=(k, *f.path)) for f in why.findings]
                continue
            if checked in kept:
                findings.append(
                    Finding("repeated", (k,), f"{shown(element)} a second time", f"each of the {what} once")
                )
            kept.append(checked)
        if findings:
            raise Refused(*findings)
        return tuple(kept)

    return whole_check


def beats_by_name(value: object) -> object:
    """A table from operation or class names to beats."""
    if not isinstance(value, dict):
        raise refuse("wrong-type", described(value), "a table of beats by operation or class name")
    beats = whole(1, 255, "beats")
    findings: list[Finding] = []
    for name, number in value.items():
        try:
            if not OPERATION.fullmatch(name):
                raise refuse("bad-name", shown(name), "the name of an operation, such as mul.half")
            beats(number)
        except Refused as why:
            findings += [f._replace(path=(name, *f.path)) for f in why.findings]
    if findings:
        raise Refused(*findings[:MOST_FINDINGS])
    return dict(value)


_IDENTIFIERS = matching(IDENTIFIER, "an identifier in lower case")
_ADDRESS = (1 << 32) - 1

RULES: Mapping[type, Mapping[str, Check]] = {
    Cluster: {
        "registers": whole(1, 1024),
        "read_ports": whole(1, 255, "registers a beat"),
        "write_ports": whole(1, 255, "results a beat"),
    },
    Slot: {
        "classes": several(_IDENTIFIERS, "operation classes", 1),
        "crossing": several(_IDENTIFIERS, "operand names"),
        "busy": beats_by_name,
    },
    Latency: {"otherwise": whole(1, 255, "beats"), "classes": beats_by_name, "operations": beats_by_name},
    Link: {
        "operands": whole(1, 255, "operands a bundle"),
        "shared": flag,
        "fresh": one_of("ok", "stall", "reject"),
    },
    Branch: {
        "latency": whole(1, 64, "bundles, delay slots + 1"),
        "overlap": flag,
        "taken_penalty": whole(0, 255, "cycles"),
    },
    Issue: {"rule": one_of("exposed", "interlocked"), "early": one_of("old", "warn", "reject")},
    Memory: {
        "size": whole(4, 1 << 32, "bytes"),
        "endianness": one_of("little", "big"),
        "banks": whole(1, 1024),
        "bank_width": power_of_two(1024, "bytes"),
        "broadcast": flag,
        "conflict": one_of("stall", "reject"),
        "misaligned": one_of("reject", "split"),
    },
    WaitRegion: {
        "start": whole(0, _ADDRESS, "byte address"),
        "bytes": whole(1, 1 << 32, "bytes"),
        "cycles": whole(1, 4095, "cycles"),
    },
    Words: {
        "bits": multiple(8, 32, 256, "bits"),
        "group": whole(1, 256, "words"),
        "straddle": flag,
        "straddle_freeze": whole(0, 1023, "cycles"),
    },
    Interrupt: {"service": whole(0, 1 << 20, "beats")},
}
"""For every class of a core its keys, and what each may be."""

# The required keys, and what stands in for one that is missing or refused, so that the other parts can be judged. It is
# chosen to raise no complaint of its own; the core is refused anyway.
_REQUIRED: Mapping[type, Mapping[str, object]] = {
    Cluster: {"registers": 1024, "read_ports": 1, "write_ports": 1},
    Slot: {"classes": ("control",)},
    Link: {"operands": 1},
    WaitRegion: {"start": 0, "bytes": 1, "cycles": 1},
}

T = TypeVar("T")


def structure(
    kind: Callable[..., T], table: object, path: KeyPath, findings: list[Finding], **given: object
) -> T | None:
    """``table`` as a ``kind``, with ``given`` for the fields no key sets. Mistakes go to ``findings``.

    Returns an object even then, refused values replaced by defaults; None if ``table`` is no table.
    """
    assert isinstance(kind, type)
    keys, stand_in = RULES[kind], _REQUIRED.get(kind, {})
    if not isinstance(table, dict):
        findings.append(Finding("wrong-type", path, described(table), f"a table with the keys {listed(keys)}"))
        return None
    kept: dict[str, object] = {}
    for key, check in keys.items():
        if key in table:
            try:
                kept[key] = check(table[key])
            except Refused as why:
                findings += [f._replace(path=(*path, key, *f.path)) for f in why.findings]
        elif key in stand_in:
            findings.append(Finding("missing-key", (*path, key), f"no {key}", "this key must be given"))
    strange = sorted(key for key in table if key not in keys)
    findings += [unknown_key((*path, key), keys) for key in strange[:MOST_FINDINGS]]
    return cast(T, kind(**{**stand_in, **kept, **given}))


def unknown_key(path: KeyPath, known: Mapping[str, object] | tuple[str, ...]) -> Finding:
    """The finding for a key that no core file has there."""
    return Finding("unknown-key", path, shown(path[-1]), listed(known, 24), nearest(str(path[-1]), known))
