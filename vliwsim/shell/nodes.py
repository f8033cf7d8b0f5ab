"""The answer to where a value came from, as data: operations, what they used, and where the walk ends."""

from __future__ import annotations

import attrs

from vliwsim.description.values import Value


@attrs.frozen
class Leaf:
    """Where a walk ends.

    ``kind``: ``element`` (of an array as it was given), ``input`` (a given scalar or address in a register),
    ``constant`` (in the code), ``undefined``, ``supposed``, ``link`` or ``unfollowed``. ``what`` names it.
    """

    kind: str
    what: str
    value: Value | None = None
    array: str = ""
    index: int = 0


@attrs.define(eq=False)
class Source:
    """One thing an operation used. ``role``: ``operand``, ``memory``, ``guard``, ``address`` or ``held`` (sticky)."""

    name: str
    role: str
    value: Value | None
    nodes: list[Step | Leaf] = attrs.field(factory=list)


@attrs.define(eq=False)
class Step:
    """One executed operation, or part of what it did. ``asked``: masks of asked bytes by output name.

    ``values`` by register number; ``stored``: value and address of a store. ``sources`` stay empty if not followed.
    """

    beat: int
    bundle: int
    instruction: int
    asked: dict[str, int] = attrs.field(factory=dict)
    values: dict[int, Value] = attrs.field(factory=dict)
    sources: list[Source] = attrs.field(factory=list)
    cycle: int = -1
    counted: int = 0
    within: int = 0
    stored: tuple[Value, int, int] | None = None
    updates: bool = False
    """Whether this is the update of a base, not the results."""
    given: bool = False
    """Whether it depends on elements of given arrays, or on what is supposed or undefined."""


@attrs.define(eq=False)
class Origin:
    """The answer: ``root`` is what was asked for; ``elements`` are the given elements it depends on.

    ``whole``: False where the walk ended at its limit or was stopped.
    """

    root: Source
    steps: list[Step]
    elements: set[tuple[str, int]]
    whole: bool = True


def is_given(node: Step | Leaf) -> bool:
    """Whether a node depends on data that was given, or on what is not known."""
    return node.given if isinstance(node, Step) else node.kind in ("element", "undefined", "supposed", "unfollowed")


def reached_elements(origin: Origin, node: Step) -> set[tuple[str, int]]:
    """The given elements that one operation of an answer depends on, guards and addresses included."""
    found: set[tuple[str, int]] = set()
    todo, met = [node], {id(node)}
    while todo:
        for source in todo.pop().sources:
            for one in source.nodes:
                if isinstance(one, Leaf):
                    if one.kind == "element":
                        found.add((one.array, one.index))
                elif id(one) not in met:
                    met.add(id(one))
                    todo.append(one)
    return found
