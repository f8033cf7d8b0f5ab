"""State handed over both ways at random cycles, snapshots in between: nothing changes, whatever the loop."""

from __future__ import annotations

from pathlib import Path
from random import Random

import numpy as np
import pytest

from vliwsim.description.corefile import load_core
from vliwsim.machine.memory import Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.native.engine import Native
from vliwsim.program.assembler import assemble

TOOLS = Path(__file__).parent.parent.parent / "tools"
LOOPS = {
    "one_bundle": (TOOLS / "bench_loop.vliw", str(TOOLS / "bench8.toml"), 3000),
    "recurrence": (TOOLS / "native/recurrence.vliw", None, 400),
    "bytewise": (TOOLS / "native/bytewise.vliw", None, 150),
    "divider": (TOOLS / "native/divider.vliw", None, 300),
    "conflicts": (TOOLS / "native/conflicts.vliw", None, 700),
}


class Counted(Native):
    """Counts the cycles that machine code has run."""

    passed = 0

    def leap(self, state: State, until: int, most: int = FOREVER) -> bool:
        before = state.cycle
        done = super().leap(state, until, most)
        self.passed += state.cycle - before
        return done


def prepared(name: str) -> tuple[Machine, State]:
    path, core, passes = LOOPS[name]
    kernel = assemble(path, load_core(core) if core else None)
    machine, numbers = Machine(kernel.program), kernel.core.register_numbers
    data = np.random.default_rng(3).uniform(1, 2, 2048).astype(">f4").tobytes()
    places = {"g10": 0, "g20": passes, "g3": 0x3FC00000}
    places |= {"h10": 1028 if name != "one_bundle" else 4100} if "h10" in numbers else {"g11": 1024 + 16}
    given = {numbers[n]: v for n, v in places.items()}
    return machine, machine.start(given, [(0, data)], [Region("x", 0, 8192)])


def shown(machine: Machine, state: State) -> tuple[object, ...]:
    """All that a finished run shows."""
    outcome = machine.outcome(state, "halt")
    return (state.cycle, outcome.bundles, dict(outcome.stalls), outcome.drain, outcome.counts, outcome.begun,
            [repr(v) for v in outcome.registers], bytes(state.memory.bytes), bytes(state.memory.status))  # fmt: skip


@pytest.mark.parametrize("name", LOOPS)
def test_handing_over_changes_nothing(name: str) -> None:
    machine, state = prepared(name)
    machine.run(state)
    wanted = shown(machine, state)
    machine, state = prepared(name)
    native, r = Counted(machine, effort=1), Random(name)
    while not state.finished:
        until = state.cycle + r.choice((1, 3, 20, 300))
        if r.random() < 0.4:
            machine.advance(state, until)
        else:
            native.advance(state, until)
        assert state.cycle == until or state.halt_beat is not None
        if r.random() < 0.3:
            saved = state.save()
            native.advance(state, state.cycle + 50)
            state.restore(saved)
    assert shown(machine, state) == wanted
    assert native.passed > 100


def test_a_billion_cycles_account_exactly() -> None:
    machine, state = prepared("recurrence")
    trips = machine.core.register_numbers["g20"]
    passes = 125_000_000
    state.operands[trips] = passes
    outcome = Native(machine).run(state)
    assert (outcome.reason, outcome.cycles) == ("halt", 8 * (passes + 1) + 3)
    assert outcome.counts[2] == passes + 1
