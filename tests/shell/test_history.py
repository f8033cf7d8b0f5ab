"""Time both ways: whatever moves led to a cycle, the state there is the one a fresh run has."""

from __future__ import annotations

import random

import pytest

from tests.shell.helping import complete, fresh_states, from_text, session
from vliwsim.machine.stepper import Machine
from vliwsim.shell import history
from vliwsim.shell.conditions import condition
from vliwsim.shell.edits import suppose
from vliwsim.shell.engine import Swift
from vliwsim.shell.history import BUDGET, FINE, History
from vliwsim.shell.places import place
from vliwsim.shell.session import Session
from vliwsim.shell.trace import written_down

WALKED = {
    "energy": {"n": 512},
    "window_scale": {"n": 512, "gain": 3},
    "weighted_sum": {"n": 256},
    "peak": {"n": 128},
    "plain": {"n": 64},
}


def walk(one: Session, moves: int, seed: int) -> None:
    """Random moves, each compared with the fresh run's state at the cycle it led to."""
    choose = random.Random(seed)
    fresh = fresh_states(one)
    last = len(fresh) - 1
    labels = [s.label for s in one.kernel.map.sections]
    conditions = [condition(one, text) for text in ("landed g6", "cycle % 37 == 5", "stalled", "g20 == 3")]
    for _ in range(moves):
        kind = choose.randrange(8)
        if kind < 3:
            one.move(choose.choice((1, 1, 2, 5, 30, 200)) * choose.choice((-1, 1)))
        elif kind < 5:
            one.go(choose.randrange(last + 20))
        elif kind == 5:
            one.seek(choose.choice(conditions), back=choose.random() < 0.5)
        elif kind == 6:
            text = f"{choose.choice(labels)} pass {choose.randrange(1, 9)}"
            one.to_place(place(one.layout, text))
        else:
            one.to_end()
        assert one.cycle <= last
        assert complete(one.machine, one.state) == fresh[one.cycle], one.cycle
    assert one.recorded.last in (None, last)


@pytest.mark.parametrize("name", WALKED)
def test_after_any_moves_the_state_is_that_of_a_fresh_run(
    name: str, long: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(history, "FINE", 16)  # so that short runs have many snapshots
    monkeypatch.setattr(history, "STEP", 2)
    monkeypatch.setattr(history, "NEAR", 2)
    walk(session(name, WALKED[name]), 2000 if long else 80, seed=len(name))


def test_the_same_on_a_core_that_holds_freezes_and_serves_an_interrupt() -> None:
    one = session("energy", {"n": 256}, changes=("memory.conflict=stall", "memory.banks=1"), interrupt_at=20)
    walk(one, 60, seed=2)
    one = from_text(HOLDING, {"x": list(range(32))}, core="lone4")
    walk(one, 60, seed=3)


HOLDING = """kernel tried
core lone4
given x : i32[n] at g10
given left : i32 = n - 1 in g4
returns total : i32 in g3
needs n >= 1

start:
@0 li g3, 0
loop:
@0 lw g2, [g10 then +4]
@1 add g3, g3, g2
@2 count g4, loop
finish:
@0 mv g3, g3
   halt
"""


def test_a_run_with_a_hazard_has_exact_time_up_to_it() -> None:
    text = HOLDING.replace("lone4", "pair7").replace("@2 count g4, loop", "@2 count g4, nowhere")
    text = text.replace("g4", "g16").replace("@0 mv g3, g3", "@0 lw g3, [g3]").replace("nowhere", "finish")
    one = from_text(text, {"x": [1, 2, 3, 4]})
    machine = Machine(one.kernel.program, careful=True)
    assert one.to_end().why == "hazard"
    last = one.cycle
    assert one.hazard_at(last) is not None
    choose = random.Random(1)
    for _ in range(40):
        cycle = choose.randrange(last + 3)
        arrival = one.go(cycle)
        assert (arrival.why == "hazard") == (cycle > last)
        state = machine.start({}, (), one.state.memory.regions)
        state.restore(one.recorded.first)
        machine.advance(state, min(cycle, last))
        assert complete(one.machine, one.state) == complete(machine, state)


def test_time_on_a_branch_is_that_of_a_run_from_the_edited_state() -> None:
    one = session("energy", {"n": 128})
    recorded = fresh_states(one)
    one.go(20)
    suppose(one, "g20 = 3")
    machine = Machine(one.kernel.program, careful=True)
    choose = random.Random(2)
    for _ in range(60):
        cycle = choose.randrange(60)
        one.go(cycle)
        if one.cycle < 20:
            assert complete(one.machine, one.state) == recorded[one.cycle]
            continue
        state = machine.start({}, (), one.state.memory.regions)
        state.restore(one.history.first)
        machine.advance(state, one.cycle)
        if one.state.finished:
            machine.advance(state)
        assert complete(one.machine, one.state) == complete(machine, state)
    assert one.history.last is not None
    one.forget()
    assert one.cycle == 20
    one.to_end()
    assert complete(one.machine, one.state) == recorded[-1]


def test_it_stops_at_the_end_and_at_the_start() -> None:
    one = session("energy", {"n": 64})
    assert one.to_end().why == "end"
    end = one.cycle
    assert one.move(5).why == "end"
    assert one.cycle == end
    assert one.state.finished
    assert one.move(-end - 7).why == "start"
    assert one.cycle == 0


def test_snapshots_thin_out_with_distance_and_their_number_is_bounded() -> None:
    one = session("tests/shell/long_loop.vliw", {"trips": 300_000})
    one.go(300_000)
    kept = [cycle for cycle, _ in one.recorded.snapshots(one.cycle + 1)]
    assert len(kept) <= 2 * history.COARSE + 8 * history.NEAR
    assert one.cycle - kept[0] <= FINE
    near = sum(1 for cycle in kept if one.cycle - cycle <= 8 * FINE)
    far = sum(1 for cycle in kept if 100_000 <= one.cycle - cycle <= 100_000 + 8 * FINE)
    assert near >= 8
    assert far <= 1
    assert one.recorded.kept_bytes() <= BUDGET


def test_a_budget_that_is_too_small_leaves_few_snapshots_and_exact_time(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(history, "BUDGET", 10_000)
    one = session("tests/shell/long_loop.vliw", {"trips": 60_000})
    one.go(60_000)
    assert one.recorded.kept_bytes() <= 10_000
    one.move(-20_000)
    there = complete(one.machine, one.state)
    other = session("tests/shell/long_loop.vliw", {"trips": 60_000})
    other.go(40_000)
    assert complete(other.machine, other.state) == there


def test_another_engine_can_be_plugged_in() -> None:
    asked: list[tuple[int, int]] = []
    one = session("energy", {"n": 64})

    class Counted:
        def advance(self, state, until):  # type: ignore[no-untyped-def]
            asked.append((state.cycle, until))
            one.machine.advance(state, until)

    other = Session(one.setup, engine=lambda machine: Counted())
    other.go(20)
    one.go(20)
    assert asked == [(0, 20)]
    assert complete(other.machine, other.state) == complete(one.machine, one.state)


def test_machine_code_takes_over_on_long_ways_and_time_stays_exact(monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("llvmlite")
    monkeypatch.setattr(Swift, "WARM", 1 << 15)
    slow = session("tests/shell/long_loop.vliw", {"trips": 400_000})
    fast = Session(slow.setup, engine=Swift)
    fast.to_end()
    assert isinstance(fast.recorded.engine, Swift)
    assert fast.recorded.engine.reach > 0
    slow.to_end()
    assert complete(fast.machine, fast.state) == complete(slow.machine, slow.state)
    for cycle in (123_456, 399_000, 20, 250_001):
        fast.go(cycle)
        slow.go(cycle)
        assert complete(fast.machine, fast.state) == complete(slow.machine, slow.state), cycle


def test_what_is_written_down_of_a_stretch_is_what_a_recorder_hears() -> None:
    from vliwsim.machine.recorder import Record, record

    one = session("energy", {"n": 64})
    heard: list[Record] = []
    undo = record(one.machine, heard.append)
    state = one.machine.start({}, (), one.state.memory.regions)
    state.restore(one.recorded.first)
    one.machine.run(state)
    undo()
    stretch = written_down(one, one.recorded, one.recorded.first, 25, ended=True)
    assert [b.beat for b in stretch.beats.values()] == [r.beat for r in heard]
    assert [b.bundle for b in stretch.beats.values()] == [r.bundle for r in heard]
    landed = sorted((r.beat, one_.register) for r in heard for one_ in r.landings)
    written = sorted((one_.beat, register) for register, many in stretch.landings.items() for one_ in many)
    assert [w for w in written if w[0] < 24] == landed
    assert [w for w in written if w[0] >= 24]  # and what lands behind the halt
    assert isinstance(one.recorded, History)
