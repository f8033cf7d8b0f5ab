"""Running peak of a vibration signal with its position."""

import numpy as np


def peak(x, first, peak, position):
    """The largest magnitude so far and the number of the sample where it first came.

    x: i16, one frame; first: number of its first sample; peak and position: what earlier frames left, peak 0 to 32768.
    Numbers of samples count modulo 2**32.
    """
    magnitude = np.abs(x.astype(np.int32))
    where = int(magnitude.argmax())
    if magnitude[where] > peak:
        peak, position = int(magnitude[where]), (first + where) % 2**32
    return {"peak": peak, "position": position}


def cases(generated):
    """Frames of a gearbox with one knock, and what is easily got wrong; then the generated cases with other peaks."""
    random = np.random.default_rng(3)
    time = np.arange(1024)
    hum = 1500 * np.sin(0.3 * time) + random.normal(0, 200, time.size)
    frame = np.rint(np.where(time >= 700, hum + 9000 * np.exp(-(time - 700) / 25) * np.cos(0.9 * (time - 700)), hum))
    frame = frame.astype(np.int16)
    yield "knock", {"x": frame, "first": 5 * 1024, "peak": 3000, "position": 77}
    yield "knock-known", {"x": frame, "first": 6 * 1024, "peak": 32768, "position": 77}
    yield "equal-to-old", {"x": frame, "first": 2**32 - 8, "peak": int(np.abs(frame).max()), "position": 5}
    yield "silence", {"x": np.zeros(64, np.int16), "first": 0, "peak": 0, "position": 9}
    for where in range(8):  # each place of a block, with an equal one in every later place
        x = np.zeros(40, np.int16)
        x[16 + where :] = np.resize(np.array([-5000, 5000], np.int16), 24 - where)
        yield f"place-{where}", {"x": x, "first": 1000, "peak": 1, "position": 0}
    for where in range(40):  # alone at each place of the first five blocks: what fills the pipeline is seen too
        x = random.integers(-90, 90, 48).astype(np.int16)
        x[where] = (100, -100)[where % 2]
        yield f"alone-{where}", {"x": x, "first": 0, "peak": 20, "position": 0}
    for one, other in ((3, 12), (12, 3), (8, 1), (14, 31)):  # equal peaks in different halves of words
        x = np.zeros(32, np.int16)
        x[[one, other]] = -32768
        yield f"twice-{one}-{other}", {"x": x, "first": 0, "peak": 32767, "position": 0}
    yield "long", {"x": random.integers(-900, 900, 8192).astype(np.int16), "first": 0, "peak": 10, "position": 1}
    for name, inputs in generated:
        yield name, {**inputs, "peak": 0}
        yield f"{name}-kept", {**inputs, "peak": 32767}
