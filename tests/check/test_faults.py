"""Planted faults in the shipped kernels, and whether what is called violated happens.

Every stamp moved by one, every wait shortened, every operation in another slot, every register a number off: each is
noticed by the assembler, by the check, or by the runs of a few cases, or it changes nothing. The default run judges a
sample; with ``--long`` all of them are judged and the table is printed (``-s``).
"""

from __future__ import annotations

from collections import Counter

import pytest

from tests.check.faults import EQUAL, ESCAPED, RUN, Court, Fault, Sheet, sample, table
from tests.check.test_shipped import SOURCES
from vliwsim.machine.stepper import Machine

NAMES = [source.stem for source in SOURCES]
SAMPLED = ("energy", "calibrate", "plain")


def judged(court: Court, faults: list[Fault]) -> Counter[tuple[str, str]]:
    counts: Counter[tuple[str, str]] = Counter()
    escaped = []
    for fault in faults:
        found = court.verdict(fault)
        counts[fault.kind, found] += 1
        if found == ESCAPED:
            escaped.append(f"{fault.kind}: {fault.where}")
    assert not escaped
    return counts


@pytest.mark.parametrize("name", SAMPLED)
def test_a_sample_of_planted_faults_is_noticed(name: str) -> None:
    court = Court(name)
    counts = judged(court, sample(list(court.sheet.faults()), 50))
    print(*table({name: counts}), sep="\n")
    noticed = sum(n for (_, found), n in counts.items() if found not in (EQUAL, ESCAPED))
    assert noticed > 30
    assert sum(n for (_, found), n in counts.items() if found == RUN) < noticed / 2  # most need no run


@pytest.mark.long
@pytest.mark.parametrize("name", NAMES)
def test_every_planted_fault_is_noticed_or_changes_nothing(name: str) -> None:
    court = Court(name)
    print(*table({name: judged(court, list(court.sheet.faults()))}), sep="\n")


def false_alarms(court: Court, faults: list[Fault]) -> tuple[int, list[str]]:
    """How many changed programs are called illegal, and those of which no run meets what is told."""
    found = [alarm for fault in faults if (alarm := court.false_alarm(fault)) is not None]
    return len(found), [alarm for alarm in found if alarm]


def test_what_is_called_violated_happens() -> None:
    """On programs made of shipped kernels by moving one stamp."""
    told, alarms = 0, list[str]()
    for name in ("energy", "weighted_sum", "plain"):
        court = Court(name)
        more, found = false_alarms(court, list(court.sheet.stamps()))
        told, alarms = told + more, alarms + found
    assert told >= 20
    assert not alarms


@pytest.mark.long
def test_false_alarms_are_below_one_in_a_hundred() -> None:
    told, alarms = 0, list[str]()
    for name in NAMES:
        court = Court(name)
        more, found = false_alarms(court, list(court.sheet.stamps()))
        told, alarms = told + more, alarms + found
    print(f"{len(alarms)} false alarms in {told}", *alarms, sep="\n")
    assert len(alarms) < told / 100


@pytest.mark.parametrize("name", NAMES)
def test_a_sheet_says_its_kernel_again(name: str) -> None:
    """Without a fault, the text of a sheet is the kernel: what the changes are made to is right."""
    court = Court(name)
    again = court.assembled(court.sheet.text(court.sheet.lines))
    assert again is not None
    assert Sheet.of(again).sections == court.sheet.sections
    machine = Machine(again.program)
    assert all(court.passes(machine, again, case) for case in court.cases[:3])
