"""Soundness: no run of a generated program meets a hazard that its check proved absent.

Each program is run on 20 inputs; reads before a landing that a core warns of must be among those told, and an
interrupt taken by a bundle that is called safe must change nothing.
"""

from __future__ import annotations

import pytest

from tests.check.generated import Tally, examine, examined, lines
from vliwsim.flow import landing
from vliwsim.machine.hazards import ALLOWED

CHUNK = 250


@pytest.mark.parametrize("first", range(0, 1000, CHUNK))
def test_no_run_meets_what_is_proved_absent(first: int) -> None:
    tally = examined(range(first, first + CHUNK))
    print(*lines(tally), sep="\n")
    assert not tally.missed
    assert tally.undecided <= CHUNK // 50
    assert len(tally.hazards) >= len(ALLOWED) - 3  # nearly every hazard is met, so what is proved says something
    assert tally.interrupted >= CHUNK // 10


@pytest.mark.long
@pytest.mark.parametrize("first", range(1000, 20_000, 1000))
def test_no_run_of_many_meets_what_is_proved_absent(first: int) -> None:
    tally = examined(range(first, first + 1000))
    print(*lines(tally), sep="\n")
    assert not tally.missed


def test_it_would_notice(monkeypatch: pytest.MonkeyPatch) -> None:
    """A check that overlooks what lands together is found out."""
    monkeypatch.setattr(landing, "judge_landing", lambda *_: None)
    tally = Tally()
    for seed in range(60):
        examine(seed, tally)
    assert any("lands-twice" in line for line in tally.missed)
    assert any("write-ports" in line for line in tally.missed)


@pytest.mark.parametrize("seed", [40725, 15898])
def test_programs_that_once_slipped_through(seed: int) -> None:
    """40725: an interlocked core judges guards while a bundle waits, also one that can never issue. 15898: whether one
    waits depends on a value that became one of two in this very beat."""
    assert not examined(range(seed, seed + 1)).missed
