"""``vliwsim golden``: record what a kernel gives."""

from __future__ import annotations

from collections.abc import Sequence

import click

from vliwsim.problems import GoldenError, OptionError, VliwsimError, problem


@click.command(short_help="Record what a kernel gives.")
@click.argument("kernel")
@click.option("--core", metavar="NAME|FILE", help="The core, instead of the first one the source names.")
@click.option("--case", "cases", multiple=True, metavar="NAME", help="Record only this case; may be given again.")
@click.option("--date", metavar="YYYY-MM-DD", required=True, help="The day to write into the file.")
@click.option("--replace", is_flag=True, help="Show what would change, and replace a golden file that is there.")
@click.option("--show", is_flag=True, help="Show what would change, and write nothing.")
def golden(kernel: str, core: str | None, cases: Sequence[str], date: str, replace: bool, show: bool) -> int:
    """Run KERNEL on its cases and keep inputs, outputs and cycles beside it, in golden/SOURCE.CORE.npz.

    Only runs that match reference.py, are legal and within budget are recorded. `vliwsim regress` then holds the kernel
    against them.
    """
    from vliwsim.faces.progress import Watcher
    from vliwsim.kernel.cases import cases_of, find_case
    from vliwsim.kernel.goldens import differences, golden_path, read_golden, record, write_golden
    from vliwsim.kernel.loading import assemble_source
    from vliwsim.kernel.reference import load_reference
    from vliwsim.kernel.runner import run_kernel
    from vliwsim.regression.keep import tool_name

    assembled = assemble_source(kernel, core)
    reference = load_reference(assembled)
    if reference is None:
        found = f"no reference.py beside {assembled.path}"
        raise GoldenError(problem("golden-not-right", found, "a run that matched its reference"))
    chosen = [find_case(assembled, reference, name) for name in cases] or list(cases_of(assembled, reference))
    if len({case.name for case in chosen}) < len(chosen):
        raise OptionError(problem("bad-option", "--case with the same name twice", "each case once"))
    runs = []
    for case in chosen:
        with Watcher(f"{assembled.name} on {assembled.core.name}, {case.name}") as watcher:
            runs.append(run_kernel(assembled, case.inputs, case=case.name, reference=reference, watch=watcher))
        if runs[-1].reason == "stopped":
            raise click.Abort
    new = record(runs, date, tool_name(), reference.source)
    path = golden_path(assembled.path, assembled.core.name)
    try:
        old = read_golden(path)
    except VliwsimError as error:
        if not (replace or show):
            raise
        click.echo(f"{error.problems[0].name}: {error.problems[0].found}")
        old = None
    if old is not None:
        click.echo("\n".join(f"  {text}" for text in differences(old, new)) or "  nothing changes")
    if show:
        return 0
    write_golden(path, new, replace=replace)
    click.echo(
        f"{len(runs)} case{'' if len(runs) == 1 else 's'} of {assembled.name} on {assembled.core.name} in {path}"
    )
    return 0
