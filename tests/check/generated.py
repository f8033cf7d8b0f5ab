"""Generated programs under a check: many inputs to each, and what their runs show that a verdict must allow for."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from random import Random

from tests.differential.generator import CORNERS, Trial, trial
from tests.differential.plain import PlainRegion, Value
from tests.differential.real import core_of, program_of, values_of
from vliwsim.check.inputs import Inputs
from vliwsim.check.interrupts import SAFE
from vliwsim.check.judge import judge
from vliwsim.check.residues import Residue
from vliwsim.check.verdict import PROVED, Verdict
from vliwsim.description.values import value_of
from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.memory import Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine

INPUTS = 20
"""Inputs to each program."""
LIMIT = 120
"""Cycles of a run."""
CAP = 600


@dataclass
class Tally:
    """What came out, over many programs."""

    programs: int = 0
    undecided: int = 0
    runs: int = 0
    contexts: int = 0
    hazards: dict[str, int] = field(default_factory=dict)
    proved: dict[str, int] = field(default_factory=dict)
    violated: int = 0
    confirmed: int = 0
    behind: int = 0
    unmet: list[str] = field(default_factory=list)
    interrupted: int = 0
    missed: list[str] = field(default_factory=list)


def registers_of(made: Trial, r: Random, pointers: set[int], facts: dict[int, bool]) -> dict[int, Value]:
    """Other values in the same registers: what is undefined stays so, pointers stay, facts hold."""
    given = {}
    for number, value in made.registers.items():
        if value.unknown or number in pointers:
            given[number] = value
            continue
        bits = r.choice((0, 1, 2, r.randrange(6), r.choice(CORNERS), r.getrandbits(32)))
        if number in facts:
            bits = (bits or 1) if facts[number] else 0
        given[number] = Value(bits)
    return given


def defined_pieces(region: PlainRegion) -> list[tuple[int, int]]:
    """(address, length) of each defined stretch of a region."""
    found: list[tuple[int, int]] = []
    for k, byte in enumerate(region.content):
        if byte is not None:
            if found and sum(found[-1]) == region.start + k:
                found[-1] = found[-1][0], found[-1][1] + 1
            else:
                found.append((region.start + k, 1))
    return found


def started(machine: Machine, made: Trial, given: dict[int, Value], pieces: list[tuple[int, bytes]]) -> State:
    registers = {n: value_of(v.bits, v.unknown) for n, v in given.items()}
    regions = [Region(f"r{k}", region.start, region.size, region.over) for k, region in enumerate(made.regions)]
    return machine.start(registers, pieces, regions)


def examine(seed: int, tally: Tally) -> None:
    """One program: its verdict against the runs of 20 inputs; what contradicts goes to ``tally.missed``."""
    r = Random(seed)
    made = trial(r)
    program = program_of(core_of(made.core), made.program)
    pointers = {n for n, v in made.registers.items() if not v.unknown and v.bits % 8 == 0 and 0 < v.bits < 256}
    facts = {n: r.random() < 0.6 for n in made.registers if r.random() < 0.2 and n not in pointers}
    facts = {n: nonzero for n, nonzero in facts.items() if not made.registers[n].unknown}
    verdict = judge(
        program,
        Inputs(
            frozenset(n for n, v in made.registers.items() if not v.unknown),
            tuple(sorted(facts.items())),
            {n: Residue.of(None, made.registers[n].bits, r.choice((4, 8, 1 << 32))) for n in pointers},
        ),
        cap=CAP,
    )
    tally.programs += 1
    tally.undecided += not verdict.complete
    tally.contexts = max(tally.contexts, verdict.contexts)
    for judgement in verdict.judgements.values():
        if judgement.outcome == PROVED and (not judgement.because or judgement.because.startswith("no bundle")):
            tally.proved[judgement.rule] = tally.proved.get(judgement.rule, 0) + 1
    machine = Machine(program, careful=True)
    stretches = [piece for region in made.regions for piece in defined_pieces(region)]
    met: set[str] = set()
    clean = 0
    for k in range(INPUTS):
        given = registers_of(made, r, pointers, facts)
        if k == 0:
            given = {n: made.registers[n] if n not in facts else v for n, v in given.items()}
        pieces = [(a, r.randbytes(n) if r.random() < 0.7 else bytes(n)) for a, n in stretches]
        tally.runs += 1
        hazard = run(machine, started(machine, made, given, pieces), verdict, tally, seed)
        clean += hazard is None
        if hazard:
            met.add(hazard)
            tally.hazards[hazard] = tally.hazards.get(hazard, 0) + 1
            if verdict.outcome(hazard) == PROVED:
                tally.missed.append(f"seed {seed}: {hazard} met, proved absent")
        elif k < 3 and verdict.interrupts and verdict.complete:
            states = [started(machine, made, given, pieces) for _ in range(2)]
            interrupt(machine, states, verdict, tally, r, seed)
    for judgement in verdict.violated:
        tally.violated += 1
        tally.confirmed += judgement.rule in met
        tally.behind += judgement.rule not in met and not clean
        if judgement.rule not in met and clean:
            tally.unmet.append(f"seed {seed}: {judgement.rule}")


def run(machine: Machine, state: State, verdict: Verdict, tally: Tally, seed: int) -> str | None:
    """The hazard that a run meets, if any; early reads of a core that warns must be among the verdict's."""
    hazard = None
    try:
        machine.advance(state, LIMIT)
        if state.halt_beat is not None:
            machine.advance(state)
    except HazardMet as found:
        hazard = found.hazard.name
    early = {(read.site, read.register) for read in verdict.early}
    told = verdict.complete and not verdict.astray
    for note in state.notes:
        if told and note.name == "early-read" and ((note.bundle, note.instruction), note.register) not in early:
            tally.missed.append(f"seed {seed}: early read of {note} not told")
    return hazard


def interrupt(machine: Machine, states: list[State], verdict: Verdict, tally: Tally, r: Random, seed: int) -> None:
    """An interrupt that a safe bundle takes changes no register and no memory."""
    assert verdict.interrupts
    plain, state = states
    machine.advance(plain, LIMIT)
    if not plain.finished or plain.cycle < 2 or verdict.astray:
        return
    state.interrupt_at = r.randrange(plain.cycle)
    taken = None
    try:
        while not state.finished and state.cycle < 10 * LIMIT:
            waiting, at = state.interrupt_at is not None, state.at
            machine.advance(state, state.cycle + 1)
            if waiting and state.interrupt_at is None:
                taken = at
    except HazardMet:
        pass
    if taken is None or verdict.interrupts.bundles.get(taken) != SAFE:
        return
    tally.interrupted += 1
    same = state.finished and values_of(machine, state) == values_of(machine, plain)
    if not same or state.memory.save() != plain.memory.save():
        tally.missed.append(f"seed {seed}: interrupted at {taken}, which is called safe")


def examined(seeds: range) -> Tally:
    tally = Tally()
    for seed in seeds:
        examine(seed, tally)
    return tally


def lines(tally: Tally) -> Iterator[str]:
    yield f"{tally.programs} programs, {tally.runs} runs, {tally.undecided} undecided"
    yield f"{tally.contexts} contexts at most"
    yield f"hazards met: {dict(sorted(tally.hazards.items()))}"
    yield f"proved on a core that could break it: {dict(sorted(tally.proved.items()))}"
    yield f"violated {tally.violated}, of which {tally.confirmed} met on one of {INPUTS} inputs"
    yield f"of the rest {tally.behind} in programs that met another hazard on each, {len(tally.unmet)} not met at all"
    yield f"{tally.interrupted} interrupts taken by safe bundles"
