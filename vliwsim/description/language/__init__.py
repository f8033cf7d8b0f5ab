"""The language operations say their meaning in: from two texts (operands, does) to a checked tree, and from the tree to
a fast Python function, a slow exact evaluator, or whatever another engine makes of it.

In order: :mod:`.operands` and :mod:`.reading` take the texts, :mod:`.expressions` and :mod:`.parse` make the
:mod:`.tree`, :mod:`.check` gives every node its type and interval, :mod:`.compile_python` and :mod:`.evaluate` compute.
:class:`.meaning.Meaning` holds them together.
"""
