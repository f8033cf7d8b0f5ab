"""Data memory: bytes, what is known of each byte, and what a beat's accesses cost.

Every byte has a status. OUTSIDE belongs to no array; OVER may be read (it is undefined) but not written; UNDEFINED and
DEFINED belong to an array or to scratch. Word-sized views of both byte arrays let the hot loop load and
store an aligned value in the host's byte order in two look-ups; :meth:`Memory.load` and :meth:`Memory.store` are the
definition.
"""

from __future__ import annotations

import mmap
from collections.abc import Iterable, Sequence
from typing import Literal

import attrs

from vliwsim.description import core as description
from vliwsim.description.values import Value, parts, value_of

OUTSIDE, OVER, UNDEFINED, DEFINED = 0, 1, 2, 3

SIZES = (1, 2, 4, 8)
"""Access sizes in bytes; their index is the base-2 logarithm."""

ALL_DEFINED = {1: 0x03, 2: 0x0303, 4: 0x03030303, 8: 0x0303030303030303}
"""Status of ``size`` bytes that are all DEFINED, read as one number (the same in either byte order)."""
ALL_OWNED = {size: status & 0x0202020202020202 for size, status in ALL_DEFINED.items()}
"""Mask and value that ``size`` bytes which may all be written (UNDEFINED or DEFINED) have in common."""

_FORMATS: tuple[Literal["B", "H", "I", "Q"], ...] = ("B", "H", "I", "Q")


LARGE = 1 << 20
"""Bytes from which on a memory is mapped, so that pages nobody touches cost nothing."""

BLOCK = 1 << 20
"""Bytes whose status is written at once."""


@attrs.frozen
class Region:
    """``bytes`` of an array or of scratch from ``start``, then ``over`` bytes that may be read but are undefined."""

    name: str
    start: int
    bytes: int
    over: int = 0


def zeros(count: int) -> bytearray | mmap.mmap:
    """So many zero bytes that can be changed. Raises MemoryError where there is no room."""
    if count < LARGE:
        return bytearray(count)
    private = {"flags": mmap.MAP_PRIVATE | mmap.MAP_ANONYMOUS} if hasattr(mmap, "MAP_ANONYMOUS") else {}
    try:
        return mmap.mmap(-1, count, **private)
    except OSError as error:
        raise MemoryError(f"{count} bytes of data memory: {error.strerror}") from None


@attrs.frozen
class Touch:
    """One guard-on access of a beat: ``size`` bytes at ``address``."""

    address: int
    size: int
    store: bool


class Memory:
    """The data memory of one run; addresses are bytes from 0.

    ``regions`` may not overlap in their owned bytes; an ``over`` byte that another region owns stays that region's.
    """

    def __init__(self, parameters: description.Memory, regions: Sequence[Region] = ()) -> None:
        self.parameters = parameters
        self.regions = tuple(regions)
        whole = -(-parameters.size // 8) * 8  # a multiple of 8, so that every view covers every byte
        self.bytes = zeros(whole)
        self.status = zeros(whole)
        for region in regions:
            last = min(region.start + region.bytes + region.over, parameters.size)
            self._mark(region.start + region.bytes, last, OVER)
        for region in regions:
            self._mark(region.start, region.start + region.bytes, UNDEFINED)
        data, status = memoryview(self.bytes), memoryview(self.status)
        self.views = tuple(data.cast(code) for code in _FORMATS)
        self.status_views = tuple(status.cast(code) for code in _FORMATS)

    def _mark(self, first: int, last: int, status: int) -> None:
        """Give the bytes from ``first`` to ``last``, the end excluded, a status."""
        for block in range(first, last, BLOCK):
            count = min(BLOCK, last - block)
            self.status[block : block + count] = bytes([status]) * count

    def define(self, address: int, data: bytes) -> None:
        """Put defined bytes into memory before a run, inside some region."""
        self.bytes[address : address + len(data)] = data
        self._mark(address, address + len(data), DEFINED)

    def read(self, address: int, count: int) -> tuple[bytes, bytes]:
        """``count`` bytes and for each 1 if it is undefined (or outside), else 0."""
        status = self.status[address : address + count]
        return bytes(self.bytes[address : address + count]), bytes(s != DEFINED for s in status)

    def readable(self, address: int, size: int) -> bool:
        """May all ``size`` bytes be read; addresses do not wrap inside an access."""
        if address + size > self.parameters.size:
            return False
        return OUTSIDE not in self.status[address : address + size]

    def declared_over(self, address: int, size: int) -> bool:
        """Whether the only undefined bytes of a readable access are those an ``over`` declares."""
        return UNDEFINED not in self.status[address : address + size]

    def writable(self, address: int, size: int) -> bool:
        """May all ``size`` bytes be written."""
        if address + size > self.parameters.size:
            return False
        return min(self.status[address : address + size]) >= UNDEFINED

    def load(self, address: int, size: int) -> Value:
        """The value of ``size`` readable bytes in the core's byte order; undefined bytes stay undefined."""
        data = self.bytes[address : address + size]
        status = self.status[address : address + size]
        little = self.parameters.endianness == "little"
        if not little:
            status = status[::-1]
        unknown = sum(1 << k for k, s in enumerate(status) if s != DEFINED)
        return value_of(int.from_bytes(data, "little" if little else "big"), unknown, size)

    def store(self, address: int, size: int, value: Value) -> None:
        """Store ``size`` bytes into writable memory; undefined bytes make memory undefined."""
        bits, unknown = parts(value, size)
        little = self.parameters.endianness == "little"
        status = bytearray(UNDEFINED if unknown >> k & 1 else DEFINED for k in range(size))
        if not little:
            status.reverse()
        self.bytes[address : address + size] = bits.to_bytes(size, "little" if little else "big")
        self.status[address : address + size] = status

    def charge(self, touches: Sequence[Touch]) -> tuple[int, int]:
        """Cycles a beat's accesses freeze the core: (part with no wait states, the rest).

        Every access charges each bank it touches once, 1 and the wait of its slowest byte; the busiest bank less one
        is the freeze. With ``broadcast``, loads of the same words of a bank count once, with the longer wait.
        """
        parameters = self.parameters
        accesses: dict[int, int] = {}
        cycles: dict[int, int] = {}
        shared: dict[tuple[int, tuple[int, ...]], int] = {}
        for touch in touches:
            wait = self.wait_of(touch)
            for bank, words in self.banks_of(touch).items():
                if parameters.broadcast and not touch.store:
                    shared[bank, words] = max(wait, shared.get((bank, words), 0))
                else:
                    accesses[bank] = accesses.get(bank, 0) + 1
                    cycles[bank] = cycles.get(bank, 0) + 1 + wait
        for (bank, _), wait in shared.items():
            accesses[bank] = accesses.get(bank, 0) + 1
            cycles[bank] = cycles.get(bank, 0) + 1 + wait
        conflict = max(accesses.values(), default=1) - 1
        return conflict, max(cycles.values(), default=1) - 1 - conflict

    def banks_of(self, touch: Touch) -> dict[int, tuple[int, ...]]:
        """For each bank an access touches, the words (address ÷ width) it touches there."""
        width, banks = self.parameters.bank_width, self.parameters.banks
        found: dict[int, tuple[int, ...]] = {}
        for word in range(touch.address // width, (touch.address + touch.size - 1) // width + 1):
            found[word % banks] = (*found.get(word % banks, ()), word)
        return found

    def wait_of(self, touch: Touch) -> int:
        """Wait states of the slowest byte of an access, in cycles."""
        end = touch.address + touch.size
        return max(
            (w.cycles for w in self.parameters.waits if w.start < end and touch.address < w.start + w.bytes), default=0
        )

    def save(self) -> tuple[tuple[int, bytes, bytes], ...]:
        """Everything a run can change: for each region (start, bytes, status)."""
        return tuple(
            (r.start, bytes(self.bytes[r.start : r.start + r.bytes]), bytes(self.status[r.start : r.start + r.bytes]))
            for r in self.regions
        )

    def restore(self, saved: Iterable[tuple[int, bytes, bytes]]) -> None:
        """The inverse of :meth:`save`, on a memory of the same regions."""
        for start, data, status in saved:
            self.bytes[start : start + len(data)] = data
            self.status[start : start + len(status)] = status
