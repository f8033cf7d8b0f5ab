"""Generated programs, whose state goes to and fro between engines: stepper, fast engine, following one, by snapshot.

At random cycles the state is saved and becomes that of another machine, which another engine runs on. Where it comes
to be handed over there are results, undefined ones too, and branches in flight, units are busy, an interrupt is asked
for or served, and limits cut a run off; that all of this has been met is asserted.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from random import Random

from tests.differential import real
from tests.differential.generator import Trial, trial
from tests.differential.loops import loop_trials
from tests.differential.plain import Outcome
from vliwsim.description.values import Undefined
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine
from vliwsim.native.engine import Native

DRAWN, LOOPS = 260, 12
"""Programs freely drawn, and loops with two sets of data; many times as many with ``--long``."""

MET = (
    *("result", "undefined result", "branch", "branch where some go to registers", "busy unit", "interrupt asked for"),
    *("service", "freeze", "within an idle word", "behind halt", "by machine code"),
)


def met_in(state: State, machine: Machine) -> Counter[str]:
    """What is in the middle of being done."""
    values = [value for batches in state.flight.values() for _, some in batches for value in some]
    parts = [part for k in range(len(machine.program.bundles)) for part in machine.ready[k].parts if part.branches]
    there = {
        "result": bool(values),
        "undefined result": any(isinstance(value, Undefined) for value in values),
        "branch": state.issue - state.last_branch < machine.core.branch.latency,
        "branch where some go to registers": bool(state.redirects) and any(part.target is None for part in parts),
        "busy unit": any(until > state.beat for until in state.busy_until),
        "interrupt asked for": state.interrupt_at is not None,
        "service": state.service > 0,
        "freeze": bool(state.frozen),
        "within an idle word": state.within > 0,
        "waited for a fresh operand": state.waited_fresh,
        "behind halt": state.halt_beat is not None,
    }
    return Counter(name for name, is_so in there.items() if is_so)


class Exchange:
    """Two machines of one program, with three engines each; a state goes from one to the other."""

    def __init__(self, one: Trial, r: Random, met: Counter[str]) -> None:
        self.trial, self.r, self.met = one, r, met
        self.machines = [real.machine_of(one.core, one.program) for _ in range(2)]
        self.engines: list[list[Callable[[State, int], None]]] = []
        for machine in self.machines:
            plain = Native(machine, patience=2, effort=0, most=24)
            following = Native(machine, patience=2, effort=0, most=24, following=True)
            self.engines.append([machine.advance, self.counted(plain), self.counted(following)])

    def counted(self, native: Native) -> Callable[[State, int], None]:
        leap = native.leap

        def counting(state: State, until: int, most: int = 1 << 62) -> bool:
            before = state.cycle
            passed = leap(state, until, most)
            self.met["by machine code"] += state.cycle - before
            return passed

        native.leap = counting  # type: ignore[method-assign]
        return native.advance

    def advance(self, state: State, limit: int) -> None:
        """Run to the limit, from hand to hand; ``state`` is the one that is judged in the end."""
        here, other = state, real.start(self.machines[1], self.trial.registers, self.trial.regions)
        machine = 0
        try:
            while not here.finished and here.cycle < limit:
                until = min(limit, here.cycle + self.r.choice((1, 1, 2, 5, 30)))
                self.r.choice(self.engines[machine])(here, until)
                assert here.cycle == until or here.halt_beat is not None
                self.met += met_in(here, self.machines[machine])
                if self.r.random() < 0.4:
                    other.restore(here.save())
                    here, other, machine = other, here, 1 - machine
        finally:
            if here is not state:
                state.restore(here.save())


def exchanged(one: Trial, seed: object, met: Counter[str]) -> Outcome:
    exchange = Exchange(one, Random(f"exchange {seed}"), met)
    outcome, _ = real.finish(
        exchange.machines[0], exchange.advance, one.registers, one.regions, one.interrupt_at, one.limit
    )
    return outcome


def stepped(one: Trial) -> Outcome:
    machine = real.machine_of(one.core, one.program)
    outcome, _ = real.finish(machine, machine.advance, one.registers, one.regions, one.interrupt_at, one.limit)
    return outcome


def held(one: Trial, seed: object, met: Counter[str], ends: Counter[str]) -> None:
    """The run goes from hand to hand and is what it is by the stepper; cut off somewhere, too."""
    wanted = stepped(one)
    r = Random(f"cut {seed}")
    for trial_ in (one, replace(one, limit=1 + r.randrange(max(1, wanted.cycles)))):
        wanted = stepped(trial_)
        ends[wanted.stop] += 1
        assert exchanged(trial_, seed, met) == wanted, f"seed {seed}, limit {trial_.limit}"


def test_engines_take_over_from_each_other(long: bool) -> None:
    met: Counter[str] = Counter()
    ends: Counter[str] = Counter()
    for seed in range(DRAWN * (20 if long else 1)):
        held(trial(Random(f"hand over {seed}")), seed, met, ends)
    assert set(ends) == {"halt", "hazard", "limit"}
    rare = ["waited for a fresh operand"] if long else []
    assert not [name for name in [*MET, *rare] if not met[name]], met


def test_loops_go_from_hand_to_hand(long: bool) -> None:
    met: Counter[str] = Counter()
    ends: Counter[str] = Counter()
    for seed in range(LOOPS * (20 if long else 1)):
        for number, one in enumerate(loop_trials(Random(f"hand over a loop {seed}"))):
            held(one, (seed, number), met, ends)
    assert met["by machine code"] > 200
