"""The stepper against the independent model, on generated cores and programs."""

from __future__ import annotations

from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from random import Random

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from . import model
from .compare import ENGINES, differences
from .generator import trial

LONG_PROGRAMS = 200_000
CHUNK = 1_000


def engines(seed: int) -> list[str]:
    """Every program runs in the hot loop and by definition, every fourth cycle by cycle and through snapshots too."""
    stepped = [name for name, how in ENGINES.items() if "native" not in how]
    return stepped if seed % 4 == 0 else ["hot loop", "definition"]


@settings(max_examples=2000, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True, database=None)
@given(st.integers(0, 2**32))
def test_stepper_equals_model(seed: int) -> None:
    """2,000 programs: registers, memory, cycles, stalls by cause, notes and the first hazard."""
    assert differences(trial(Random(seed)), *engines(seed)) == []


def chunk(first: int) -> tuple[list[tuple[int, str]], Counter[str]]:
    """What differs among the programs from seed ``first`` on, and how the model's runs ended."""
    found, ends = [], Counter[str]()
    for seed in range(first, first + CHUNK):
        made = trial(Random(seed))
        found += [(seed, difference) for difference in differences(made, *engines(seed))]
        run = {"interrupt_at": made.interrupt_at, "limit": made.limit}
        outcome = model.run(made.core, made.program, made.registers, made.regions, **run)
        ends[outcome.hazard.name if outcome.hazard else outcome.stop] += 1
    return found, ends


@pytest.mark.long
def test_stepper_equals_model_at_length() -> None:
    """200,000 programs, seeds 100,000 to 299,999; counts of how they ended are printed."""
    ends = Counter[str]()
    with ProcessPoolExecutor() as pool:
        for found, counted in pool.map(chunk, range(100_000, 100_000 + LONG_PROGRAMS, CHUNK)):
            assert found == []
            ends += counted
    print(dict(ends.most_common()))
    assert sum(ends.values()) == LONG_PROGRAMS


def test_the_generator_reaches_every_hazard_and_end() -> None:
    """A generator that never met a rule would prove nothing about it."""
    _, ends = chunk(7_000)
    from vliwsim.machine.hazards import ALLOWED

    assert {"halt", "limit", *ALLOWED} - set(ends) == set()
