"""A lowpass of 32 taps in q15, its sums exact, rounded once."""

import numpy as np


def taps():
    """Raw q15 taps: a windowed sinc with its cutoff at a tenth of the sampling rate; their sum is 32768."""
    i = np.arange(32)
    sinc = np.sin(np.pi / 5 * (i - 15.5)) / (np.pi * (i - 15.5))
    return np.rint(32768 * sinc * (0.54 - 0.46 * np.cos(2 * np.pi * i / 31)) / 1.00113).astype(np.int64)


def lowpass(x):
    """Raw q15 (int16) of the filtered block, of len(x) - 32 samples; the first 32 of x are the block before.

    Rounded to nearest, ties up, then saturated. The sums of products are exact.
    """
    sums = np.convolve(x.astype(np.int64), taps(), "valid")[1:]
    return np.clip((sums + 2**14) >> 15, -32768, 32767).astype(np.int16)


def cases(generated):
    """Three blocks in a row of gear vibration, the worst samples for these taps, and the generated cases."""
    random = np.random.default_rng(11)
    time = np.arange(3 * 256) / 256
    mesh = (
        9000 * np.sin(2 * np.pi * 11 * time)
        + 6000 * np.sin(2 * np.pi * 97 * time + 1)
        + random.normal(0, 300, time.size)
    )
    stream = np.concatenate([np.zeros(32), np.rint(mesh)]).astype(np.int16)
    for block in range(3):
        yield f"block-{block}", {"x": stream[256 * block : 256 * (block + 1) + 32]}
    worst = np.where(taps() < 0, -32768, 32767)
    yield "saturates-high", {"x": np.tile(worst, 4).astype(np.int16)}
    yield "saturates-low", {"x": np.tile(-1 - worst, 4).astype(np.int16)}
    yield from generated
