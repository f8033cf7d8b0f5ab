"""Independent model = stepper = fast engine, on generated cores and programs.

5,000 programs here, in parts so that they may be run beside each other; a million with ``python -m
tests.native.campaign``.
"""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor

import pytest

from .campaign import PINNED, run

PROGRAMS, PART = 5_000, 250
LONG_PROGRAMS, CHUNK = 20_000, 1_000


@pytest.mark.parametrize("first", range(0, PROGRAMS, PART))
def test_native_equals_model(first: int) -> None:
    """Registers, memory, cycles, stalls by cause, counts of every bundle, notes, the first hazard; in machine code."""
    tally = run(range(first, first + PART))
    assert tally.found == []
    assert tally.programs == PART
    assert tally.cycles["machine code"] > tally.cycles["all"] / 2


def test_native_keeps_every_pinned_rule() -> None:
    tally = run(PINNED)
    assert tally.found == []
    assert tally.programs == len(PINNED)


@pytest.mark.long
def test_native_equals_model_at_length() -> None:
    with ProcessPoolExecutor() as pool:
        for tally in pool.map(run, [range(n, n + CHUNK) for n in range(1_000_000, 1_000_000 + LONG_PROGRAMS, CHUNK)]):
            assert tally.found == []
