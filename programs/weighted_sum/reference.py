"""Weighted sum of a window of vibration; every schedule in this folder computes it."""

import numpy as np


def weighted_sum(x, w):
    """Sum of x[k] w[k] of two i16 arrays of one length, exact, kept modulo 2**32 as a 32-bit register keeps it."""
    return np.multiply(x, w, dtype=np.int64).sum().astype(np.int32)


def cases(generated):
    """A gear's ring-down of 64 samples under a rising and falling weight; then the generated cases."""
    random = np.random.default_rng(2)
    time = np.arange(64)
    x = np.rint(20000 * np.exp(-time / 20) * np.sin(0.9 * time) + random.normal(0, 300, 64)).astype(np.int16)
    w = np.rint(8191 * np.sin(np.pi * (time + 0.5) / 64)).astype(np.int16)
    yield "ring-down", {"x": x, "w": w}
    yield from generated
