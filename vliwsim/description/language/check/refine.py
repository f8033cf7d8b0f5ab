"""What a condition says about the names in it: ``b != 0`` leaves 0 out of b where it holds."""

from __future__ import annotations

from collections.abc import Mapping

from vliwsim.description.language.tree import Compare, Input, Interval, Local, Logic, Node, Unary

Key = tuple[object, ...]
Known = dict[Key, Interval]
"""Intervals of names narrower than their own, by :func:`key_of`."""

_OPPOSITE: Mapping[str, str] = {"==": "!=", "!=": "==", "<": ">=", ">=": "<", ">": "<=", "<=": ">"}
_MIRRORED: Mapping[str, str] = {"==": "==", "!=": "!=", "<": ">", ">": "<", "<=": ">=", ">=": "<="}


def key_of(node: Node) -> Key | None:
    """What stands for the name (and lane) that a node reads; None where it is no plain name."""
    if isinstance(node, Input):
        return (node.name, node.lane)
    return (id(node.variable),) if isinstance(node, Local) else None


def refine(known: Known, test: Node, holds: bool) -> Known | None:
    """What is known where ``test`` holds (or does not); None where that cannot be. ``test`` is already checked."""
    if isinstance(test, Unary) and test.operator == "not":
        return refine(known, test.operand, not holds)
    if isinstance(test, Logic):
        if holds != (test.operator == "and"):
            return known
        found: Known | None = known
        for part in test.parts:
            if found is None:
                return None
            found = refine(found, part, holds)
        return found
    if isinstance(test, Compare):
        operator = test.operator if holds else _OPPOSITE[test.operator]
        made = _narrow(known, test.left, operator, test.right.interval)
        return None if made is None else _narrow(made, test.right, _MIRRORED[operator], test.left.interval)
    if isinstance(test, (Input, Local)):
        return _narrow(known, test, "!=" if holds else "==", Interval(0, 0))
    return known


def _narrow(known: Known, node: Node, operator: str, other: Interval) -> Known | None:
    key = key_of(node)
    if key is None or node.kind != "integer":
        return known
    old = known.get(key, node.interval)
    low, high, nonzero = old.low, old.high, old.nonzero
    if operator == "==":
        low, high, nonzero = max(low, other.low), min(high, other.high), nonzero or other.nonzero
    elif operator == "!=" and other.low == other.high:
        if other.low == 0:
            nonzero = True
        low += low == other.low
        high -= high == other.low
    elif operator in ("<", "<="):
        high = min(high, other.high - (operator == "<"))
    elif operator in (">", ">="):
        low = max(low, other.low + (operator == ">"))
    if nonzero:
        low += low == 0
        high -= high == 0
    if low > high:
        return None
    return {**known, key: Interval(low, high, nonzero and low < 0 < high)}
