"""Headroom and coverage of a set of cases: how far values reach, and what never happened."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

import attrs
import numpy as np

from vliwsim.description.language.floats import to_float
from vliwsim.description.language.types import ValueType, type_named
from vliwsim.description.operations import Kind
from vliwsim.description.values import Value
from vliwsim.kernel.cases import Case
from vliwsim.kernel.diagnose import line_of
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.runner import KernelRun
from vliwsim.machine.operands import input_values
from vliwsim.machine.parts import Part
from vliwsim.problems import VliwsimError
from vliwsim.program.kernel import Kernel
from vliwsim.regression.observe import Seen, observe
from vliwsim.regression.saturation import Saturates, saturation_of

if TYPE_CHECKING:
    from vliwsim.regression.judge import Judge

LONGEST = 20_000
"""Cycles of a case that is looked at beat by beat, at most."""


@attrs.define
class Span:
    """The smallest and largest value seen."""

    low: float
    high: float

    def add(self, value: float) -> None:
        self.low, self.high = min(self.low, value), max(self.high, value)


@attrs.define
class Doings:
    """What one instruction did over all cases."""

    on: int = 0
    off: int = 0
    taken: int = 0
    passed: int = 0
    saturated: int = 0


class Measures:
    """Adds up what happens in runs of one kernel."""

    def __init__(self, kernel: Kernel) -> None:
        self.kernel = kernel
        self.spans: dict[tuple[int, str], Span] = {}
        self.outputs: dict[str, Span] = {}
        self.doings: dict[tuple[int, int], Doings] = {}
        self.saturates: dict[str, Saturates | None] = {}
        self.cases = 0

    def add(self, run: KernelRun) -> None:
        """Look at a run that halted, beat by beat."""
        self.cases += 1
        observe(run.setup, self._see, limit=run.cycles + 1)
        for name, values in run.outputs.items():
            array = np.atleast_1d(np.asarray(values))
            array = array[~np.isnan(array)] if array.dtype.kind == "f" else array
            if array.size:
                for value in (array.min().item(), array.max().item()):
                    self.outputs.setdefault(name, Span(value, value)).add(value)

    def _see(self, seen: Seen) -> None:
        for number, value in seen.landed:
            self._landed(seen, number, value)
        if seen.issued is None:
            return
        taken = {k for k, _ in seen.issued.taken}
        for k, (part, on) in enumerate(zip(seen.ready[seen.bundle].parts, seen.issued.on, strict=True)):
            doings = self.doings.setdefault((seen.bundle, k), Doings())
            doings.on, doings.off = doings.on + on, doings.off + (not on)
            if on and part.branches:
                doings.taken, doings.passed = doings.taken + (k in taken), doings.passed + (k not in taken)
            if on and part.operation.kind is Kind.COMPUTE:
                doings.saturated += self._saturated(seen, part)
        if seen.issued.halts:
            for batches in seen.state.flight.values():
                for numbers, values in batches:
                    for number, value in zip(numbers, values, strict=True):
                        self._landed(seen, number, value)

    def _saturated(self, seen: Seen, part: Part) -> bool:
        operation = part.operation
        if operation.name not in self.saturates:
            self.saturates[operation.name] = saturation_of(operation)
        saturates = self.saturates[operation.name]
        if saturates is None:
            return False
        inputs = input_values(seen.state, part)
        return saturates(inputs, part.halves, operation.evaluate(inputs, part.halves))

    def _landed(self, seen: Seen, number: int, value: Value) -> None:
        site = seen.ready.sites[number]
        if site.write.what == "update" or not isinstance(value, int):
            return
        part = seen.ready[site.bundle].parts[site.instruction]
        operand = next(o for o in part.operation.operands if o.name == site.write.operand)
        kind = type_named("i32" if operand.pair else operand.type)
        key = site.write.register, kind.name
        for one in lane_values(kind, value):
            self.spans.setdefault(key, Span(one, one)).add(one)

    # -------------------------------------------------------------------------------------------------- what it shows

    def headroom(self) -> dict[str, Any]:
        """Ranges of registers and outputs, and saturations, as plain data."""
        rows = []
        for name, span in self.outputs.items():
            element = interface_of(self.kernel).element(name)
            rows.append(_row(f"output {name}", element.name, span, element.bytes * 8, element.floating))
        aliases: dict[int, list[str]] = {}
        for alias, number in self.kernel.register_names.items():
            aliases.setdefault(number, []).append(alias)
        for (register, type_name), span in sorted(self.spans.items()):
            kind = type_named(type_name)
            shown = " ".join([self.kernel.core.register_names[register], *aliases.get(register, [])])
            rows.append(_row(shown, type_name, span, kind.bits, kind.floating))
        counts: dict[tuple[int, str], list[int]] = {}
        for site, doings in sorted(self.doings.items()):
            if self._can_saturate(site):
                said = self._site(site)
                count = counts.setdefault((said["line"], said["operation"]), [0, 0])
                count[0], count[1] = count[0] + doings.saturated, count[1] + doings.on
        saturations = [
            {"line": line, "operation": operation, "saturated": saturated, "done": done}
            for (line, operation), (saturated, done) in sorted(counts.items())
        ]
        return {"cases": self.cases, "rows": rows, "saturations": saturations, "ideal": []}

    def coverage(self) -> dict[str, Any]:
        """What was not seen both ways, as plain data."""
        missing, count = [], 0
        for site in self._sites():
            doings = self.doings.get(site, Doings())
            for wanted, seen, says in self._questions(site, doings):
                count += wanted
                if wanted and not seen:
                    missing.append({**self._site(site), "says": says})
        unique = list({tuple(sorted(row.items())): row for row in missing}.values())
        return {"cases": self.cases, "all": count, "seen": count - len(missing), "missing": unique}

    def _sites(self) -> Iterator[tuple[int, int]]:
        for bundle, content in enumerate(self.kernel.program.bundles):
            yield from ((bundle, k) for k in range(len(content.instructions)))

    def _questions(self, site: tuple[int, int], doings: Doings) -> Iterator[tuple[bool, bool, str]]:
        """(is it asked here, was it seen, what to say if not)."""
        instruction = self.kernel.program.bundles[site[0]].instructions[site[1]]
        guarded = instruction.guard is not None
        branch = instruction.operation.kind is Kind.BRANCH
        decides = branch and instruction.operation.inputs not in ((), ("link",))
        if not doings.on and not doings.off:
            yield True, False, "never issued"
            return
        yield guarded, doings.on > 0, "guard never on"
        yield guarded, doings.off > 0, "guard never off"
        yield branch, doings.taken > 0, "branch never taken"
        yield decides, doings.passed > 0, "branch always taken"
        yield self._can_saturate(site), doings.saturated > 0, "never saturates"

    def _can_saturate(self, site: tuple[int, int]) -> bool:
        operation = self.kernel.program.bundles[site[0]].instructions[site[1]].operation
        if operation.name not in self.saturates:
            compute = operation.kind is Kind.COMPUTE
            self.saturates[operation.name] = saturation_of(operation) if compute else None
        return self.saturates[operation.name] is not None

    def _site(self, site: tuple[int, int]) -> dict[str, Any]:
        place = line_of(self.kernel, *site)
        operation = self.kernel.program.bundles[site[0]].instructions[site[1]].operation
        return {"line": place.line if place else 0, "operation": operation.name}


def lane_values(kind: ValueType, raw: int) -> Iterator[float]:
    """The value of every lane of a register's bits; binary32 as a number, without NaN."""
    for lane in range(kind.lanes):
        bits = raw >> lane * kind.bits
        value = to_float(bits & 0xFFFFFFFF) if kind.floating else kind.value(bits)
        if value == value:
            yield value


def _row(name: str, kind: str, span: Span, bits: int, floating: bool) -> dict[str, Any]:
    """A value's range, and for integers how many of its type's bits it never needs."""
    says = ""
    if not floating:
        signed = not kind.startswith("u")
        whole = (int(span.low), int(span.high))
        needed = max((v if v >= 0 else ~v).bit_length() for v in whole) + signed
        free = bits - needed
        says = f"{free} bit{'' if free == 1 else 's'} free" if free > 0 else "full"
    low, high = (v if isinstance(v, int) or np.isfinite(v) else str(v) for v in (span.low, span.high))
    return {"name": name, "type": kind, "low": low, "high": high, "says": says}


def measured(judge: Judge, cases: Sequence[Case]) -> dict[str, Any]:
    """Headroom and coverage as asked for, over the cases that halt within :data:`LONGEST` cycles."""
    measures = Measures(judge.kernel)
    runs = []
    for case in cases:
        try:
            run = judge.run(case)
        except VliwsimError:
            continue
        if run.reason == "halt" and run.cycles <= LONGEST:
            judge.about(f"measuring case {case.name}")
            measures.add(run)
            runs.append(run)
    found: dict[str, Any] = {}
    if judge.options.headroom:
        found["headroom"] = {**measures.headroom(), "ideal": distances(judge, runs)}
    if judge.options.coverage:
        found["coverage"] = measures.coverage()
    return found


# -------------------------------------------------------------------------------------------- distance to an ideal


def distances(judge: Judge, runs: Sequence[KernelRun]) -> list[dict[str, str]]:
    """Signal-to-noise ratio of each output against ``NAME_ideal`` of reference.py, over all runs; [] if there is none.

    That function takes what the reference takes and gives float outputs; for a q type in its own unit (-1 to 1).
    ``SNR = 10 log10(sum of ideal**2 / sum of (output - ideal)**2)``: common practice, no source.
    """
    ideal = _ideal(judge)
    if ideal is None:
        return []
    signal: dict[str, float] = {}
    noise: dict[str, float] = {}
    for run in runs:
        outputs = interface_of(run.kernel).outputs
        given = ideal(run)
        named = given if isinstance(given, dict) else dict(zip(outputs, given if isinstance(given, tuple) else [given]))
        for name in outputs:
            if name not in named:
                continue
            wanted = np.asarray(named[name], np.float64)
            fraction = interface_of(run.kernel).element(name).fraction
            got = np.asarray(run.outputs[name], np.float64) * 2.0 ** -(fraction or 0)
            if got.shape != wanted.shape:
                return [{"output": name, "says": f"the ideal has shape {wanted.shape}, not {got.shape}"}]
            signal[name] = signal.get(name, 0.0) + float(np.square(wanted).sum())
            noise[name] = noise.get(name, 0.0) + float(np.square(got - wanted).sum())
    return [{"output": name, "says": _snr(signal[name], noise[name])} for name in signal]


def _snr(signal: float, noise: float) -> str:
    if not noise:
        return "equals the ideal"
    return f"{10 * np.log10(signal / noise):.1f} dB above its difference from the ideal" if signal else "no signal"


def _ideal(judge: Judge) -> Any:
    """What calls ``NAME_ideal`` on the inputs of a run; None if the reference has none."""
    import inspect

    reference = judge.reference
    function = getattr(getattr(reference, "function", None), "__wrapped__", None)
    found = getattr(function, "__globals__", {}).get(f"{judge.kernel.name}_ideal")
    if reference is None or not callable(found):
        return None
    wanted = inspect.signature(found).parameters

    def call(run: KernelRun) -> Any:
        known = {**run.setup.values, **run.setup.sizes, **{n: a.copy() for n, a in run.setup.arrays.items()}}
        return found(**{name: known[name] for name in wanted if name in known})

    return call
