"""Loops whose memory is judged ahead, against the stepper: whatever they walk over, and however they end."""

from __future__ import annotations

from random import Random

import pytest

from vliwsim.machine.hazards import HazardMet
from vliwsim.machine.memory import DEFINED, UNDEFINED, Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine
from vliwsim.native.contexts import Context, Contexts
from vliwsim.native.engine import Native
from vliwsim.native.region import Region as Contextual
from vliwsim.program.assembler import assemble

BYTES = 512
SIZES = {"lw": 4, "sw": 4, "lh": 2, "sh": 2, "lbu": 1, "sb": 1, "ld": 8, "sd": 8}
ROUNDS = 150
LONG_ROUNDS = 4000


def source(r: Random, core: str) -> str:
    """A loop of loads and stores through addresses that move by constants, some of them under a guard."""
    lines = []
    for register, result, operations in (
        ("g10", "g2", ("lw", "lh", "lbu", "ld")), ("g11", "g3", ("lw", "lbu")), ("g12", "g5", ("sw", "sh", "sb")),
    ):  # fmt: skip
        if r.random() < 0.3:
            continue
        operation = r.choice(operations) if core != "float3" else operations[0]
        size = SIZES[operation]
        step = r.choice((1, 1, 1, 2, -1)) * size if r.random() < 0.9 else r.choice((1, 2, 6))
        address = r.choice((
            f"[{register} then {step:+}]", f"[{step:+} then {register}]", f"[{register} + {r.randrange(4) * size}]",
            f"[{register} then {abs(step):+} in ring {r.choice((2, 4, 16, 64, 256))}]", f"[{register} + g14]",
        ))  # fmt: skip
        guard = r.choice(("", "", " if g21", " if not g21"))
        lines.append(f"{operation} {'g16' if operation == 'ld' else result}, {address}{guard}")
    lines = lines or ["lw g2, [g10 then +4]"]
    stamps = r.sample(range(3), 3)
    body = [f"@{stamp} {one}" for stamp, one in zip(stamps, lines, strict=False)]
    others = r.sample(("add g6, g6, g2", "xor g21, g21, g7", "add g5, g5, g3"), 2)
    body += [f"@{stamp} {one}" for stamp, one in zip(stamps[1:], others, strict=True)]
    if core == "float3":
        body.append("@3 fadd.s g8, g8, g2")
    if r.random() < 0.3:
        body.append(f"@{stamps[0]} add g10, g10, 4")
    tail = r.randrange(3, 7)
    return "\n".join([
        "kernel walk", f"core {core}", "start:", "@0 idle", "loop:", *body, f"@{tail} count g20, loop",
        f"@{tail + 5} idle" if core != "lone4" else f"@{tail + 1} idle", "finish:", "@0 halt", "",
    ])  # fmt: skip


def starting(r: Random, machine: Machine) -> State:
    """A state in front of it: arrays that end, or are not defined, somewhere on the way."""
    numbers = machine.core.register_numbers
    at = {"g10": r.choice((0, 0, 64, 256)), "g11": r.choice((0, 512, 516)), "g12": r.choice((1024, 1024, 512))}
    if r.random() < 0.2:
        at["g10"] += r.choice((1, 2, 500))
    values = {"g20": r.choice((0, 3, 5, 17, 40, 90, 200)), "g21": r.randrange(2), "g7": r.randrange(2), "g14": 8}
    values |= {"g2": 0, "g3": 0, "g5": 1, "g6": 0, "g8": 0}
    given = {numbers[name]: value for name, value in (at | values).items()}
    regions = [Region("x", 0, BYTES + r.choice((0, 0, 512)), r.choice((0, 0, 24))), Region("z", 1024, BYTES)]
    state = machine.start(given, [(0, r.randbytes(BYTES))], regions)
    status = state.memory.status
    for place in range(1024, 1024 + BYTES):
        status[place] = DEFINED if r.random() < 0.999 else UNDEFINED
    for _ in range(r.choice((0, 0, 1, 3))):
        status[r.randrange(BYTES)] = r.choice((0, 1, UNDEFINED))
    return state


def end(machine: Machine, state: State, engine: Machine | Native) -> tuple[object, ...]:
    """All that the end of a run shows, wherever it is."""
    hazard = None
    try:
        engine.advance(state, 20_000)
    except HazardMet as met:
        hazard = met.hazard
    outcome = machine.outcome(state, "limit")
    return (repr(hazard), state.cycle, state.beat, state.issue, dict(outcome.stalls), outcome.counts, outcome.begun,
            [repr(v) for v in outcome.registers], bytes(state.memory.bytes), bytes(state.memory.status),
            sorted(map(repr, outcome.notes.items())))  # fmt: skip


def differing(seed: int, core: str) -> tuple[bool, str]:
    """Whether the program has a strip, and the program if machine code and stepper end differently."""
    r = Random(seed)
    text = source(r, core)
    kernel = assemble("walk.vliw", text=text, allow_illegal=True)
    machine, places = Machine(kernel.program), r.getstate()
    wanted = end(machine, starting(r, machine), machine)
    r.setstate(places)
    state = starting(r, machine)
    native = Native(machine, effort=0)
    native.begin([n for n in range(len(machine.core.register_names)) if isinstance(state.operands[n], int)])
    found = end(machine, state, native)
    return bool(native.regions[0].region.strips), "" if found == wanted else text


@pytest.mark.parametrize("core", ["pair7", "lone4", "float3"])
def test_strips_equal_the_stepper(core: str, long: bool) -> None:
    strips = 0
    for seed in range(LONG_ROUNDS if long else ROUNDS):
        strip, text = differing(seed, core)
        strips += strip
        assert not text, (seed, text)
    assert strips > 40


def test_an_access_longer_than_its_ring_is_judged() -> None:
    """It reaches behind the ring, where there may be no array."""
    kernel = assemble("walk.vliw", text=(
        "kernel walk\ncore pair7\nstart:\n@0 idle\nloop:\n@0 sw g2, [g10 then +4 in ring 2]\n@4 count g20, loop\n"
        "@9 idle\nfinish:\n@0 halt\n"
    ))  # fmt: skip
    machine, names = Machine(kernel.program), kernel.core.register_numbers
    ends = []
    for engine in (machine, Native(machine, effort=0)):
        given = {names["g10"]: 64, names["g20"]: 40, names["g2"]: 1}
        state = machine.start(given, [(0, bytes(512))], [Region("x", 0, 512)])
        state.memory.status[66] = 0
        ends.append(end(machine, state, engine))
    assert "out-of-array" in str(ends[0][0])
    assert ends[0] == ends[1]


def test_what_is_trusted() -> None:
    """Every access of this loop but the one through a loaded address is judged ahead."""
    kernel = assemble("walk.vliw", text=(
        "kernel walk\ncore pair7\nstart:\n@0 idle\nloop:\n@0 lw g2, [g10 then +4] ; lw h2, [h10 + 8]\n"
        "@1 lw h4, [h3 + 4]\n@2 sw g2, [g12 then -4 ]\n@3 lw h3, [h10 + 12]\n@8 count g20, loop\n@12 idle\n"
        "finish:\n@0 halt\n"
    ))  # fmt: skip
    region = Contextual(Contexts(Machine(kernel.program).ready), Context(0), 0)
    (strip,) = region.strips.values()
    names = kernel.core.register_names
    assert [(names[w.register], w.down, w.up, w.low, w.high, w.store) for w in strip.walks] == [
        ("g10", 0, 4, 0, 4, False), ("g12", -4, 0, 0, 4, True), ("h10", 0, 0, 8, 16, False),
    ]  # fmt: skip
