"""The stepper against the independent model, on generated cores and programs."""

from __future__ import annotations

from random import Random

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from .compare import ENGINES, differences
from .generator import trial


@settings(max_examples=2000, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True)
@given(st.integers(0, 2**32))
def test_stepper_equals_model(seed: int) -> None:
    """2,000 programs; each in the hot loop and by definition, some cycle by cycle and through snapshots."""
    made = trial(Random(seed))
    engines = list(ENGINES) if seed % 4 == 0 else ["hot loop", "definition"]
    assert differences(made, *engines) == []
