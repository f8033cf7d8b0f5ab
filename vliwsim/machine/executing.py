"""Step 4, execute: judge the bundle's accesses, and compute all it does."""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.description.operations import Kind
from vliwsim.description.values import Undefined, Value, parts, split
from vliwsim.machine.hazards import Cause
from vliwsim.machine.issued import Issued, stop
from vliwsim.machine.memory import Touch
from vliwsim.machine.operands import input_values, undefined_used
from vliwsim.machine.parts import Part
from vliwsim.machine.prepared import Preparation, Prepared
from vliwsim.machine.state import NoteSite, State


def execute(ready: Preparation, state: State, prepared: Prepared, issued: Issued) -> None:
    """Step 4: judge the bundle's accesses and compute everything it does, into ``issued``."""
    memory = ready.core.memory
    on = [(k, part) for k, part in enumerate(prepared.parts) if issued.on[k]]
    addresses: dict[int, int] = {}
    outputs: dict[int, tuple[Value, ...]] = {}
    for k, part in on:  # undefined-used
        judge_defined(ready, state, prepared, k, part)
        if part.reach:
            address = part.reach.address(state.operands[part.reach.base], state.operands[part.reach.step])
            assert isinstance(address, int)
            addresses[k] = address
    for k, part in on:
        if part.targets is not None:
            judge_target(state, prepared, k, part)
    for k, part in on:  # misaligned
        access = part.operation.access
        if access and memory.misaligned == "reject" and addresses[k] % access.bytes:
            found = f"{part.operation.name} of {access.bytes} bytes at address {addresses[k]:#x}"
            raise stop("misaligned", state, prepared.index, found, [Cause(prepared.index, k, state.beat)])
    for k, part in on:  # out-of-array
        access = part.operation.access
        if access and not (state.memory.writable if access.store else state.memory.readable)(
            addresses[k], access.bytes
        ):
            found = f"{part.operation.name} of {access.bytes} bytes at address {addresses[k]:#x}"
            raise stop("out-of-array", state, prepared.index, found, [Cause(prepared.index, k, state.beat)])
    judge_stores(state, prepared, on, addresses)
    for k, part in on:
        access = part.operation.access
        if access:
            issued.touches.append(Touch(addresses[k], access.bytes, access.store))
    conflict, waits = state.memory.charge(issued.touches)
    if conflict and memory.conflict == "reject":
        found = f"the busiest memory bank would need {conflict + 1} cycles"
        causes = [Cause(prepared.index, k, state.beat) for k, part in on if part.operation.access]
        raise stop("bank-conflict", state, prepared.index, found, causes)
    issued.freezes.extend((cause, cycles) for cause, cycles in (("bank", conflict), ("wait", waits)) if cycles)
    for k, part in on:
        access = part.operation.access
        loaded = state.memory.load(addresses[k], access.bytes) if access and not access.store else 0
        inputs = input_values(state, part, loaded)
        outputs[k] = part.operation.evaluate(inputs, part.halves)
        computed = any(isinstance(v, Undefined) for v in inputs) and any(isinstance(v, Undefined) for v in outputs[k])
        if computed and not (access and not access.store and state.memory.declared_over(addresses[k], access.bytes)):
            issued.notes.append(NoteSite("undefined-read", prepared.index, k))
        gather(ready, state, issued, k, part, addresses.get(k, 0), outputs[k])


def judge_defined(ready: Preparation, state: State, prepared: Prepared, k: int, part: Part) -> None:
    """``undefined-used`` at a ``count``, a branch's condition, a taken indirect target and an address."""
    names = ready.core.register_names
    reach = part.reach
    if reach and isinstance(reach.address(state.operands[reach.base], state.operands[reach.step]), Undefined):
        unknown = reach.base if isinstance(state.operands[reach.base], Undefined) else reach.step
        raise undefined_used(ready, state, prepared, k, f"{names[unknown]} of an address")
    if not part.branches:
        return
    taken = part.operation.evaluate(input_values(state, part), part.halves)[-1]
    if isinstance(taken, Undefined):
        what = "the count register" if part.operation.count else "the condition"
        raise undefined_used(ready, state, prepared, k, f"{what} of {part.operation.name}")
    if taken and part.target_register is not None and isinstance(state.operands[part.target_register], Undefined):
        raise undefined_used(ready, state, prepared, k, f"target {names[part.target_register]}")


def judge_target(state: State, prepared: Prepared, k: int, part: Part) -> None:
    """``indirect-target``: a taken branch to a register goes where its instruction does not name."""
    if not part.operation.evaluate(input_values(state, part), part.halves)[-1]:
        return
    assert part.target_register is not None
    assert part.targets is not None
    address, _ = parts(state.operands[part.target_register])
    if address not in part.targets:
        found = f"{part.operation.name} goes to byte {address:#x}, which it does not name"
        raise stop("indirect-target", state, prepared.index, found, [Cause(prepared.index, k, state.beat)])


def judge_stores(state: State, prepared: Prepared, on: Sequence[tuple[int, Part]], addresses: dict[int, int]) -> None:
    """``store-twice``: two stores to one byte in one beat."""
    owner: dict[int, int] = {}
    for k, part in on:
        access = part.operation.access
        if not access or not access.store:
            continue
        for byte in range(addresses[k], addresses[k] + access.bytes):
            other = owner.setdefault(byte, k)
            if other != k:
                causes = [Cause(prepared.index, j, state.beat) for j in (k, other)]
                raise stop("store-twice", state, prepared.index, f"two stores to the byte at {byte:#x}", causes)


def gather(
    ready: Preparation, state: State, issued: Issued, k: int, part: Part, address: int, outputs: tuple[Value, ...]
) -> None:
    """Put what one guard-on operation does into ``issued``."""
    operation = part.operation
    if operation.kind is Kind.HALT:
        issued.halts = True
    taken = bool(outputs[-1]) if part.branches else False
    if taken:
        issued.taken.append((k, branch_target(ready, state, part)))
    for numbers, value in zip(part.results, outputs, strict=False):
        if operation.count and not taken:
            continue
        values = split(value) if len(numbers) == 2 else (value,)
        issued.results.append((ready.sites[numbers[0]].write.latency, (numbers, values)))
    if operation.access and operation.access.store:
        issued.stores.append((address, operation.access.bytes, outputs[-1]))
    reach = part.reach
    if reach and reach.update is not None:
        base, step = state.operands[reach.base], state.operands[reach.step]
        latency = ready.sites[reach.update].write.latency
        issued.results.append((latency, ((reach.update,), (reach.updated(base, step),))))


def branch_target(ready: Preparation, state: State, part: Part) -> int | None:
    """Bundle index a taken branch goes to; None where no bundle begins."""
    if part.target_register is None:
        return part.target
    address, unknown = parts(state.operands[part.target_register])
    assert not unknown
    return ready.program.index_at.get(address)


def commit(ready: Preparation, state: State, prepared: Prepared, issued: Issued) -> None:
    """Make the bundle count: stores change memory, results take off, units get busy, freezes are due."""
    for address, size, value in issued.stores:
        state.memory.store(address, size, value)
    for latency, batch in issued.results:
        state.flight.setdefault(state.beat + latency, []).append(batch)
        for n in batch[0]:
            register = ready.sites[n].write.register
            state.ready[register] = max(state.ready[register], state.beat + latency)
    for part in prepared.parts:
        slot = part.instruction.slot
        state.busy_until[slot] = max(state.busy_until[slot], state.beat + part.effects.busy)
    for site in issued.notes:
        state.notes.setdefault(site, state.beat)
    state.counts[prepared.index] += 1
    state.begun[prepared.index] += state.within == 0
    state.frozen.extend([cause, cycles] for cause, cycles in issued.freezes)
    state.waited_fresh = False
