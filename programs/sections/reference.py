"""Three second-order sections in a row in q31, direct form I, exact sums rounded once a section and sample."""

from pathlib import Path

import numpy as np


def sections(x, state):
    """Raw q31 (int32) output and state.

    x: raw q31; state: the last two of the input and of each section's output, the older first. Sums of products are
    exact in units of 2**-60, rounded to nearest, ties up, and saturated.
    """
    table = np.load(Path(__file__).with_name("coefficients.npy"), allow_pickle=False).tolist()
    signal, after = x.tolist(), []
    kept = state.tolist()
    for number in range(3):
        b0, b1, b2, a1, a2 = table[5 * number : 5 * number + 5]
        x2, x1 = kept[2 * number : 2 * number + 2]
        y2, y1 = kept[2 * number + 2 : 2 * number + 4]
        out = []
        for x0 in signal:
            total = b0 * x0 + b1 * x1 + b2 * x2 + a1 * y1 + a2 * y2
            y0 = min(max((total + 2**28) >> 29, -(2**31)), 2**31 - 1)
            out.append(y0)
            x2, x1, y2, y1 = x1, x0, y1, y0
        after += [x2, x1]
        signal = out
    after += [y2, y1]
    return {"state": np.array(after, np.int32), "y": np.array(signal, np.int32)}


def cases(generated):
    """A gearbox at work in two blocks, a knock, and the generated cases, which start from any state."""
    random = np.random.default_rng(23)
    time = np.arange(600) / 600
    mesh = 0.4 * np.sin(2 * np.pi * 31 * time) + 0.3 * np.sin(2 * np.pi * 150 * time) + random.normal(0, 0.02, 600)
    raw = np.rint(np.clip(mesh, -1, 1) * (2**31 - 1)).astype(np.int32)
    first = {"x": raw[:300], "state": np.zeros(8, np.int32)}
    yield "first-block", first
    yield "second-block", {"x": raw[300:], "state": sections(**first)["state"]}
    yield "knock", {"x": np.eye(1, 200, dtype=np.int32)[0] * 2**30, "state": np.zeros(8, np.int32)}
    yield from generated
