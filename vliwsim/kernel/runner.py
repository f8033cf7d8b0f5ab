"""One run of a kernel: bind, simulate, read back, compare, account."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable, Mapping
from typing import Any

import attrs
import numpy as np

from vliwsim.kernel.account import Account, account_of
from vliwsim.kernel.binding import Setup, bind, excerpt
from vliwsim.kernel.compare import Difference, compare
from vliwsim.kernel.diagnose import hazard_problem, note_problems, where
from vliwsim.kernel.engine import Simulation, Watch, simulate
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.outputs import Output, read_outputs
from vliwsim.kernel.reference import Reference, call_reference, load_reference
from vliwsim.kernel.sizes import formula_value
from vliwsim.machine.recorder import Record
from vliwsim.problems import InterfaceError, Problem, problem
from vliwsim.program.kernel import Formula, Kernel

ENGINE = "auto"
"""The engine unless told otherwise."""

LIMIT = 10_000_000
"""Cycles after which a run is given up, unless told otherwise."""


@attrs.frozen(eq=False)
class KernelRun:
    """What one run showed.

    ``reason``: how it ended (``halt``, ``hazard``, ``limit``, ``stopped``). ``outputs`` by name in interface order,
    empty unless it halted; ``expected`` the reference's, None where nothing was compared. ``differences``: the first
    difference by output name, None where it matches. ``diagnostics``: hazards, undefined outputs, then notes.
    """

    kernel: Kernel
    case: str
    setup: Setup
    reason: str
    account: Account
    outputs: Mapping[str, Output]
    expected: Mapping[str, Output] | None
    differences: Mapping[str, Difference | None]
    diagnostics: tuple[Problem, ...]
    trace: list[Record] | None = None

    @property
    def core(self) -> str:
        return self.kernel.core.name

    @property
    def sizes(self) -> Mapping[str, int]:
        """Values of the size names, and of given scalars that sizes are made of."""
        spoken = {n for item in self.kernel.items if item.size is not None for n in item.size.names}
        scalars = {n: v for n, v in self.setup.values.items() if n in spoken}
        return {**self.setup.sizes, **scalars}  # type: ignore[dict-item]

    @property
    def cycles(self) -> int:
        return self.account.cycles

    @property
    def bundles(self) -> int:
        return self.account.bundles

    @property
    def stalls(self) -> Mapping[str, int]:
        """Cycles without a bundle, by cause; every cause is named."""
        return self.account.stalls

    @property
    def drain(self) -> int:
        return self.account.drain

    @property
    def budget(self) -> int | float | None:
        return self.account.budget

    @property
    def legal(self) -> bool:
        """False if the machine's rules forbid something the run did."""
        return not any(p.kind == "illegal" for p in self.diagnostics)

    @property
    def matches(self) -> bool | None:
        """Do all outputs match the reference; None where nothing was compared or the run was stopped."""
        if self.expected is None or self.reason == "stopped":
            return None
        return self.reason == "halt" and not any(self.differences.values())

    @property
    def ok(self) -> bool:
        """Finished, legal, not wrong, not over budget."""
        return (
            self.reason == "halt"
            and self.legal
            and self.matches is not False
            and self.account.within_budget is not False
        )

    @property
    def notes(self) -> tuple[Problem, ...]:
        return tuple(p for p in self.diagnostics if p.kind == "note")

    @property
    def problems(self) -> tuple[Problem, ...]:
        """The diagnostics that are more than notes."""
        return tuple(p for p in self.diagnostics if p.kind != "note")

    @property
    def title(self) -> str:
        """``energy on pair7, n = 4096``."""
        return ", ".join([f"{self.kernel.name} on {self.core}", *(f"{k} = {v}" for k, v in self.sizes.items())])

    @property
    def verdict(self) -> str:
        """One sentence: which run, and whether it is right, legal and on budget."""
        return f"{self.title}: {self._judgement()}."

    def _judgement(self) -> str:
        if self.reason == "stopped":
            return f"stopped after {self.cycles} cycles, nothing judged"
        if self.reason == "limit":
            return f"not finished after {self.cycles} cycles"
        if self.reason == "hazard":
            return f"illegal after {self.cycles} cycles"
        right = {True: "right", False: "wrong", None: "not compared"}[self.matches]
        if self.matches and self._tolerances():
            right = f"right {self._tolerances()}"
        return ", ".join([right, "legal" if self.legal else "undefined output", *self._budget_words()])

    def _tolerances(self) -> str:
        """How far outputs may be from the reference, if any may and is."""
        assert self.expected is not None
        loose = [
            n for n, v in self.outputs.items() if not np.array_equal(v, self.expected[n], equal_nan=self._float(n))
        ]
        return f"(within tolerance: {', '.join(loose)})" if loose else ""

    def _float(self, name: str) -> bool:
        return interface_of(self.kernel).element(name).floating

    def _budget_words(self) -> list[str]:
        budget = self.account.budget
        if budget is None:
            return []
        over = self.account.judged_cycles - budget
        if over == 0:
            return ["on budget"]
        return [f"{abs(over):g} cycle{'' if abs(over) == 1 else 's'} {'over' if over > 0 else 'under'} budget"]

    def as_json(self) -> dict[str, object]:
        """The run as plain JSON data, in the shape of ``run --json``."""
        return {
            "kernel": self.kernel.name,
            "core": self.core,
            "sizes": dict(self.sizes),
            "case": self.case,
            "cycles": self.cycles,
            "bundles": self.bundles,
            "stalls": dict(self.stalls),
            "drain": self.drain,
            "budget": self.budget,
            "within_budget": self.account.within_budget if self.reason == "halt" else None,
            "code_bytes": self.account.code_bytes,
            "matches": self.matches,
            "outputs": {name: self._output_json(name) for name in interface_of(self.kernel).outputs},
            "diagnostics": [p.as_json() for p in self.diagnostics],
        }

    def _output_json(self, name: str) -> dict[str, object]:
        if self.reason != "halt" or self.expected is None:
            return {"matches": None, "first_difference": None}
        difference = self.differences[name]
        return {"matches": difference is None, "first_difference": difference and difference.as_json()}

    def __eq__(self, other: object) -> bool:
        """Equal to its outputs: ``run == {"y": array}``, or with one output ``run == array``."""
        if isinstance(other, KernelRun):
            return self is other
        from vliwsim.kernel.equality import mismatches

        return not mismatches(self, other)

    __hash__ = object.__hash__
    __array_ufunc__ = None  # so that NumPy leaves ``array == run`` to the run

    def __repr__(self) -> str:
        return f"<{self.verdict[:-1]}; {self.cycles} cycles>"


def run_kernel(
    kernel: Kernel,
    inputs: Mapping[str, Any],
    *,
    case: str = "given",
    reference: Reference | bool | None = True,
    limit: int = LIMIT,
    interrupt_at: int | None = None,
    watch: Watch | None = None,
    listen: Callable[[Record], None] | None = None,
    trace: bool = False,
    quiet: bool = False,
    engine: str = ENGINE,
) -> KernelRun:
    """Run ``kernel`` once on ``inputs`` (arrays, scalars and sizes by name) and judge what comes out.

    ``reference``: the loaded reference, True to load the one beside the source, False or None to compare nothing.
    ``limit`` in cycles. ``interrupt_at``: cycle, from 0. ``watch`` is called now and then with the cycle and may stop
    the run. ``trace`` keeps a record of every beat, ``listen`` is called
    with each. ``engine``: one of ``auto``, ``step``, ``native``. ``quiet`` sends what the reference prints to standard
    error.

    Raises :class:`~vliwsim.problems.InterfaceError` for inputs that do not fit, and
    :class:`~vliwsim.problems.ReferenceFailure`.
    """
    setup = _bound(kernel, inputs, case)
    output = contextlib.redirect_stdout(sys.stderr) if quiet else contextlib.nullcontext()
    with output:
        loaded = load_reference(kernel) if reference is True else reference or None
        # before the run: a broken reference shows at once, not after a long simulation
        expected = call_reference(loaded, setup) if loaded else None
    records: list[Record] | None = [] if trace else None
    if records is not None:
        listen = records.append
    simulation = simulate(setup, limit=limit, interrupt_at=interrupt_at, watch=watch, listen=listen, engine=engine)
    run = judged(setup, simulation, case=case, expected=expected, limit=limit)
    return attrs.evolve(run, trace=records)


def _bound(kernel: Kernel, inputs: Mapping[str, Any], case: str) -> Setup:
    try:
        return bind(kernel, inputs)
    except InterfaceError as error:
        if case == "given":
            raise
        raise InterfaceError([attrs.evolve(p, found=f"{p.found} (case {case})") for p in error.problems]) from None


def judged(
    setup: Setup, simulation: Simulation, *, case: str, expected: Mapping[str, Output] | None, limit: int
) -> KernelRun:
    """The run that ``simulation`` was, its outputs read and compared."""
    kernel = setup.kernel
    diagnostics: list[Problem] = []
    outputs: Mapping[str, Output] = {}
    differences: dict[str, Difference | None] = {}
    if simulation.reason == "halt":
        read = read_outputs(setup, simulation.registers, simulation.read_memory)
        outputs, diagnostics = read.values, list(read.problems)
        if expected is not None:
            for name, item in interface_of(kernel).outputs.items():
                within = whole_number(setup, item.within)
                element, unknown = interface_of(kernel).element(name), read.undefined[name]
                differences[name] = compare(element, outputs[name], expected[name], within, unknown)
    if simulation.hazard:
        diagnostics.append(hazard_problem(setup, simulation.hazard))
    if simulation.reason == "limit":
        diagnostics.append(_limit_problem(kernel, simulation, limit))
    diagnostics += [*kernel.notes, *setup.notes, *note_problems(kernel, simulation.notes)]
    account = account_of(
        kernel,
        simulation.counts,
        simulation.begun,
        simulation.stalls,
        simulation.drain,
        budget_of(setup, outputs),
        simulation.halted_in,
    )
    return KernelRun(
        kernel,
        case,
        setup,
        simulation.reason,
        account,
        outputs,
        expected,
        differences,
        tuple(diagnostics),
    )


def _limit_problem(kernel: Kernel, simulation: Simulation, limit: int) -> Problem:
    hottest = max(range(len(simulation.begun)), key=lambda k: simulation.begun[k])
    found = f"no halt in {limit} cycles; {where(kernel, hottest)} issued {simulation.begun[hottest]} times"
    return problem("cycle-limit", found, f"a halt within {limit} cycles", "a greater --limit", kind="illegal")


def whole_number(setup: Setup, formula: Formula | None) -> int | None:
    """The value of a ``within``: a whole number of units in the last place."""
    if formula is None:
        return None
    problems: list[Problem] = []
    value = formula_value(formula, setup.names, problems)
    if not problems and (isinstance(value, bool) or not isinstance(value, int) or value < 0):
        found = f"within {formula.text.strip()} is {value}"
        line = excerpt(setup.kernel, formula.place)
        problems.append(problem("within-value", found, "a whole number, 0 or more", place=formula.place, excerpt=line))
    if problems:
        raise InterfaceError(problems)
    return int(value)


def budget_of(setup: Setup, outputs: Mapping[str, Output]) -> int | float | None:
    """The cycles the source allows; a budget may also speak of scalar outputs of a finished run."""
    formula = setup.kernel.budget
    scalars: dict[str, Any] = {n: v if isinstance(v, int) else float(v) for n, v in outputs.items() if np.ndim(v) == 0}
    if formula is None or not (formula.names <= {*setup.names, *scalars}):
        return None
    problems: list[Problem] = []
    value = formula_value(formula, {**scalars, **setup.names}, problems)
    if not problems and (isinstance(value, bool) or not isinstance(value, (int, float))):
        problems.append(
            problem(
                "budget-value", f"budget {formula.text.strip()} is {value}", "a number of cycles", place=formula.place
            )
        )
    if problems:
        raise InterfaceError(problems)
    return value
