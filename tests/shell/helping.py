"""Sessions and complete states for the tests of the shell."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from vliwsim.description.values import parts
from vliwsim.faces.shell.commands import Shell
from vliwsim.faces.shell.lines import Line, plain
from vliwsim.kernel.binding import bind
from vliwsim.kernel.cases import case_with
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.reference import call_reference, load_reference
from vliwsim.machine.memory import Region
from vliwsim.machine.state import State
from vliwsim.machine.stepper import FOREVER, Machine
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import Kernel
from vliwsim.shell.session import Session


def session(
    source: str,
    given: Mapping[str, Any] | None = None,
    *,
    case: str | None = None,
    core: str | None = None,
    changes: tuple[str, ...] = (),
    interrupt_at: int | None = None,
) -> Session:
    """A session on a shipped kernel, or a file, with its reference."""
    kernel = assemble_source(source, core, changes)
    return bound(kernel, given or {}, case=case, interrupt_at=interrupt_at)


def bound(
    kernel: Kernel, given: Mapping[str, Any], *, case: str | None = None, interrupt_at: int | None = None
) -> Session:
    """A session on an assembled kernel."""
    reference = load_reference(kernel)
    setup = bind(kernel, case_with(kernel, reference, case, given).inputs)
    return Session(setup, call_reference(reference, setup) if reference else None, interrupt_at=interrupt_at)


def from_text(text: str, given: Mapping[str, Any] | None = None, core: str | None = None) -> Session:
    """A session on a source text, without a reference."""
    from vliwsim.description.corefile import load_core

    kernel = assemble("tried.vliw", load_core(core) if core else None, text=text)
    return Session(bind(kernel, given or {}))


def answers(one: Session, *lines: str) -> str:
    """What the shell writes for these commands."""
    out: list[str] = []

    def write(rows: list[Line]) -> None:
        out.extend(plain(row) for row in rows)

    shell = Shell(one, write)
    for line in lines:
        shell.answer(line)
    return "\n".join(out)


def complete(machine: Machine, state: State) -> dict[str, object]:
    """Everything of a state that its future depends on, and every count of its past, as plain data.

    Left out is what a fast engine need not keep: which registers landed in the beat before, landing beats that no rule
    of the core asks for, until when a unit was taken that is free again, when a branch left that has long landed.
    """
    saved = dict(state.save())
    del saved["landed"]
    if not machine.core.interlocked and machine.core.issue.early == "old":
        del saved["ready"]
    else:
        saved["ready"] = [max(r, state.beat) for r in state.ready]
    saved["busy_until"] = [max(b, state.beat) for b in state.busy_until]
    saved["last_branch"] = max(state.last_branch, state.issue - machine.core.branch.latency)
    saved["operands"] = [parts(v) for v in state.operands]
    saved["flight"] = {
        beat: sorted((n, parts(v)) for numbers, values in batches for n, v in zip(numbers, values, strict=True))
        for beat, batches in state.flight.items()
    }
    return saved


def fresh_states(one: Session, most: int = 100_000) -> list[dict[str, object]]:
    """The complete state at every cycle of a run that only ever goes ahead, a beat at a time, by definition."""
    machine = Machine(one.kernel.program, careful=True)
    setup = one.setup
    regions = [Region(a.name, a.start, a.bytes, a.over) for a in setup.areas]
    state = machine.start(dict(setup.registers), setup.memory, regions)
    state.interrupt_at = one.recorded.first["interrupt_at"]
    states = [complete(machine, state)]
    while not state.finished and state.cycle < most:
        machine.advance(state, state.cycle + 1)
        if state.halt_beat is not None and not state.frozen and state.in_flight == state.beat:
            machine.advance(state, FOREVER)
        states.append(complete(machine, state))
    return states


def write(folder: Path, name: str, text: str) -> Path:
    """A file with this text."""
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path
