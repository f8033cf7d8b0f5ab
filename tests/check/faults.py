"""Planted faults: a kernel as a sheet of stamped operations, every small change of it, and who notices.

A change is judged as a user would meet it: first the assembler, then the check, then runs against the reference. What
passes all of that is run on more inputs, against the kernel without the change.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from random import Random
from typing import Any

import numpy as np

from vliwsim.check.judge import check_kernel
from vliwsim.description.core import Core
from vliwsim.kernel.binding import bind
from vliwsim.kernel.cases import Case, cases_of
from vliwsim.kernel.engine import simulate
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.outputs import Output
from vliwsim.kernel.reference import Reference, call_reference, load_reference
from vliwsim.kernel.runner import KernelRun, judged
from vliwsim.machine.stepper import Machine
from vliwsim.problems import ReferenceFailure, SourceError, VliwsimError
from vliwsim.program.assembler import assemble
from vliwsim.program.code import Address, Immediate, Instruction, Place, Register
from vliwsim.program.disassembly import text_of
from vliwsim.program.kernel import ItemTag, Kernel

ASSEMBLER, CHECK, RUN, EQUAL, ESCAPED = "assembler", "check", "run", "equivalent", "escaped"
LIMIT = 20_000
"""Cycles of a run; a planted fault may loop for ever."""


@dataclass(frozen=True)
class Line:
    """One operation of a sheet: section, beat, and what it is."""

    section: str
    beat: int
    instruction: Instruction
    item: ItemTag | None
    pin: str = ""


@dataclass(frozen=True)
class Fault:
    """A change: what ``kind`` of, where, and the source text it makes."""

    kind: str
    where: str
    text: str


@dataclass
class Sheet:
    """A kernel taken apart."""

    kernel: Kernel
    sections: list[tuple[str, int]] = field(default_factory=list)
    lines: list[Line] = field(default_factory=list)

    @classmethod
    def of(cls, kernel: Kernel) -> Sheet:
        sheet = cls(kernel, [(s.label, s.beats) for s in kernel.map.sections])
        for index, bundle in enumerate(kernel.program.bundles):
            label, beat = kernel.map.bundle_at[index]
            for k, instruction in enumerate(bundle.instructions):
                item = kernel.map.items[index][k] if kernel.map.items else None
                sheet.lines.append(Line(label, beat, instruction, item))
        return sheet

    @cached_property
    def header(self) -> str:
        """The lines above the first label, but for names of registers, which the sheet does not use."""
        first = self.kernel.map.sections[0].place.line
        kept = [line for line in self.kernel.text.splitlines()[: first - 1] if not line.startswith("name ")]
        return "\n".join(kept)

    def text(self, lines: list[Line], beats: Mapping[str, int] | None = None) -> str:
        """A source with these lines; ``beats``: lengths of sections that are not the kernel's."""
        out = [self.header]
        for label, length in self.sections:
            out.append(f"{label}:")
            mine = [line for line in lines if line.section == label]
            out += [self.line(line) for line in mine]
            last = (beats or {}).get(label, length) - 1
            if last > max((line.beat for line in mine), default=-1):
                out.append(f"@{last} idle")
        return "\n".join(out) + "\n"

    def line(self, line: Line) -> str:
        core, program = self.kernel.core, self.kernel.program
        text = f"@{line.beat} {text_of(core, line.instruction, program.labels)}"
        if line.pin:
            text += f" on {line.pin}"
        if line.item:
            text += f" item {line.item.age}"
            text += "".join(f" with {core.register_names[r]} of {age}" for r, age in line.item.others)
        return text

    def faults(self) -> Iterator[Fault]:
        """Every small change: stamps, waits, slots, registers."""
        yield from self.stamps()
        yield from self.waits()
        yield from self.slots()
        yield from self.registers()

    def changed(self, kind: str, k: int, line: Line) -> Fault:
        before, after = self.line(self.lines[k]), self.line(line)
        lines = [*self.lines[:k], line, *self.lines[k + 1 :]]
        length = {line.section: max(line.beat + 1, dict(self.sections)[line.section])}
        return Fault(kind, f"{line.section}: {before} → {after}", self.text(lines, length))

    def stamps(self) -> Iterator[Fault]:
        for k, line in enumerate(self.lines):
            for step in (-1, 1):
                if line.beat + step >= 0:
                    yield self.changed("stamp", k, replace(line, beat=line.beat + step))

    def waits(self) -> Iterator[Fault]:
        """Each idle beat left out, with all behind it a beat earlier; each section's last idle beats too."""
        for label, length in self.sections:
            used = {line.beat for line in self.lines if line.section == label}
            for gap in sorted(set(range(length)) - used):
                moved = [
                    replace(line, beat=line.beat - 1) if line.section == label and line.beat > gap else line
                    for line in self.lines
                ]
                if length > 1:
                    yield Fault("wait", f"{label}@{gap} left out", self.text(moved, {label: length - 1}))

    def slots(self) -> Iterator[Fault]:
        """Each operation pinned to each other slot."""
        for k, line in enumerate(self.lines):
            for index, slot in enumerate(self.kernel.core.slots):
                if index != line.instruction.slot:
                    yield self.changed("slot", k, replace(line, pin=slot.name))

    def registers(self) -> Iterator[Fault]:
        for k, line in enumerate(self.lines):
            for instruction in neighbours(self.kernel.core, line.instruction):
                yield self.changed("register", k, replace(line, instruction=instruction))


def neighbours(core: Core, instruction: Instruction) -> Iterator[Instruction]:
    """The instruction with one of its registers, guard included, a number up or down in its cluster (a pair two)."""

    def moved(register: int, step: int) -> int | None:
        other = register + step
        fits = 0 <= other < len(core.register_names)
        return other if fits and core.register_clusters[other] == core.register_clusters[register] else None

    def with_place(k: int, place: Place) -> Instruction:
        places = (*instruction.places[:k], place, *instruction.places[k + 1 :])
        return instruction._replace(places=places)

    for step in (-1, 1):
        for k, (operand, place) in enumerate(zip(instruction.operation.operands, instruction.places, strict=True)):
            if isinstance(place, Register):
                other = moved(place.number, 2 * step if operand.pair else step)
                if other is not None:
                    yield with_place(k, place._replace(number=other))
            elif isinstance(place, Address):
                if (base := moved(place.base, step)) is not None:
                    yield with_place(k, place._replace(base=base))
                if isinstance(place.step, Register) and (other := moved(place.step.number, step)) is not None:
                    yield with_place(k, place._replace(step=place.step._replace(number=other)))
            else:
                assert isinstance(place, Immediate)
        if instruction.guard and (other := moved(instruction.guard.register, step)) is not None:
            yield instruction._replace(guard=instruction.guard._replace(register=other))


class Court:
    """Judges the faults of one kernel."""

    def __init__(self, path: str, core: str | None = None) -> None:
        self.kernel = assemble_source(path, core)
        self.sheet = Sheet.of(self.kernel)
        reference = load_reference(self.kernel)
        assert reference is not None
        self.reference: Reference = reference
        every = list(cases_of(self.kernel, self.reference))
        self.cases = varied(every)
        """Small cases of many sizes: they find most of what runs find."""
        rest = [case for case in every if case.name not in {c.name for c in self.cases}]
        self.order = [*self.cases, *rest]
        """All cases, those in front that found most for their size."""
        self.finds: Counter[str] = Counter()
        self.more = list(self._more())
        self.expected: dict[str, Mapping[str, Output]] = {}
        """What the reference says, by case."""

    def _more(self) -> Iterator[Case]:
        """Further inputs: the cases' own, shuffled, and noise of their types."""
        r = np.random.default_rng(7)
        for case in self.cases:
            inputs: dict[str, Any] = {}
            for name, value in case.inputs.items():
                if isinstance(value, np.ndarray) and value.ndim == 1 and value.dtype.kind in "iu":
                    info = np.iinfo(value.dtype)
                    inputs[name] = r.integers(info.min, info.max, value.shape, value.dtype, endpoint=True)
                else:
                    inputs[name] = value
            yield Case(f"more of {case.name}", inputs)

    def run(self, machine: Machine, kernel: Kernel, case: Case) -> KernelRun:
        """One run on the stepper; ``machine``: of the kernel's program, the same for all its cases."""
        setup = bind(kernel, case.inputs)
        expected = self.expected.get(case.name)
        if expected is None:
            expected = self.expected[case.name] = call_reference(self.reference, setup)
        simulation = simulate(setup, limit=LIMIT, engine="step", machine=machine)
        return judged(setup, simulation, case=case.name, expected=expected, limit=LIMIT)

    def assembled(self, text: str) -> Kernel | None:
        try:
            return assemble(self.kernel.path, self.kernel.core, text=text)
        except SourceError:
            return None

    def verdict(self, fault: Fault) -> str:
        """Who notices the fault."""
        kernel = self.assembled(fault.text)
        if kernel is None:
            return ASSEMBLER
        if check_kernel(kernel, interrupts=False).violated:
            return CHECK
        machine = Machine(kernel.program)
        for case in self.order:
            if not self.passes(machine, kernel, case):
                self.finds[case.name] += 1
                self.order.sort(key=lambda case: (size(case) + 100) / (self.finds[case.name] + 0.1))
                return RUN
        unchanged = Machine(self.kernel.program)
        for case in self.more:
            if not self.passes(machine, kernel, case) and self.passes(unchanged, self.kernel, case):
                return ESCAPED
        return EQUAL

    def passes(self, machine: Machine, kernel: Kernel, case: Case) -> bool:
        try:
            return self.run(machine, kernel, case).ok
        except ReferenceFailure:
            raise
        except VliwsimError:
            return False

    def false_alarm(self, fault: Fault) -> str | None:
        """What no run of a case meets though the check calls it violated; "" if one does, None if nothing is called so.

        Wrong items are none of the machine's rules; a run that they spoil is wrong.
        """
        kernel = self.assembled(fault.text)
        if kernel is None:
            return None
        verdict = check_kernel(kernel, interrupts=False)
        rules = {judgement.rule for judgement in verdict.violated} - {"wrong-item"}
        if not rules:
            return None
        met: set[str] = set()
        for names in self.met(kernel):
            met |= names
            if rules & names:
                return ""
        return f"{self.kernel.name}: {fault.where}: {sorted(rules)}, met {sorted(met)}"

    def met(self, kernel: Kernel) -> Iterator[set[str]]:
        """Names of all that a run of each case complains of, however it ends."""
        machine = Machine(kernel.program)
        for case in self.order:
            run = self.run(machine, kernel, case)
            found = {p.name for p in run.diagnostics if p.kind == "illegal"}
            if "undefined-output" in found:
                found.add("undefined-used")
            yield found


def varied(cases: list[Case]) -> list[Case]:
    """At most 14 small cases of as many sizes as there are, smallest first."""
    by_size: dict[int, list[Case]] = {}
    for case in cases:
        if size(case) <= 1200:
            by_size.setdefault(size(case), []).append(case)
    turns = max(map(len, by_size.values()))
    chosen = [group[turn] for turn in range(turns) for _, group in sorted(by_size.items()) if turn < len(group)]
    return sorted(chosen[:14], key=size)


def size(case: Case) -> int:
    return sum(np.size(value) for value in case.inputs.values())


def sample(faults: list[Fault], count: int, seed: int = 1) -> list[Fault]:
    """Some of the faults, the same every time, each kind in proportion."""
    return faults if len(faults) <= count else Random(seed).sample(faults, count)


def table(rows: Mapping[str, Counter[tuple[str, str]]]) -> list[str]:
    """Lines: a kernel and kind of fault a row, who noticed a column."""
    columns = (ASSEMBLER, CHECK, RUN, EQUAL, ESCAPED)
    lines = [f"{'':24}" + "".join(f"{name:>12}" for name in columns)]
    for kernel, counts in rows.items():
        for kind in ("stamp", "wait", "slot", "register"):
            if any(counts[kind, column] for column in columns):
                lines.append(f"{kernel:14} {kind:9}" + "".join(f"{counts[kind, c]:>12}" for c in columns))
    return lines
