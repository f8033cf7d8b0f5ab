"""The checksum kernel against zlib, and against the check value that descriptions of CRC-32 give."""

from __future__ import annotations

import zlib
from functools import cache

import numpy as np
import pytest

from vliwsim.description.places import programs_folder
from vliwsim.kernel.loaded import LoadedKernel, load_kernel


@cache
def kernel() -> LoadedKernel:
    return load_kernel(str(programs_folder() / "checksum" / "checksum.vliw"))


def checksum(frame: bytes) -> int:
    run = kernel().run(x=np.frombuffer(frame, np.uint8))
    assert run.ok
    return int(run.outputs["crc"])


def test_the_check_value() -> None:
    """CRC-32 of IEEE 802.3 (also ITU-T V.42) of these nine digits; the value every description of it gives."""
    assert checksum(b"123456789") == 0xCBF43926


@pytest.mark.parametrize("n", [*range(1, 49), 63, 64, 65, 255, 256, 257, 1500, 4087, 4088, 4096])
def test_random_frames_as_zlib_has_them(n: int) -> None:
    """zlib.crc32."""
    frame = np.random.default_rng(n).bytes(n)
    assert checksum(frame) == zlib.crc32(frame)


def test_random_frames_of_random_lengths_as_zlib_has_them() -> None:
    random = np.random.default_rng(32)
    for n in random.integers(1, 700, 60):
        frame = random.bytes(int(n))
        assert checksum(frame) == zlib.crc32(frame)


def test_a_frame_with_its_checksum_behind_it_leaves_the_residue() -> None:
    """Data and CRC, low byte first, always end in the same remainder: 0xDEBB20E3 (IEEE 802.3), complemented here."""
    random = np.random.default_rng(33)
    for n in (1, 7, 8, 60, 333):
        frame = random.bytes(n)
        assert checksum(frame + checksum(frame).to_bytes(4, "little")) == 0xDEBB20E3 ^ 0xFFFFFFFF


def test_one_wrong_bit_is_always_found() -> None:
    frame = bytearray(np.random.default_rng(34).bytes(96))
    right = checksum(bytes(frame))
    for bit in range(0, 8 * 96, 17):
        frame[bit // 8] ^= 1 << bit % 8
        assert checksum(bytes(frame)) != right
        frame[bit // 8] ^= 1 << bit % 8


def test_the_table_advances_by_words() -> None:
    """Entry k is x**(32 m - 1) modulo 0x04C11DB7 (IEEE 802.3), bit-reversed, with m = 2 k - 1; the first has m = 0."""
    polynomial = 0x104C11DB7
    table = np.load(programs_folder() / "checksum" / "advance.npy")
    assert (table.dtype, table.size) == (np.uint32, 257)
    power, powers = 1, {}
    for exponent in range(32 * 511):
        powers[exponent] = power
        power <<= 1
        power ^= polynomial if power >> 32 else 0
    reverse = [int(f"{entry:032b}"[::-1], 2) for entry in table.tolist()]
    assert reverse[1:] == [powers[32 * (2 * k - 1) - 1] for k in range(1, 257)]
    assert reverse[0] << 1 ^ polynomial == 1
