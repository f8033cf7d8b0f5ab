"""Which bytes of an operation's inputs its results depend on, asked of its meaning.

The meaning already says how undefined bytes spread: lane by lane, and through a selection only from what was chosen.
Making one byte of one input undefined and looking at which bytes of the results are is therefore the dependence.
"""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.description.operations import Kind, Operation
from vliwsim.description.values import Undefined, Value, parts

Influence = tuple[tuple[tuple[int, ...], ...], ...]
"""For each input, for each of its bytes, for each output: the mask of the output's bytes it reaches."""

_known: dict[tuple[Operation, tuple[int | None, ...]], Influence] = {}


def influence(
    operation: Operation, inputs: Sequence[Value], sizes: Sequence[int], halves: tuple[int | None, ...]
) -> Influence:
    """The influence of ``inputs``: raw values, of ``sizes`` bytes; ``halves`` as :meth:`Operation.evaluate` takes them.

    Of an operation without a choice in it the influence is the same for all values, and remembered.
    """
    key = operation, halves
    if key in _known:
        return _known[key]
    found = []
    for k, (value, size) in enumerate(zip(inputs, sizes, strict=True)):
        bits, unknown = parts(value, size)
        reached = []
        for byte in range(size):
            tainted = list(inputs)
            tainted[k] = Undefined(bits, unknown | 1 << byte, size)
            reached.append(tuple(parts(out)[1] for out in operation.evaluate(tainted, halves)))
        found.append(tuple(reached))
    result = tuple(found)
    plain = all(isinstance(value, int) for value in inputs)
    if plain and (operation.kind in (Kind.LOAD, Kind.STORE) or not _chooses(operation)):
        _known[key] = result
    return result


def _chooses(operation: Operation) -> bool:
    """Whether which input is used may depend on a value."""
    words = operation.does.replace("(", " ").replace(")", " ").split()
    return bool({"if", "and", "or"} & set(words)) or "[" in operation.does.replace("[k]", "")
