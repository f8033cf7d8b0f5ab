"""What the five schedules compute: the weighted sum of a window in exact integers, as a 32-bit register keeps it."""

import numpy as np


def weighted_sum(x, w):
    """Sum of x[k] w[k] of two i16 arrays of one length, modulo 2**32."""
    return np.multiply(x, w, dtype=np.int64).sum().astype(np.int32)


def cases(generated):
    """Forty samples of a gear's vibration, weighted by a triangle; then the generated cases."""
    random = np.random.default_rng(40)
    time = np.arange(40)
    x = np.rint(9000 * np.sin(0.7 * time) + random.normal(0, 900, 40)).astype(np.int16)
    w = np.rint(32767 * (1 - np.abs(time - 19.5) / 20)).astype(np.int16)
    yield "forty", {"x": x, "w": w}
    yield from generated
