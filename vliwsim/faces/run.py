"""``vliwsim run``: one run of a kernel, or one for each of its cases."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, Any

import click

from vliwsim.faces.interrupt_report import Moment
from vliwsim.faces.options import core_options, given_values, load, save_outputs, save_targets
from vliwsim.problems import OptionError, VliwsimError, problem

if TYPE_CHECKING:
    from pathlib import Path

    from vliwsim.kernel.cases import Case
    from vliwsim.kernel.reference import Reference
    from vliwsim.kernel.runner import KernelRun
    from vliwsim.machine.recorder import Record
    from vliwsim.program.kernel import Kernel

STOPPED = 130
PATIENCE = 2000
"""Contexts that a kernel may take before a run goes on without knowing whether it is legal."""
FEW_REFUSALS = 5
"""Reasons not to simulate that are told."""
NOT_SIMULATED = (
    *("sizes", "case", "cycles", "bundles", "stalls", "drain", "budget", "within_budget"),
    *("code_bytes", "matches", "outputs"),
)
"""What the JSON object of a kernel that is not simulated has no value for."""


def _clear(context: click.Context, _: click.Parameter, wanted: bool) -> None:
    """Drop the kept machine code."""
    if wanted:
        from vliwsim.native import cache

        count = cache.clear()
        click.echo(f"{count} kept {'translation' if count == 1 else 'translations'} dropped.")
        context.exit(0)


@click.command(short_help="Run a kernel.")
@click.argument("kernel")
@click.option(
    "--give",
    multiple=True,
    metavar="NAME=VALUE",
    help="An input: x=FILE.npy, n=40, k=0.5, x=1,2,3. Sizes follow from arrays.",
)
@click.option("--case", metavar="NAME", help="Run a case by its name, or `all` of them. --give changes single inputs.")
@click.option("--cases", is_flag=True, help="List the cases and leave.")
@click.option(
    "--frames",
    multiple=True,
    metavar="NAME=FILE.npy",
    help="Run a recording frame by frame: x=FILE.npy is cut into frames (a matrix: a row each), `changes` are kept "
    "between them; a value differs by an expression, first=frame*n. Sizes and all else with --give.",
)
@click.option(
    "--hop",
    multiple=True,
    metavar="[NAME=]SAMPLES",
    help="From one frame's beginning to the next one's, if they overlap.",
)
@click.option("--lead", multiple=True, metavar="[NAME=]SAMPLES", help="Zeros in front of the first sample.")
@click.option("--pad", is_flag=True, help="Fill up the last frame with zeros, in place of leaving its samples out.")
@core_options
@click.option(
    "--no-reference", is_flag=True, help="Do not load reference.py (which is Python code) and compare nothing."
)
@click.option("--limit", type=click.IntRange(min=1), metavar="CYCLES", help="Give a run up after so many cycles.")
@click.option(
    "--interrupt-at",
    type=Moment(),
    metavar="CYCLE|every",
    help="Take one interrupt at or after this cycle, from 0; or run it once for `every` cycle that allows one.",
)
@click.option(
    "--engine",
    type=click.Choice(["auto", "step", "native"]),
    default=None,
    help="What runs it: the stepper, machine code, or machine code once a run is long (auto, unless told otherwise).",
)
@click.option(
    "--clear-code",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_clear,
    help="Drop the machine code kept between runs, and leave.",
)
@click.option("--save", multiple=True, metavar="NAME=FILE.npy", help="Write an output to a new file.")
@click.option("--replace", is_flag=True, help="Let --save replace files.")
@click.option("--anyway", is_flag=True, help="Simulate a kernel even if `vliwsim check` shows it illegal.")
@click.option("--trace", is_flag=True, help="Print a line a beat: what issued, what landed.")
@click.option("--notes", is_flag=True, help="Show every note, not only the first of each kind.")
@click.option("--debug", is_flag=True, help="Open the shell where the run failed, if it fails; implies --anyway.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of the report.")
def run(kernel: str, as_json: bool, **options: Any) -> int:
    """Run KERNEL, compare its outputs with reference.py beside it, and account for every cycle.

    KERNEL is a .vliw file, a folder with one, or the name of a shipped kernel. With no inputs given its first case is
    run. What is illegal whatever the input is told first, and not simulated. Loading reference.py executes it: it is
    code; every other file of a kernel is data.
    """
    try:
        with contextlib.redirect_stdout(sys.stderr) if as_json else contextlib.nullcontext():
            job = _Job(kernel, as_json, options)
            result = job.result()
    except VliwsimError as error:
        if as_json:
            _print_json({"kernel": kernel, "diagnostics": [p.as_json() for p in error.problems]})
        raise
    if as_json:
        _print_json(result)
    return job.status


def _print_json(data: object) -> None:
    from vliwsim.faces.json_text import json_text

    click.echo(json_text(data))


class _Job:
    """One invocation. ``status`` is the exit status, once :meth:`result` has run."""

    def __init__(self, path: str, as_json: bool, options: dict[str, Any]) -> None:
        self.path, self.as_json, self.options = path, as_json, options
        self.status = 0

    def result(self) -> object:
        """Do it; the data for ``--json``."""
        options = self.options
        if options["cases"] and (options["give"] or options["case"]):
            raise OptionError(problem("bad-option", "--cases with --give or --case", "--cases alone"))
        if options["case"] == "all" and (options["save"] or options["trace"]):
            raise OptionError(
                problem("bad-option", "--case all with --save or --trace", "one case with --save or --trace")
            )
        if options["interrupt_at"] == "every" and (options["case"] == "all" or options["save"] or options["debug"]):
            found = "--interrupt-at every with --case all, --save or --debug"
            raise OptionError(problem("bad-option", found, "one case", "vliwsim regress --interrupts for all cases"))
        if options["debug"] and (self.as_json or options["cases"] or options["case"] == "all"):
            raise OptionError(problem("bad-option", "--debug with --json, --cases or --case all", "one run to debug"))
        if options["frames"] or options["hop"] or options["lead"] or options["pad"]:
            from vliwsim.faces.frames_command import judge_options

            judge_options(options)
        given = given_values(options["give"])
        kernel = load(self.path, options["core"], options["changes"])
        from vliwsim.kernel.interface import interface_of
        from vliwsim.kernel.reference import load_reference

        arrays = {item.name for item in interface_of(kernel).arrays}
        given = {n: [v] if n in arrays and isinstance(v, (int, float)) else v for n, v in given.items()}
        outputs = list(interface_of(kernel).outputs)
        targets = save_targets(options["save"], outputs, options["replace"])
        reference = None if options["no_reference"] else load_reference(kernel)
        if options["cases"]:
            return self._list(kernel, reference)
        if not options["anyway"] and not options["debug"]:
            refused = self._refused(kernel)
            if refused is not None:
                return refused
        if options["frames"]:
            return self._frames(kernel, reference, given, targets)
        if options["case"] == "all":
            return self._all(kernel, reference, given)
        from vliwsim.kernel.cases import case_with

        run = self._run(kernel, reference, case_with(kernel, reference, options["case"], given))
        self._say(lambda: self._report(run))
        if options["interrupt_at"] == "every" and run.reason == "halt":
            return self._every(run)
        if run.reason == "halt" and targets:
            save_outputs(targets, dict(run.outputs), options["replace"])
        elif targets:
            self._say(lambda: "  nothing saved: the run did not finish")
        if options["debug"] and not run.ok:
            from vliwsim.faces.debug_command import open_at_failure

            open_at_failure(run, options["interrupt_at"])
        return run.as_json()

    def _frames(
        self, kernel: Kernel, reference: Reference | None, given: dict[str, Any], targets: dict[str, Path]
    ) -> object:
        """A recording, frame by frame."""
        from vliwsim.faces.frames_command import report, run_frames

        run = run_frames(kernel, reference, given, targets, self.options)
        self._say(lambda: report(run, self.options["notes"]))
        if targets and run.reason != "halt":
            self._say(lambda: "  nothing saved: not all frames were run")
        if run.reason == "stopped":
            self.status = STOPPED
        elif not run.ok:
            self.status = 1
        return run.as_json()

    def _every(self, run: KernelRun) -> object:
        """The run interrupted at every cycle that allows it; the data for ``--json``."""
        from vliwsim.faces import interrupt_report
        from vliwsim.kernel.runner import LIMIT

        found = interrupt_report.injected(run, self.options["limit"] or LIMIT)
        self._say(lambda: f"\n{interrupt_report.text(found)}")
        if found.harms:
            self.status = max(self.status, 1)
        return {**run.as_json(), "interrupts": interrupt_report.data(found)}

    def _refused(self, kernel: Kernel) -> object | None:
        """What to print instead of running a kernel that is illegal on some path; None for one that may run."""
        from vliwsim.check.judge import check_kernel
        from vliwsim.check.words import Words

        words = Words(kernel, check_kernel(kernel, PATIENCE, interrupts=False))
        if not words.verdict.violated:
            return None
        from vliwsim.faces.check_report import verdict_sentence

        self.status = 1
        told = words.violations()
        shown = "\n\n".join(map(str, told[:FEW_REFUSALS]))
        more = f"{len(told) - FEW_REFUSALS} more. " if len(told) > FEW_REFUSALS else ""
        advice = f"{more}Not simulated: `vliwsim check` shows the paths there, `--anyway` simulates it."
        self._say(lambda: f"{verdict_sentence(words)}\n\n{shown}\n\n  {advice}")
        nothing = dict.fromkeys(NOT_SIMULATED)
        return {
            "kernel": kernel.name,
            "core": kernel.core.name,
            **nothing,
            "diagnostics": [p.as_json() for p in told],
        }

    def _say(self, text: Callable[[], str]) -> None:
        if not self.as_json:
            click.echo(text())

    def _report(self, run: KernelRun) -> str:
        from vliwsim.faces.run_report import report

        return report(run, self.options["notes"])

    def _run(self, kernel: Kernel, reference: Reference | None, case: Case) -> KernelRun:
        from vliwsim.faces.progress import Watcher
        from vliwsim.kernel.runner import ENGINE, LIMIT, run_kernel

        with Watcher(f"{kernel.name} on {kernel.core.name}") as watcher:
            run = run_kernel(
                kernel,
                case.inputs,
                case=case.name,
                reference=reference,
                limit=self.options["limit"] or LIMIT,
                interrupt_at=None if self.options["interrupt_at"] == "every" else self.options["interrupt_at"],
                watch=watcher,
                listen=self._listener(kernel) if self.options["trace"] else None,
                engine=self.options["engine"] or ENGINE,
            )
        if run.reason == "stopped":
            self.status = STOPPED
        elif not run.ok:
            self.status = max(self.status, 1)
        return run

    def _listener(self, kernel: Kernel) -> Callable[[Record], None]:
        from vliwsim.faces.trace_lines import lines

        def listen(record: Record) -> None:
            for line in lines(kernel, record):
                click.echo(line)  # with --json this goes to standard error

        return listen

    def _list(self, kernel: Kernel, reference: Reference | None) -> object:
        from vliwsim.kernel.cases import cases_of

        cases = list(cases_of(kernel, reference))
        self._say(lambda: "\n".join(_described(cases)) or "no cases")
        return {"kernel": kernel.name, "core": kernel.core.name, "cases": [case.name for case in cases]}

    def _all(self, kernel: Kernel, reference: Reference | None, given: dict[str, Any]) -> object:
        from vliwsim.faces.run_report import line
        from vliwsim.kernel.cases import Case, cases_of

        runs: list[KernelRun] = []
        cases = list(cases_of(kernel, reference))
        width = max((len(case.name) for case in cases), default=0)
        for case in cases:
            run = self._run(kernel, reference, Case(case.name, {**case.inputs, **given}))
            runs.append(run)
            self._say(lambda: line(runs[-1], width))
            if run.reason == "stopped":
                break
        bad = [run for run in runs if not run.ok]
        for run in bad:
            self._say(lambda run=run: f"\n{run.case}: {self._report(run)}")  # type: ignore[misc]
        self._say(lambda: f"\n{len(runs) - len(bad)} of {len(runs)} cases right, legal and within budget.")
        return {"kernel": kernel.name, "core": kernel.core.name, "cases": [run.as_json() for run in runs]}


def _described(cases: list[Case]) -> Iterator[str]:
    """A case a line: its name and what it gives."""
    import numpy as np

    width = max((len(case.name) for case in cases), default=0)
    for case in cases:
        inputs = [f"{n} {np.asarray(v).size} values" if np.ndim(v) else f"{n} = {v}" for n, v in case.inputs.items()]
        yield f"  {case.name:<{width}}  {', '.join(inputs)}"
