"""The package's machine behind the test model's interface: plain data in, plain outcome out.

The conversion knows operand names and nothing else of what an operation does; what it reads and writes is the package's
own business.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from contextlib import suppress
from functools import lru_cache, partial

from vliwsim.description import core as description
from vliwsim.description.core import Core
from vliwsim.description.operations import OperationSet, Role
from vliwsim.description.tables import load_operations
from vliwsim.description.values import Undefined, parts, value_of
from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.memory import DEFINED, UNDEFINED, Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine
from vliwsim.native.engine import Native
from vliwsim.program.code import Address, Bundle, Guard, Immediate, Instruction, Mode, Program, Register

from .plain import (
    CAUSES,
    Addr,
    Hazard,
    Imm,
    Outcome,
    Passed,
    PlainBundle,
    PlainCore,
    PlainOperation,
    PlainRegion,
    Reg,
    Value,
)

FAMILIES = ("integer", "fixed", "packed", "bits", "memory", "control")


@lru_cache(maxsize=1)
def operations() -> OperationSet:
    return load_operations(FAMILIES)


def core_of(plain: PlainCore) -> Core:
    """The package's core with these parameters."""
    clusters = plain.clusters
    names = [f"{c.name}{k}" for c in clusters for k in range(c.registers)]
    return Core(
        name="plain",
        summary="",
        clusters=tuple(description.Cluster(c.name, c.registers, c.read_ports, c.write_ports) for c in clusters),
        slots=tuple(
            description.Slot(f"{clusters[s.cluster].name}.u{k}", s.classes, s.crossing, s.busy)
            for k, s in enumerate(plain.slots)
        ),
        latency=description.Latency(plain.latency_otherwise, plain.latency_classes, plain.latency_operations),
        links=tuple(
            description.Link(clusters[k.source].name, clusters[k.reader].name, k.operands, k.shared, k.fresh)
            for k in plain.links
        ),
        guards=tuple(names[g] for g in sorted(plain.guards)),
        zero_registers=tuple(names[z] for z in sorted(plain.zero_registers)),
        branch=description.Branch(plain.branch_latency, plain.branch_overlap, plain.taken_penalty),
        issue=description.Issue("interlocked" if plain.interlocked else "exposed", plain.early),
        memory=description.Memory(
            plain.memory_size, plain.endianness, plain.banks, plain.bank_width, plain.broadcast, plain.conflict,
            plain.misaligned,
            tuple(description.WaitRegion(f"w{k}", w.start, w.bytes, w.cycles) for k, w in enumerate(plain.waits)),
        ),
        words=description.Words(straddle_freeze=plain.straddle_freeze),
        interrupt=description.Interrupt(plain.service),
        operations=FAMILIES,
    )  # fmt: skip


def instruction_of(plain: PlainOperation) -> Instruction:
    operation = operations().by_name[plain.name]
    assert operation.operation_class == plain.cls, (plain.name, plain.cls, operation.operation_class)
    places = []
    for operand in operation.operands:
        key = {Role.ADDRESS: "at", Role.TARGET: "to"}.get(operand.role, operand.name)
        places.append(place_of(plain.operands[key]))
    guard = Guard(plain.guard.register, plain.guard.negated) if plain.guard else None
    return Instruction(operation, plain.slot, tuple(places), guard, tuple(map(Immediate, sorted(plain.targets))))


def place_of(plain: Reg | Imm | Addr) -> Register | Immediate | Address:
    if isinstance(plain, Reg):
        return Register(plain.number, plain.half)
    if isinstance(plain, Imm):
        return Immediate(plain.bits)
    step = place_of(plain.step)
    assert not isinstance(step, Address)
    return Address(plain.base, Mode(plain.mode), step, plain.ring)


def program_of(core: Core, bundles: Iterable[PlainBundle]) -> Program:
    made = []
    for bundle in bundles:
        instructions = sorted((instruction_of(o) for o in bundle.operations), key=lambda i: i.slot)
        made.append(
            Bundle(bundle.address, bundle.position, tuple(instructions), bundle.beats, straddles=bundle.straddles)
        )
    return Program(core, tuple(made), 0)


def run(
    core: PlainCore,
    program: Iterable[PlainBundle],
    registers: Mapping[int, Value | int] | None = None,
    regions: Iterable[PlainRegion] = (),
    *,
    interrupt_at: int | None = None,
    limit: int = 100_000,
    log: bool = False,
    careful: bool = False,
    snapshots: bool = False,
    native: bool = False,
    following: bool = False,
) -> Outcome:
    """As the model's ``run``. ``careful``: by definition only. ``snapshots``: save, spoil and restore every cycle.

    ``native``: with the fast engine, which translates from the first cycle on and again wherever it is left alone;
    ``following``: undefined bytes too.
    """
    machine = machine_of(core, program, careful)
    advance = machine.advance
    if native:
        advance = Native(machine, patience=3, effort=0, following=following).advance
    passed: list[Passed] = []
    if log or snapshots:
        advance = partial(by_cycles, machine, passed, snapshots)
    outcome, _ = finish(machine, advance, registers or {}, tuple(regions), interrupt_at, limit, passed if log else None)
    return outcome


def machine_of(core: PlainCore, program: Iterable[PlainBundle], careful: bool = False) -> Machine:
    return Machine(program_of(core_of(core), program), careful=careful)


def finish(
    machine: Machine,
    advance: Callable[[State, int], None],
    registers: Mapping[int, Value | int],
    regions: tuple[PlainRegion, ...],
    interrupt_at: int | None,
    limit: int,
    passed: list[Passed] | None = None,
) -> tuple[Outcome, State]:
    """A run from these data on by ``advance(state, until)``, and the state it ended in. ``passed``: the log."""
    state = start(machine, registers, regions)
    state.interrupt_at = interrupt_at
    hazard = None
    try:
        advance(state, limit)
        if state.halt_beat is not None:  # the model's limit does not cut a drain short
            machine.advance(state)
    except HazardMet as met:
        found = met.hazard
        hazard = Hazard(found.name, found.beat, found.cycle, found.bundle)
        before = dict(state.stalls)
        machine._thaw(state, 1 << 62)
        for cause in CAUSES if passed is not None else ():
            passed += [Passed(cause, state.at, values_of(machine, state))] * (state.stalls[cause] - before[cause])
    return outcome_of(machine, state, regions, hazard, passed or []), state


def start(machine: Machine, registers: Mapping[int, Value | int], regions: tuple[PlainRegion, ...]) -> State:
    given = {n: v if isinstance(v, int) else value_of(v.bits, v.unknown) for n, v in registers.items()}
    state = machine.start(given, (), [Region(f"r{k}", r.start, r.size, r.over) for k, r in enumerate(regions)])
    for region in regions:
        for k, byte in enumerate(region.content):
            if byte is not None:
                state.memory.define(region.start + k, bytes([byte]))
    return state


def by_cycles(machine: Machine, passed: list[Passed], snapshots: bool, state: State, limit: int) -> None:
    """Run a cycle at a time, logging each."""
    issued = 0  # where the bundle stands that a bank conflict, a wait state or a fresh operand freezes
    while not state.finished and state.cycle < limit:
        place, counts, stalls, drain = state.at, sum(state.counts), dict(state.stalls), state.drain
        if snapshots:
            saved = state.save()
            with suppress(HazardMet):
                machine.advance(state, state.cycle + 3)
            state.restore(saved)
        try:
            machine.advance(state, state.cycle + 1)
        finally:
            if sum(state.counts) > counts:
                passed.append(Passed("bundle", place, values_of(machine, state)))
                issued = place
            for cause in CAUSES:
                if state.stalls[cause] > stalls[cause]:
                    behind = cause in ("bank", "wait") or (cause == "fresh" and not machine.core.interlocked)
                    passed.append(Passed(cause, issued if behind else place, values_of(machine, state)))
            if state.drain > drain:
                passed.append(Passed("drain", place, values_of(machine, state)))


def values_of(machine: Machine, state: State) -> tuple[Value, ...]:
    return tuple(Value(*parts(v)) for v in state.registers(machine.core))


def outcome_of(
    machine: Machine, state: State, regions: tuple[PlainRegion, ...], hazard: Hazard | None, passed: list[Passed]
) -> Outcome:
    memory: dict[int, int | None] = {}
    for region in regions:
        for address in range(region.start, region.start + region.size):
            status = state.memory.status[address]
            assert status in (DEFINED, UNDEFINED)
            memory[address] = state.memory.bytes[address] if status == DEFINED else None
    frozen = sum(int(cycles) for _, cycles in state.frozen)
    stalls = {cause: state.stalls[cause] for cause in CAUSES}
    for cause, cycles in state.frozen:  # the model does not stop inside a freeze
        stalls[str(cause)] += int(cycles)
    bundles = sum(state.counts)
    cycles = bundles + sum(stalls.values()) + state.drain
    assert hazard is not None or cycles == state.cycle + frozen
    registers = values_of(machine, state)
    assert not any(isinstance(v, Undefined) for v in registers)
    early = [(beat, site.bundle, site.register) for site, beat in state.notes.items() if site.name == "early-read"]
    warnings = tuple(sorted((beat, bundle, register) for beat, bundle, register in early if register is not None))
    stop = "hazard" if hazard else "halt" if state.finished else "limit"
    return Outcome(
        stop,
        cycles,
        bundles,
        stalls,
        state.drain,
        registers,
        memory,
        hazard,
        warnings,
        tuple(passed),
        tuple(state.counts),
    )
