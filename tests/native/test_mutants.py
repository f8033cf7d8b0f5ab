"""Faults planted in the translator show on programs of the test suite."""

from __future__ import annotations

import pytest

from . import campaign
from .mutants import MUTANTS, Searcher

PARTS = 4


def test_without_a_fault_the_same_programs_show_none() -> None:
    assert campaign.run(sorted({mutant.shown_by for mutant in MUTANTS.values()})).found == []


@pytest.mark.parametrize("part", range(PARTS))
def test_every_fault_shows(part: int) -> None:
    """Each on the program named beside it, or at least on another of those that are written down."""
    searcher, unseen = Searcher(), []
    for mutant in list(MUTANTS.values())[part::PARTS]:
        one = range(mutant.shown_by, mutant.shown_by + 1)
        if not (searcher.shown(mutant.name, one) or searcher.shown(mutant.name, campaign.PINNED)):
            unseen.append(mutant.name)
    assert unseen == []
