"""Energy of one frame of vibration: the sum of its squares."""

import numpy as np


def energy(x):
    """Sum of x[k]**2 of an i16 array, exact, and then what a 32-bit register keeps of it: modulo 2**32.

    A frame of 4096 samples stays exact below about 724 counts (rms); beyond that the kernel wraps, and so does this.
    """
    return np.square(x, dtype=np.int64).sum().astype(np.int32)


def cases(generated):
    """The generated cases, and a second of a gearbox at rest and one under load."""
    yield from generated
    random = np.random.default_rng(1)
    time = np.arange(4096) / 4096
    for name, gear in (("at-rest", 6), ("under-load", 700)):
        mesh = gear * np.sin(2 * np.pi * 413 * time) * (1 + 0.3 * np.sin(2 * np.pi * 17 * time))
        yield name, {"x": np.rint(mesh + random.normal(0, 9, time.size)).astype(np.int16)}
