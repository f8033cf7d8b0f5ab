"""When did an operation saturate? Told from its meaning: does it give another result when every ``sat`` wraps?"""

from __future__ import annotations

import copy
from collections.abc import Callable, Sequence

from vliwsim.description.language.evaluate import evaluate
from vliwsim.description.language.tree import Fit, walk
from vliwsim.description.operations import Operation
from vliwsim.description.values import Value, same

Saturates = Callable[[Sequence[Value], tuple[int | None, ...], Sequence[Value]], bool]
"""(inputs, their halves, outputs) → did it saturate?"""


def saturation_of(operation: Operation) -> Saturates | None:
    """What tells whether one execution saturated; None for an operation that never does."""
    statements = operation.meaning.statements
    if not any(_is_sat(node) for assign in statements for node in walk(assign.value)):
        return None
    wrapping = copy.deepcopy(statements)
    for assign in wrapping:
        for node in walk(assign.value):
            if _is_sat(node):
                assert isinstance(node, Fit)
                node.how = "wrap"
    meaning, names = operation.meaning, operation.inputs

    def saturates(inputs: Sequence[Value], halves: tuple[int | None, ...], outputs: Sequence[Value]) -> bool:
        given = dict(zip(names, inputs, strict=True))
        chosen = dict(zip(names, halves or (None,) * len(names), strict=True))
        wrapped = evaluate(wrapping, meaning.output_types, given, chosen).values()
        return not all(same(one, other) for one, other in zip(wrapped, outputs, strict=True))

    return saturates


def _is_sat(node: object) -> bool:
    return isinstance(node, Fit) and node.how == "sat"
