"""The fast engine against the independent model, on the generator's cores and programs."""

from __future__ import annotations

from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from random import Random

import pytest

from tests.differential.compare import differences
from tests.differential.generator import trial
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER
from vliwsim.native.engine import Native

FORMS = ("native", "native, undefined bytes too")
PROGRAMS = 40
LONG_PROGRAMS = 100_000
CHUNK = 500


def chunk(first: int, count: int = CHUNK) -> list[tuple[int, str]]:
    return [
        (seed, difference)
        for seed in range(first, first + count)
        for difference in differences(trial(Random(seed)), *FORMS)
    ]


def test_native_equals_model(monkeypatch: pytest.MonkeyPatch) -> None:
    """Registers, memory, cycles, stalls by cause, notes and the first hazard; and machine code did run."""
    passed = Counter[str]()
    leap = Native.leap

    def counted(self: Native, state: State, until: int = FOREVER, most: int = FOREVER) -> bool:
        before = state.cycle
        done = leap(self, state, until, most)
        passed["native"] += state.cycle - before
        return done

    monkeypatch.setattr(Native, "leap", counted)
    assert chunk(0, PROGRAMS) == []
    assert passed["native"] > PROGRAMS


@pytest.mark.long
def test_native_equals_model_at_length() -> None:
    with ProcessPoolExecutor() as pool:
        for found in pool.map(chunk, range(1_000_000, 1_000_000 + LONG_PROGRAMS, CHUNK)):
            assert found == []
