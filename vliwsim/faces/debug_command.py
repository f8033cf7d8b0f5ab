"""``vliwsim debug``: the shell on one run of a kernel."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from vliwsim.faces.options import core_options, given_values, load

if TYPE_CHECKING:
    from vliwsim.faces.shell.commands import Shell
    from vliwsim.kernel.runner import KernelRun


@click.command(short_help="Go to a cycle of a run and ask why.")
@click.argument("kernel")
@click.option(
    "--give",
    multiple=True,
    metavar="NAME=VALUE",
    help="An input: x=FILE.npy, n=40, k=0.5, x=1,2,3. Sizes follow from arrays.",
)
@click.option("--case", metavar="NAME", help="A case by its name. --give changes single inputs.")
@core_options
@click.option(
    "--no-reference", is_flag=True, help="Do not load reference.py (which is Python code) and judge by nothing."
)
@click.option(
    "--interrupt-at",
    type=click.IntRange(min=0),
    metavar="CYCLE",
    help="Take one interrupt at or after this cycle, from 0.",
)
@click.option("--play", metavar="FILE", help="Run the commands in a file, as plain text, and leave.")
def debug(kernel: str, **options: Any) -> int:
    """Open the shell on one run of KERNEL: go to any cycle, forwards and backwards, and see why.

    The inputs are those of `run`. `help` in the shell lists its commands. Commands may also come through a pipe.
    """
    from vliwsim.faces.shell.prompt import open_shell
    from vliwsim.kernel.binding import bind
    from vliwsim.kernel.cases import case_with
    from vliwsim.kernel.interface import interface_of
    from vliwsim.kernel.reference import call_reference, load_reference
    from vliwsim.shell.engine import Swift
    from vliwsim.shell.session import Session

    given = given_values(options["give"])
    loaded = load(kernel, options["core"], options["changes"])
    arrays = {item.name for item in interface_of(loaded).arrays}
    given = {n: [v] if n in arrays and isinstance(v, (int, float)) else v for n, v in given.items()}
    reference = None if options["no_reference"] else load_reference(loaded)
    case = case_with(loaded, reference, options["case"], given)
    setup = bind(loaded, case.inputs)
    expected = call_reference(reference, setup) if reference else None
    session = Session(setup, expected, interrupt_at=options["interrupt_at"], engine=Swift)
    sizes = "".join(f", {name} = {value}" for name, value in setup.sizes.items())
    title = f"{loaded.name} on {loaded.core.name}{sizes}, case {case.name}"
    open_shell(session, title=title, play=options["play"])
    return 0


def open_at_failure(run: KernelRun, interrupt_at: int | None = None) -> None:
    """Open the shell on a run that failed, where it did: at the hazard, at the first wrong element, else at the end."""
    from vliwsim.faces.shell.prompt import open_shell
    from vliwsim.shell.engine import Swift
    from vliwsim.shell.session import Session

    session = Session(run.setup, run.expected, interrupt_at=interrupt_at, engine=Swift)
    wrong = next((name for name, difference in run.differences.items() if difference), None)

    def there(shell: Shell) -> None:
        if run.reason == "limit":
            session.go(run.cycles)
            shell.show()
        else:
            shell.answer(f"at wrong {wrong}" if wrong else "at end")

    open_shell(session, title=f"{run.title}, case {run.case}", first=there)
