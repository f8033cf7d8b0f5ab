"""The block of memory through which machine code and Python hand a machine's state over, and its layout."""

from __future__ import annotations

import attrs

CONTEXT, FUEL, REASON, BANK, WAIT, PENALTY, STRADDLE, FRESH, LAST = range(9)
"""The header's 64-bit numbers: context index, passes of loop heads left, why it came back, stall cycles by cause, and
after a halt the beats from it to the last landing."""
HEADER = 16

OUT_OF_FUEL, GIVEN_BACK, HALTED, UNMAPPED = 1, 2, 3, 4
"""Reasons: fuel used up; a beat that only the stepper can take; finished; a context that is not translated."""


@attrs.frozen
class Layout:
    """Byte offsets of the parts of the block, behind the header of 64-bit numbers.

    ``registers``: 32 bits each. ``masks``: undefined bytes of each (plain code: not 0 if it is undefined as it was).
    ``values``, ``value_masks``, ``value_on``: of the flights of the context, in its order. ``turn_on``: of its turns.
    ``counts``: 64 bits each. ``noted``: bytes, not 0 for a note that has been made.
    """

    registers: int
    masks: int
    values: int
    value_masks: int
    value_on: int
    turn_on: int
    counts: int
    noted: int
    bytes: int


def layout(registers: int, flights: int, turns: int, counts: int, notes: int) -> Layout:
    at = 8 * HEADER
    starts = []
    for size in (4 * registers, registers, 4 * flights, flights, flights, turns, 8 * counts, notes):
        starts.append(at)
        at += -(-size // 8) * 8
    return Layout(*starts, at)  # type: ignore[call-arg]
