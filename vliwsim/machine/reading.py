"""Step 3, read: the two rounds of judgement before a bundle executes."""

from __future__ import annotations

from vliwsim.description.values import Undefined
from vliwsim.machine.bundle_rules import BUSY, ROUND_ONE
from vliwsim.machine.hazards import Cause
from vliwsim.machine.issued import Issued, stop
from vliwsim.machine.landing import in_flight_causes, pending
from vliwsim.machine.operands import undefined_used
from vliwsim.machine.prepared import Preparation, Prepared
from vliwsim.machine.state import NoteSite, State


def read(ready: Preparation, state: State, prepared: Prepared) -> Issued:
    """Step 3: judge both rounds; the guards of the bundle."""
    judge_round_one(ready, state, prepared)
    return judge_round_two(ready, state, prepared, {} if ready.core.interlocked else pending(ready, state))


def judge_round_one(ready: Preparation, state: State, prepared: Prepared) -> None:
    """The static complaint of the bundle, or a busy unit if that comes first."""
    static = prepared.static
    for k, part in enumerate(prepared.parts):
        if static and (static[0], static[1]) < (k, BUSY):
            break
        slot = part.instruction.slot
        if state.busy_until[slot] > state.beat:
            name = ready.core.slots[slot].name
            raise stop(
                "busy",
                state,
                prepared.index,
                f"the unit of {name} is taken until beat {state.busy_until[slot] - 1}",
                [Cause(prepared.index, k, state.beat)],
            )
    if static:
        instruction, rank, found = static
        raise stop(ROUND_ONE[rank], state, prepared.index, found, [Cause(prepared.index, instruction, state.beat)])


def judge_round_two(
    ready: Preparation, state: State, prepared: Prepared, out: dict[int, list[tuple[int, int]]]
) -> Issued:
    """Freshness, early reads and undefined guards, operation by operation."""
    core, names = ready.core, ready.core.register_names
    on: list[bool] = []
    fresh_stall = False
    for k, part in enumerate(prepared.parts):
        here = Cause(prepared.index, k, state.beat)
        for instruction, register, link in prepared.fresh:
            if instruction != k or register not in state.landed:
                continue
            if link.fresh == "reject":
                found = f"{names[register]} landed in this beat and crosses from {link.source} to {link.reader}"
                raise stop("fresh", state, prepared.index, found, [here])
            fresh_stall = True
        guard = part.instruction.guard
        if guard:
            _judge_early(ready, state, prepared, k, guard.register, out, "guard")
            value = state.operands[guard.register]
            if isinstance(value, Undefined):
                raise undefined_used(ready, state, prepared, k, f"guard {names[guard.register]}")
            on.append((value == 0) == guard.negated)
        else:
            on.append(True)
        if on[k]:
            for access in part.effects.reads:
                _judge_early(ready, state, prepared, k, access.register, out, access.operand)
    issued = Issued(tuple(on))
    if fresh_stall and not core.interlocked:
        issued.freezes.append(("fresh", 1))
    return issued


def _judge_early(
    ready: Preparation,
    state: State,
    prepared: Prepared,
    instruction: int,
    register: int,
    out: dict[int, list[tuple[int, int]]],
    what: str,
) -> None:
    early = ready.core.issue.early
    if early == "old" or register not in out:
        return
    if early == "warn":
        state.notes.setdefault(NoteSite("early-read", prepared.index, instruction, register), state.beat)
        return
    flights = out[register]
    beats = min(beat for _, beat in flights) - state.beat
    name = ready.core.register_names[register]
    found = f"{what} {name} is read {beats} {'beat' if beats == 1 else 'beats'} before a result for it lands"
    causes = [Cause(prepared.index, instruction, state.beat), *in_flight_causes(ready, flights)]
    raise stop("early-read", state, prepared.index, found, causes)
