"""``vliwsim check``: what can be said of kernels without running them."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import click

from vliwsim.faces.json_text import json_text
from vliwsim.faces.options import core_options
from vliwsim.problems import OptionError, Problem, VliwsimError, problem

if TYPE_CHECKING:
    from vliwsim.check.words import Words
    from vliwsim.program.kernel import Kernel


@click.command(short_help="Prove kernels legal without input.")
@click.argument("kernels", metavar="KERNEL…", nargs=-1, required=True)
@core_options
@click.option("--cap", type=click.IntRange(min=1), metavar="CONTEXTS", help="Give up beyond so many; 20000.")
@click.option("--notes", is_flag=True, help="Show every incident and read, not only the first of each kind.")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of the report.")
@click.option("--sarif", metavar="FILE", help="Write a SARIF 2.1.0 log to a new file too.")
@click.option("--replace", is_flag=True, help="Let --sarif replace the file.")
def check(
    kernels: tuple[str, ...],
    core: str | None,
    changes: tuple[str, ...],
    cap: int | None,
    notes: bool,
    as_json: bool,
    sarif: str | None,
    replace: bool,
) -> int:
    """Decide every rule of the machine on every path of each KERNEL, for any input.

    KERNEL is a .vliw file, a folder with one, or the name of a shipped kernel; each is checked on every core that it
    names, or on the one of --core. A rule is proved, violated (with the path there), or needs input; what takes too
    many contexts is undecided. Exit status: 0 nothing violated or undecided, 1 something is, 2 a bad request or file.
    """
    from vliwsim.check.judge import check_kernel
    from vliwsim.check.words import Words
    from vliwsim.faces.check_report import as_json as data
    from vliwsim.faces.check_report import report
    from vliwsim.faces.main import complain
    from vliwsim.flow.graph import MOST_CONTEXTS

    target = _target(sarif, replace)
    status, failed, checked, objects = 0, list[Problem](), list[Words](), list[object]()
    for path in dict.fromkeys(kernels):
        try:
            for kernel in _assembled(path, core, changes):
                words = Words(kernel, check_kernel(kernel, cap or MOST_CONTEXTS))
                status = max(status, int(not words.verdict.ok))
                checked.append(words)
                objects.append(data(words))
                if not as_json:
                    click.echo(("\n" if len(checked) > 1 else "") + report(words, notes))
        except VliwsimError as error:
            status = max(status, error.status)
            failed += error.problems
            objects.append({"file": path, "diagnostics": [p.as_json() for p in error.problems]})
            if not as_json:
                complain(error.problems)
    if as_json:
        click.echo(json_text({"kernels": objects}))
        if failed:
            complain(failed)
    if target:
        _write(target, checked, failed, replace)
    return status


def _target(sarif: str | None, replace: bool) -> Path | None:
    """Where the log goes; judged before any work."""
    from vliwsim.kernel.files import exists

    if sarif is None:
        if replace:
            raise OptionError(problem("bad-option", "--replace without --sarif", "--sarif FILE --replace"))
        return None
    path = Path(sarif)
    if not sarif or not path.parent.is_dir():
        raise OptionError(problem("output-file", f"no folder {path.parent}", "a folder that is there"))
    if path.is_dir():
        raise OptionError(problem("output-file", f"{path} is a folder", "the name of a file"))
    if path.exists() and not replace:
        raise OptionError(exists(path).problems)
    return path


def _assembled(path: str, core: str | None, changes: Sequence[str]) -> list[Kernel]:
    """The kernel on the core asked for, or on every one that it names."""
    from vliwsim.kernel.loading import assemble_source

    first = assemble_source(path, core, changes)
    if core is not None:
        return [first]
    kernels = [first]
    for named in first.cores_named[1:]:
        beside = str(Path(first.path).parent / named) if named.endswith(".toml") else named
        kernels.append(assemble_source(path, beside, changes))
    return kernels


def _write(target: Path, checked: Sequence[Words], failed: Sequence[Problem], replace: bool) -> None:
    from vliwsim.faces.check_sarif import log
    from vliwsim.kernel.files import write_whole

    text = json.dumps(log(checked, failed), indent=2, ensure_ascii=False, allow_nan=False) + "\n"

    def write(stream: BinaryIO) -> None:
        stream.write(text.encode())

    write_whole(target, write, replace=replace)
