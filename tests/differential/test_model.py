"""Every engine against the table of one-rule programs, and the model's own bookkeeping."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from functools import partial

import pytest

from . import real
from .model import run
from .plain import CAUSES, UNDEFINED, Outcome, Value
from .rules import RULES, Rule, assemble, register_number, rule, words

ENGINES: dict[str, Callable[..., Outcome]] = {
    "model": run,
    "hot loop": real.run,
    "definition": partial(real.run, careful=True),
}
"""What is held to the table: functions with the signature of :func:`.model.run`."""


@pytest.fixture(params=sorted(ENGINES))
def engine(request: pytest.FixtureRequest) -> Callable[..., Outcome]:
    return ENGINES[request.param]


def result(case: Rule, engine: Callable[..., Outcome], **more: object) -> Outcome:
    given = {register_number(case.core, name): value for name, value in case.given.items()}
    return engine(
        case.core,
        assemble(case.core, case.code),
        given,
        case.regions,
        interrupt_at=case.interrupt_at,
        limit=case.limit,
        **more,
    )


def as_value(value: int | Value) -> Value:
    return value if isinstance(value, Value) else Value(value)


def expected_registers(case: Rule) -> dict[str, Value]:
    names = [f"{cluster.name}{k}" for cluster in case.core.clusters for k in range(cluster.registers)]
    known = {**case.given, **case.after}
    return {name: as_value(known.get(name, UNDEFINED)) for name in names}


def expected_memory(case: Rule) -> dict[int, int | None]:
    held: dict[int, int | None] = {}
    for region in case.regions:
        for k in range(region.size):
            held[region.start + k] = region.content[k] if k < len(region.content) else None
    return held | case.stored


def expected(case: Rule) -> dict[str, object]:
    """The whole result, in one comparison."""
    return {
        "stop": case.stop or ("hazard" if case.hazard else "halt"),
        "cycles": case.cycles,
        "bundles": case.bundles,
        "stalls": dict.fromkeys(CAUSES, 0) | case.stalls,
        "drain": case.drain,
        "hazard": case.hazard,
        "registers": expected_registers(case),
        "memory": expected_memory(case),
        "warnings": tuple((beat, bundle, register_number(case.core, name)) for beat, bundle, name in case.warnings),
    }


def found(case: Rule, outcome: Outcome) -> dict[str, object]:
    names = list(expected_registers(case))
    return {
        "stop": outcome.stop,
        "cycles": outcome.cycles,
        "bundles": outcome.bundles,
        "stalls": outcome.stalls,
        "drain": outcome.drain,
        "hazard": None if outcome.hazard is None else tuple(outcome.hazard),
        "registers": dict(zip(names, outcome.registers, strict=True)),
        "memory": outcome.memory,
        "warnings": outcome.warnings,
    }


@pytest.mark.parametrize("case", RULES, ids=[case.name for case in RULES])
def test_rule(case: Rule, engine: Callable[..., Outcome]) -> None:
    assert found(case, result(case, engine)) == expected(case)


@pytest.mark.parametrize("case", RULES, ids=[case.name for case in RULES])
def test_rule_adds_up(case: Rule) -> None:
    """The numbers written in the table: "cycles = bundles + stalls + drain … always adding up"."""
    assert case.cycles == case.bundles + sum(case.stalls.values()) + case.drain
    assert set(case.stalls) <= set(CAUSES)


def test_rule_names_are_unique() -> None:
    assert [name for name, times in Counter(case.name for case in RULES).items() if times > 1] == []


def test_every_hazard_of_the_text_has_a_rule() -> None:
    named = {case.hazard[0] for case in RULES if case.hazard}
    assert named == set(
        """
        lands-twice write-ports
        undefined-used indirect-target written-twice
        slot-taken slot-class guard-register busy read-ports links fresh early-read
        misaligned out-of-array store-twice bank-conflict
        two-redirects ran-off-the-end branch-overlap link-nowhere branch-past-halt
        """.split()
    )


@pytest.mark.parametrize("case", RULES, ids=[case.name for case in RULES])
def test_log_has_an_entry_a_cycle(case: Rule, engine: Callable[..., Outcome]) -> None:
    outcome = result(case, engine, log=True)
    assert len(outcome.log) == outcome.cycles
    counted = Counter(passed.what for passed in outcome.log)
    accounts = {"bundle": outcome.bundles, "drain": outcome.drain} | outcome.stalls
    assert counted == Counter({what: count for what, count in accounts.items() if count})


def test_log_shows_registers_cycle_by_cycle(engine: Callable[..., Outcome]) -> None:
    case = next(case for case in RULES if case.name == "fresh-freeze-ages-nothing")
    # g6 lands in beat 3, which is cycle 4: cycle 2 is the freeze, cycles 1 and 2 are both beat 1.
    log = result(case, engine, log=True).log
    assert [passed.registers[6].bits for passed in log] == [5, 5, 5, 5, 77]
    assert [passed.what for passed in log] == ["bundle", "bundle", "fresh", "bundle", "bundle"]
    assert [passed.bundle for passed in log] == [0, 1, 1, 2, 3]


def test_one_register_twice_in_one_operation_is_refused() -> None:
    case = rule("twice", "", "g.mem lw g2, [g2 then +4]", cycles=0, bundles=0, given={"g2": 0}, regions=(words(0, 1),))
    with pytest.raises(ValueError, match="twice"):
        result(case, run)
