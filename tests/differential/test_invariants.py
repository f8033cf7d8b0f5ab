"""What must hold of every machine and program, whatever they are: freezes, idle beats, exposed against interlocked."""

from __future__ import annotations

from dataclasses import replace
from random import Random

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from vliwsim.machine.memory import Region
from vliwsim.machine.recorder import Record, record
from vliwsim.machine.stepper import Machine
from vliwsim.program.assembler import assemble

from . import real
from .generator import Trial, trial
from .plain import Outcome, PlainCore, PlainWait

SEEDS = st.integers(0, 2**32)
FEW = settings(
    max_examples=300, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True, database=None
)


def run(made: Trial, core: PlainCore) -> Outcome:
    return real.run(core, made.program, made.registers, made.regions, limit=3_000)


def freezing(core: PlainCore) -> PlainCore:
    """The same core with everything that can freeze it, turned up."""
    return replace(
        core, banks=1, bank_width=8, broadcast=False, conflict="stall", waits=(PlainWait(0, core.memory_size, 3),),
        taken_penalty=4, straddle_freeze=2,
        links=tuple(replace(k, fresh="stall" if k.fresh == "ok" else k.fresh) for k in core.links),
    )  # fmt: skip


@FEW
@given(SEEDS)
def test_freezes_never_change_exposed_results(seed: int) -> None:
    made = trial(Random(seed))
    core = replace(made.core, interlocked=False, conflict="stall")
    plain, frozen = run(made, core), run(made, freezing(core))
    if "limit" in (plain.stop, frozen.stop):  # the limit counts cycles, so the two stop at different beats
        return
    for field in ("stop", "bundles", "registers", "memory", "drain"):
        assert getattr(plain, field) == getattr(frozen, field), field
    one, other = plain.hazard, frozen.hazard
    assert (one and (one.name, one.beat, one.bundle)) == (other and (other.name, other.beat, other.bundle))


LOOP = """
kernel   idle_beats
core     pair7
given    x     : i32[n]        at g1
given    again : i32 = n - 1   in g16
returns  total : i32           in g2
needs    n >= 1
start:
@0                    li    g2, 0
loop:
@0                    lw    g3, [g1 then +4]
@load                 mul   g4, g3, 3
@load + multiply + {a}      add   g2, g2, g4
@load + multiply + {a} + {b} idle
@load + multiply + 5 + {a} + {b} - branch count g16, loop
@load + multiply + {a} + {b} + 4 idle
finish:
@0                    halt
"""


@settings(max_examples=40, deadline=None, derandomize=True, database=None)
@given(st.integers(0, 3), st.integers(0, 3), st.integers(1, 30))
def test_an_added_idle_beat_costs_exactly_its_executions(a: int, b: int, n: int) -> None:
    """One idle beat more in the loop, before or behind the addition: n cycles more, and the same result."""

    def cycles(a: int, b: int) -> tuple[int, object]:
        kernel = assemble("idle.vliw", text=LOOP.format(a=a, b=b))
        machine = Machine(kernel.program)
        from vliwsim.machine.memory import Region

        data = b"".join((7 * k + 1).to_bytes(4, "little") for k in range(n))
        names = kernel.core.register_numbers
        state = machine.start({names["g1"]: 64, names["g16"]: n - 1}, [(64, data)], [Region("x", 64, 4 * n)])
        outcome = machine.run(state)
        assert outcome.reason == "halt", outcome.hazard
        return outcome.cycles, outcome.registers[names["g2"]]

    before = cycles(a, b)
    assert before[1] == 3 * sum(7 * k + 1 for k in range(n))
    assert cycles(a + 1, b) == cycles(a, b + 1) == (before[0] + n, before[1])


def overlapping_writes(made: Trial, core: PlainCore) -> bool:
    """Whether some register ever has two results in flight: exposed and interlocked order them differently."""
    machine = Machine(real.program_of(real.core_of(core), made.program))
    state = real.start(machine, made.registers, made.regions)
    busy: dict[int, int] = {}
    found = False

    def listen(event: Record) -> None:
        nonlocal found
        if event.cause is not None:
            return
        for on, part in zip(event.on, machine.ready[event.bundle].parts, strict=True):
            for write in part.effects.writes if on else ():
                found |= busy.get(write.register, 0) > event.beat
                busy[write.register] = max(busy.get(write.register, 0), event.beat + write.latency)

    undo = record(machine, listen)
    machine.run(state, limit=3_000)
    undo()
    return found


@settings(FEW, max_examples=1_500)
@given(SEEDS)
def test_code_without_early_reads_is_equal_exposed_and_interlocked(seed: int) -> None:
    """Results, not time: code that reads nothing early and overlaps no writes means the same under both issue rules."""
    made = trial(Random(seed))
    core = replace(made.core, interlocked=False, early="reject", taken_penalty=0)
    exposed = run(made, core)
    if exposed.stop != "halt" or overlapping_writes(made, core):
        return
    held = run(made, replace(core, interlocked=True))
    if held.hazard and held.hazard.name in ("written-twice", "write-ports"):
        return  # rules of the interlocked core alone, and of a bundle that exceeds its ports with other results late
    assert (held.stop, held.bundles, held.registers, held.memory) == (
        "halt", exposed.bundles, exposed.registers, exposed.memory,
    )  # fmt: skip


def test_the_comparison_of_issue_rules_is_not_empty() -> None:
    """Enough of the generated programs qualify for the property above to say something."""
    core_of = {seed: replace(trial(Random(seed)).core, interlocked=False, early="reject") for seed in range(200)}
    ended = [seed for seed, core in core_of.items() if run(trial(Random(seed)), core).stop == "halt"]
    assert sum(not overlapping_writes(trial(Random(seed)), core_of[seed]) for seed in ended) >= 8


def test_the_hot_loop_notes_what_the_definition_notes() -> None:
    """An undefined value that is only passed on, by a copy and by a choice, when its bundle has long been hot."""
    kernel = assemble("passed.vliw", text=(
        "kernel passed\ncore pair7\nstart:\n@0 idle\nloop:\n@0 lw g2, [g10 then +4]\n@4 mv g3, g2\n"
        "   select g4, g5, g2, g2\n@8 count g16, loop\n@12 idle\nfinish:\n@0 halt\n"
    ))  # fmt: skip
    machine, names = Machine(kernel.program), kernel.core.register_numbers
    notes = []
    for advance in (machine.advance, lambda state: [machine.step(state) for _ in iter(lambda: state.finished, True)]):
        given = {names["g10"]: 0, names["g5"]: 0, names["g16"]: 30}
        state = machine.start(given, [(0, bytes(100))], [Region("x", 0, 200)])
        advance(state)
        notes.append({(site.name, site.bundle, site.instruction): beat for site, beat in state.notes.items()})
    assert notes[0] == notes[1]
    assert [name for name, _, _ in notes[0]] == ["undefined-read"] * 3
