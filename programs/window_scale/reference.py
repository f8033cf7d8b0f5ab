"""A frame times a power of two, saturated, times a window, rounded."""

import numpy as np


def window_scale(x, gain):
    """Raw q15 of round(sat(x 2**gain) w), ties up, where w is a raised cosine over the frame, at most 32767 / 32768.

    x: raw q15 (int16); gain: 0 to 15.
    """
    window = np.rint(32767 * (0.5 - 0.5 * np.cos(2 * np.pi * np.arange(x.size) / x.size))).astype(np.int64)
    scaled = np.clip(x.astype(np.int64) << gain, -32768, 32767)
    return np.clip((scaled * window + 2**14) >> 15, -32768, 32767).astype(np.int16)


def cases(generated):
    """A frame of gear vibration with as much gain as it has headroom, and with too much; then the generated cases."""
    random = np.random.default_rng(4)
    time = np.arange(1024) / 1024
    mesh = 900 * np.sin(2 * np.pi * 61 * time) * (1 + 0.4 * np.sin(2 * np.pi * 5 * time))
    frame = np.rint(mesh + random.normal(0, 40, time.size)).astype(np.int16)
    headroom = 15 - int(np.abs(frame.astype(np.int32)).max()).bit_length()
    yield "headroom", {"x": frame, "gain": headroom}
    yield "clipped", {"x": frame, "gain": headroom + 2}
    for name, inputs in generated:
        yield name, inputs
        if len(inputs["x"]) < 100:
            for gain in (0, 1, 15):
                yield f"{name}-gain-{gain}", {**inputs, "gain": gain}
