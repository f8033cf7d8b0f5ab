"""Is a run what a test expects? In full, and said so that one sees where it is not."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from vliwsim.kernel.runner import KernelRun

SHOWN = 8
"""Elements shown around a difference."""


def mismatches(run: KernelRun, expected: Any) -> list[str]:
    """How the outputs of ``run`` differ from ``expected``, some lines; empty if they are equal.

    ``expected``: every output by name; of a kernel with one output also its value. Values are equal that NumPy calls
    equal, and NaNs to each other; types do not count, shapes do.
    """
    if run.reason != "halt":
        return [run.verdict]
    names = list(run.outputs)
    if not isinstance(expected, Mapping):
        if len(names) != 1:
            return [f"a run gives {', '.join(names) or 'nothing'}: compare it with a dict of these"]
        expected = {names[0]: expected}
    lines = [f"{name}: not expected" for name in names if name not in expected]
    lines += [f"{name}: expected, but the run gives {', '.join(names)}" for name in expected if name not in names]
    for name in names:
        if name in expected:
            lines += _mismatch(name, np.asarray(run.outputs[name]), np.asarray(expected[name]))
    undefined = [p.found for p in run.diagnostics if p.name == "undefined-output"]
    return lines + undefined


def _mismatch(name: str, got: np.ndarray, wanted: np.ndarray) -> list[str]:
    if got.shape != wanted.shape:
        return [f"{name}: shape {got.shape}, expected {wanted.shape}"]
    if wanted.dtype.kind not in "biuf":
        return [f"{name}: expected values of type {wanted.dtype}, not numbers"]
    one, other = np.atleast_1d(got), np.atleast_1d(wanted)
    wrong = ~((one == other) | ((one != one) & (other != other)))
    if not wrong.any():
        return []
    index = int(np.flatnonzero(wrong)[0])
    if got.ndim == 0:
        return [f"{name} is {got[()]}, expected {wanted[()]}"]
    count = int(np.count_nonzero(wrong))
    apart = np.abs(one.astype(np.float64) - other.astype(np.float64))
    apart[~wrong] = 0
    worst = int(np.nanargmax(apart)) if np.isfinite(apart).any() else index
    start = max(0, index - SHOWN // 2)
    part = slice(start, start + SHOWN)
    return [
        f"{name}: {count} of {one.size} elements differ ({100 * count / one.size:.3g} %)",
        f"  first    {name}[{index}] is {one[index]}, expected {other[index]}",
        f"  largest  {name}[{worst}] is {one[worst]}, expected {other[worst]}: {apart[worst]:g} apart",
        f"  got      {name}[{part.start}:{min(part.stop, one.size)}] = {one[part]}",
        f"  expected {name}[{part.start}:{min(part.stop, one.size)}] = {other[part]}",
    ]
