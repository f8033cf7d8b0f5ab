"""Raw samples of an accelerometer, without its offset and at its true sensitivity."""

import numpy as np


def calibrate(x, offset, gain):
    """sat(round(sat(x - offset) gain)), ties up. x: i16; offset: in the same counts; gain: raw q15, below 1."""
    centred = np.clip(x.astype(np.int64) - offset, -32768, 32767)
    return np.clip((centred * gain + 2**14) >> 15, -32768, 32767).astype(np.int16)


def cases(generated):
    """A frame with gravity in it, one that clips, every extreme of offset and gain; then the generated cases."""
    random = np.random.default_rng(5)
    time = np.arange(512)
    frame = np.rint(2100 + 1300 * np.sin(0.4 * time) + random.normal(0, 60, time.size)).astype(np.int16)
    yield "gravity", {"x": frame, "offset": 2100, "gain": 31234}
    loud = np.clip(frame.astype(np.int32) * 12 - 30000, -32768, 32767).astype(np.int16)
    yield "clipped", {"x": loud, "offset": 9000, "gain": 31234}
    for offset in (-32768, 0, 32767):
        for gain in (-32768, -1, 0, 16384, 32767):
            x = random.integers(-32768, 32767, 48, np.int16, endpoint=True)
            x[:4] = (-32768, 32767, 0, -1)
            yield f"offset{offset}-gain{gain}", {"x": x, "offset": offset, "gain": gain}
    yield from generated
