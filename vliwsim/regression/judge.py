"""Judging one source on one core: every claim about it, in the order its questions are asked."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from functools import cached_property
from typing import Any

import numpy as np

from vliwsim.kernel.binding import bind
from vliwsim.kernel.cases import Case, cases_of, generated_cases
from vliwsim.kernel.compare import Difference, compare
from vliwsim.kernel.goldens import Golden, GoldenCase, digest_of_core, golden_path, read_golden, source_digest
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.outputs import Output
from vliwsim.kernel.reference import Reference, load_reference
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.kernel.sizes import formula_value
from vliwsim.problems import InterfaceError, VliwsimError
from vliwsim.program.kernel import Kernel
from vliwsim.regression.claims import Change, Claim, Options, Verdict
from vliwsim.regression.explain import explained, named_lines, over_budget, text_of_difference
from vliwsim.regression.legality import legality
from vliwsim.regression.watched import same_folder, time_limit, watched

About = Callable[[str], None]
TRACED = 3
"""Cases that do not hold whose first wrong element is traced back."""


def _silent(text: str) -> None:
    pass


class Judge:
    """One source on one core. ``about`` is told what goes on, for whoever waits."""

    def __init__(self, source: str, core: str | None, options: Options, about: About = _silent) -> None:
        self.source, self.core, self.options, self.about = source, core, options, about
        self._notes: Callable[[], list[str]] = list
        self._runs: dict[str, KernelRun] = {}

    @cached_property
    def kernel(self) -> Kernel:
        """The assembled kernel; raises :class:`VliwsimError`."""
        self.about("assembling")
        return assemble_source(self.source, self.core)

    @cached_property
    def reference(self) -> Reference | None:
        """The watched reference; raises :class:`VliwsimError` where it cannot be loaded."""
        if not self.options.reference:
            return None
        self.about("loading reference.py")
        with same_folder(), time_limit(self.options.seconds):
            found = load_reference(self.kernel)
        self.about("")
        if found is None:
            return None
        found, self._notes = watched(found, self.options.seconds, lambda text: self.about(self._at + text))
        return found

    _at = ""

    @cached_property
    def cases(self) -> list[Case]:
        """All cases; raises :class:`VliwsimError` where the reference's own fail."""
        self._at = ""
        return list(cases_of(self.kernel, self.reference))

    @property
    def notes(self) -> list[str]:
        return self._notes()

    # -------------------------------------------------------------------------------------------------------- claims

    def verdict(self) -> Verdict:
        """Everything, judged."""
        began = time.perf_counter()
        claims = list(self.claims())
        self._trace(claims)
        kernel = self.kernel if "kernel" in vars(self) else None
        golden = self._golden_or_none()
        return Verdict(
            self.source,
            kernel.name if kernel else "",
            kernel.core.name if kernel else self.core or "",
            tuple(claims),
            kernel.program.code_bytes if kernel else None,
            golden.code_bytes if golden else None,
            {name: run.cycles for name, run in self._runs.items() if run.reason == "halt"},
            tuple(self._changes),
            tuple(self.notes),
            self._measures(),
            round(time.perf_counter() - began, 3),
        )

    def _trace(self, claims: list[Claim]) -> None:
        """Find what made the first wrong element, in the shortest of the cases that do not hold."""
        bad = [claim for claim in claims if claim.kind == "case" and claim.held is False and claim.cycles is not None]
        for claim in sorted(bad, key=lambda claim: claim.cycles or 0)[:TRACED]:
            self.about(f"tracing case {claim.name}")
            case = next(case for case in self.cases if case.name == claim.name)
            claims[claims.index(claim)] = self.case(case)

    def claims(self) -> Iterator[Claim]:
        """Every claim, judged one after the other."""
        legal = self.legal()
        yield legal
        if legal.held is False and "kernel" not in vars(self):
            return
        broken = self.loaded()
        if broken:
            yield broken
        try:
            cases = self.cases
        except VliwsimError as error:
            yield Claim("cases", "cases", False, *_said(error))
            cases = []
        if not cases:
            found = "no inputs were found for which the kernel can run"
            yield Claim("cases", "cases", False, found, f"{found}\ntry cases() in reference.py")
        for case in cases:
            yield self.case(case, traced=False)
        yield from self.goldens()
        if self.kernel.budget is not None:
            yield self.budget()
        if self.options.interrupts:
            yield self.interrupts()

    def legal(self) -> Claim:
        """It assembles, and the checks find no path on which a rule is broken."""
        try:
            kernel = self.kernel
        except VliwsimError as error:
            return Claim("legal", "legal", False, *_said(error))
        self.about("checking legality")
        return legality(kernel)

    def loaded(self) -> Claim | None:
        """A claim that does not hold, where the reference cannot be loaded; else None. Cases then are generated."""
        try:
            _ = self.reference
        except VliwsimError as error:
            self.__dict__["reference"] = None
            self.__dict__["cases"] = list(generated_cases(self.kernel))
            return Claim("reference", "reference", False, *_said(error))
        return None

    def run(self, case: Case) -> KernelRun:
        """The run of a case, made once; raises :class:`VliwsimError`."""
        if case.name not in self._runs:
            self._at = f"case {case.name}: "
            self.about(f"case {case.name}")
            run = run_kernel(
                self.kernel, case.inputs, case=case.name, reference=self.reference, limit=self.options.limit
            )
            self._runs[case.name] = run
        return self._runs[case.name]

    def case(self, case: Case, traced: bool = True) -> Claim:
        """Right and legal on this case; how many cycles it takes is the budget's business.

        ``traced``: where it does not hold, find what made the first wrong element.
        """
        try:
            run = self.run(case)
        except VliwsimError as error:
            return Claim("case", case.name, False, *_said(error))
        if run.reason == "halt" and run.legal and run.matches is not False:
            return Claim("case", case.name, True, f"{run.cycles} cycles", cycles=run.cycles)
        found = explained(run, traced=traced)
        return Claim("case", case.name, False, run.verdict[:-1], found.text, found.lines, found.debug, run.cycles)

    def budget(self) -> Claim:
        """No case takes more cycles than the budget gives."""
        worst: tuple[float, KernelRun] | None = None
        over, finished = 0, 0
        for case in self.cases:
            try:
                run = self.run(case)
            except VliwsimError:
                continue  # that claim says it
            if run.reason != "halt" or run.budget is None:
                continue
            finished += 1
            excess = run.account.judged_cycles - run.budget
            over += excess > 0
            if worst is None or excess > worst[0]:
                worst = excess, run
        if worst is None:
            return Claim("budget", "budget", None, "no run that finished has a budget")
        excess, run = worst
        if excess <= 0:
            return Claim("budget", "budget", True, f"{finished} cases within it")
        found = over_budget(run)
        says = f"{over} of {finished} cases over budget, {run.case} by {excess:g} cycles"
        return Claim("budget", "budget", False, says, found.text, found.lines, found.debug)

    # ------------------------------------------------------------------------------------------------------- goldens

    @cached_property
    def golden(self) -> Golden | None:
        """The goldens of this source on this core; raises :class:`VliwsimError` for a damaged file."""
        return read_golden(golden_path(self.source, self.kernel.core.name))

    def _golden_or_none(self) -> Golden | None:
        try:
            return self.golden
        except VliwsimError:
            return None

    @cached_property
    def _changes(self) -> list[Change]:
        return []

    def goldens(self) -> Iterator[Claim]:
        """A claim a recorded case, or one that names a damaged file."""
        try:
            golden = self.golden
        except VliwsimError as error:
            yield Claim("golden", "golden", False, *_said(error))
            return
        for case in golden.cases if golden else ():
            yield self.golden_case(case)

    def golden_case(self, recorded: GoldenCase) -> Claim:
        """The kernel still gives what was recorded, in no more cycles if neither it nor the core has changed since."""
        self.about(f"golden {recorded.name}")
        try:
            run = self._golden_run(recorded)
        except VliwsimError as error:
            says, text, _ = _said(error)
            return Claim("golden", recorded.name, False, says, f"recorded with another interface or core:\n{text}")
        if run.reason != "halt" or not run.legal:
            found = explained(run)
            says, cycles = run.verdict[:-1], run.cycles
            return Claim("golden", recorded.name, False, says, found.text, found.lines, found.debug, cycles)
        differences = self._golden_differences(run, recorded)
        if any(differences.values()):
            import attrs

            expected = {name: recorded.outputs[name] for name in run.outputs}
            found = explained(attrs.evolve(run, differences=differences, expected=expected), "recorded")
            name, difference = next((n, d) for n, d in differences.items() if d)
            says = f"not as recorded: {text_of_difference(name, difference, 'recorded')}"
            cycles = run.cycles
            return Claim("golden", recorded.name, False, says, found.text, found.lines, found.debug, cycles)
        return self._golden_cycles(run, recorded)

    def _golden_run(self, recorded: GoldenCase) -> KernelRun:
        case = next((c for c in self.cases if c.name == recorded.name), None) if "cases" in vars(self) else None
        if case is not None and case.name in self._runs and _same_inputs(self._runs[case.name], recorded):
            return self._runs[case.name]
        return run_kernel(self.kernel, recorded.inputs, case=recorded.name, reference=None, limit=self.options.limit)

    def _golden_differences(self, run: KernelRun, recorded: GoldenCase) -> dict[str, Difference | None]:
        interface = interface_of(self.kernel)
        found: dict[str, Difference | None] = {}
        for name, item in interface.outputs.items():
            if name not in recorded.outputs:
                raise InterfaceError(_no_output(name))
            element = interface.element(name)
            before: Output = np.asarray(recorded.outputs[name]).astype(element.dtype)
            if np.shape(before) != np.shape(run.outputs[name]):
                raise InterfaceError(_no_output(f"{name} of {np.size(run.outputs[name])} elements"))
            within = formula_value(item.within, run.setup.names, []) if item.within else None
            found[name] = compare(element, run.outputs[name], before, within)
        return found

    def _golden_cycles(self, run: KernelRun, recorded: GoldenCase) -> Claim:
        golden = self.golden
        assert golden is not None
        before, after = recorded.cycles, run.cycles
        if before == after:
            return Claim("golden", recorded.name, True, f"{after} cycles, as recorded")
        same_source = golden.kernel_digest in ("", source_digest(self.kernel.text))
        same_core = golden.core_digest in ("", digest_of_core(self.kernel))
        why = "tool" if same_source and same_core else "core" if not same_core else "source"
        self._changes.append(Change(recorded.name, before, after, why))
        says = f"{before} → {after} cycles"
        if after < before or why == "core":
            return Claim("golden", recorded.name, True, f"{says}, {'another core' if why == 'core' else 'faster'}")
        found = over_budget(run, recorded.sections)
        since = f"{says} since {golden.date or 'it was recorded'}"
        text = f"{since}\n{found.text}\n  try      vliwsim golden … --replace, if that is meant"
        return Claim("golden", recorded.name, False, says, text, found.lines, found.debug, run.cycles)

    # ------------------------------------------------------------------------------------------------------ measures

    def interrupts(self) -> Claim:
        """An interrupt changes no output, whenever it comes."""
        from vliwsim.regression.interrupts import interrupt_claim

        claim, self._interrupts = interrupt_claim(self)
        return claim

    _interrupts: dict[str, Any] | None = None

    def _measures(self) -> dict[str, Any]:
        found: dict[str, Any] = {}
        if "kernel" not in vars(self):
            return found
        if self._interrupts is not None:
            found["interrupts"] = self._interrupts
        cases = self.cases if "cases" in vars(self) else []
        if self.options.headroom or self.options.coverage:
            from vliwsim.regression.measure import measured

            found |= measured(self, cases)
        if self.options.mutants:
            from vliwsim.regression.mutants import judged_mutants

            found["mutants"] = judged_mutants(self, self.options.mutants)
        return found


def _no_output(name: str) -> Any:
    from vliwsim.problems import problem

    return problem("golden-interface", f"the golden has no {name}", "a golden of this interface", "record it again")


def _said(error: VliwsimError) -> tuple[str, str, tuple[int, ...]]:
    """One line, the whole text, and the lines that an error names."""
    first = error.problems[0]
    more = f" (and {len(error.problems) - 1} more)" if len(error.problems) > 1 else ""
    lines = tuple(named_lines(error.problems))
    return f"{first.name}: {first.found}{more}", str(error), lines


def _same_inputs(run: KernelRun, recorded: GoldenCase) -> bool:
    try:
        setup = bind(run.kernel, recorded.inputs)
    except VliwsimError:
        return False
    mine = run.setup
    return setup.registers == mine.registers and setup.memory == mine.memory and setup.sizes == mine.sizes
