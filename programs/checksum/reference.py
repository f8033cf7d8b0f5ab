"""CRC-32 (IEEE 802.3) of a frame, bit by bit, from its definition."""

import numpy as np


def checksum(x):
    """The frame's bytes, low bits first, after 32 ones, divided by the polynomial 0x04C11DB7 (reversed: 0xEDB88320).

    x: bytes (uint8). Returns the remainder, complemented.
    """
    crc = 0xFFFFFFFF
    for byte in x.tolist():
        crc ^= byte
        for _ in range(8):
            crc = crc >> 1 ^ (0xEDB88320 if crc & 1 else 0)
    return np.uint32(crc ^ 0xFFFFFFFF)


def advance():
    """The kernel's table advance.npy: x**(-1), then x**(32 m - 1) for m = 1, 3, 5 ... 511, reversed as the CRC is."""
    power = 0x80000000  # x**0
    table = [0xDB710641]  # x**(-1): one more power of x, as below, makes it x**0
    for exponent in range(32 * 511):
        if exponent % 64 == 31:
            table.append(power)
        power = power >> 1 ^ (0xEDB88320 if power & 1 else 0)
    return np.array(table, np.uint32)


def cases(generated):
    """The check value every description of this CRC gives, a frame of the monitor's radio, and the generated cases."""
    yield "check-value", {"x": np.frombuffer(b"123456789", np.uint8)}  # 0xCBF43926
    random = np.random.default_rng(31)
    yield "radio", {"x": random.integers(0, 256, 1024, dtype=np.uint8)}
    for n in (*range(1, 26), 511, 4095, 4096):
        yield f"{n}-bytes", {"x": random.integers(0, 256, n, dtype=np.uint8)}
    yield from generated
