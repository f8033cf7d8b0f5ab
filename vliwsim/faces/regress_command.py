"""``vliwsim regress``: all kernels below some paths."""

from __future__ import annotations

import sys
import time
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from vliwsim.problems import OptionError, problem

if TYPE_CHECKING:
    from vliwsim.regression.claims import Options
    from vliwsim.regression.keep import Keep
    from vliwsim.regression.regress import Progress, Result
    from vliwsim.regression.sources import Target


@click.command(short_help="Judge all kernels below some paths.")
@click.argument("paths", nargs=-1, required=True, metavar="PATH…")
@click.option("--core", metavar="NAME|FILE", help="Only on this core, instead of all that each source names.")
@click.option(
    "--jobs", type=click.IntRange(min=1), metavar="N", help="Processes at a time; by default one a processor."
)
@click.option("--limit", type=click.IntRange(min=1), metavar="CYCLES", help="Give a run up after so many cycles.")
@click.option(
    "--time-limit", type=click.FloatRange(min=0.1), default=60.0, metavar="SECONDS", help="For one call of a reference."
)
@click.option("--no-reference", is_flag=True, help="Do not load any reference.py (which is Python code).")
@click.option("--interrupts", is_flag=True, help="Also interrupt at every bundle and compare the outputs.")
@click.option("--headroom", is_flag=True, help="Also show ranges of values, saturations, and distance to an ideal.")
@click.option("--coverage", is_flag=True, help="Also show guards, branches and saturations never seen both ways.")
@click.option(
    "--mutants",
    type=click.IntRange(min=1),
    metavar="N",
    help="Also make up to N wrong copies of each source (a stamp or register moved); list those no case finds.",
)
@click.option(
    "--junit", metavar="FILE.xml", help="Write the claims to this file for a build server (replaced if there)."
)
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of the report.")
@click.option("--all", "show_all", is_flag=True, help="Show every claim that does not hold, not only the first few.")
@click.option("--watch", is_flag=True, help="Stay, and judge again what a saved file touches, until Ctrl-C.")
@click.option("--no-cache", is_flag=True, help="Judge everything again, and keep nothing.")
@click.option("--clear-cache", is_flag=True, help="First forget all verdicts that were kept.")
def regress(paths: Sequence[str], core: str | None, **options: Any) -> int:
    """Judge every kernel at or below PATH…: its legality, all its cases against reference.py, goldens and budget.

    Each source is judged on every core it names. What has not changed since it was last judged is not judged again;
    that is known by content. Loading a reference.py executes it.
    """
    if options["watch"] and options["as_json"]:
        raise OptionError(problem("bad-option", "--watch with --json", "one of them"))
    _check_junit(options["junit"])
    wanted, keep = _options(options), _keep(options)
    from vliwsim.regression.sources import targets

    found = targets(paths, core)
    result = _judged(found, wanted, keep, options)
    if options["watch"]:
        return _watch(paths, core, wanted, keep, options, result)
    return 0 if result.held else 1


def _options(options: dict[str, Any]) -> Options:
    from vliwsim.regression.claims import Options

    return Options(
        limit=options["limit"] or Options().limit,
        seconds=options["time_limit"],
        reference=not options["no_reference"],
        interrupts=options["interrupts"],
        headroom=options["headroom"],
        coverage=options["coverage"],
        mutants=options["mutants"] or 0,
    )


def _keep(options: dict[str, Any]) -> Keep:
    from vliwsim.regression.keep import Keep, cache_folder, clear

    folder = cache_folder()
    if options["clear_cache"]:
        clear(folder)
    return Keep(None if options["no_cache"] else folder, _options(options))


def _check_junit(name: str | None) -> None:
    if name is not None and (Path(name).is_dir() or not Path(name).absolute().parent.is_dir()):
        raise OptionError(problem("output-file", f"--junit {name}", "a file in a folder that is there"))


def _judged(targets: Sequence[Target], wanted: Options, keep: Keep, options: dict[str, Any]) -> Result:
    """One regression, its report printed and written."""
    from vliwsim.faces.regress_report import report
    from vliwsim.regression.regress import regress as judge

    with _Line() as show:
        result = judge(targets, wanted, keep, options["jobs"], show)
    if options["as_json"]:
        from vliwsim.faces.json_text import json_text

        click.echo(json_text(result.as_json()))
    else:
        click.echo(report(result, None if options["show_all"] else 3))
    if options["junit"]:
        from vliwsim.kernel.files import write_whole
        from vliwsim.regression.junit import to_xml

        data = to_xml(result.verdicts)
        write_whole(Path(options["junit"]), lambda stream: _put(stream, data), replace=True)
    return result


def _put(stream: Any, data: bytes) -> None:
    stream.write(data)


def _watch(
    paths: Sequence[str], core: str | None, wanted: Options, keep: Keep, options: dict[str, Any], result: Result
) -> int:
    """Judge again what changes, until Ctrl-C; the status is that of all as they are then."""
    from vliwsim.regression.watch import Watch

    watch = Watch(paths, core, keep)
    touched = watch.targets
    click.echo("\nwatching; Ctrl-C ends", err=True)
    try:
        while True:
            for target, verdict in zip(touched, result.verdicts):
                watch.judged(target, verdict.held)
            touched = watch.wait()
            click.echo(f"\n{time.strftime('%H:%M:%S')}  {', '.join(t.title for t in touched)}", err=True)
            result = _judged(touched, wanted, keep, options)
    except KeyboardInterrupt:
        click.echo("", err=True)
        return 0 if watch.all_held else 1


class _Line:
    """One line of progress on a terminal's standard error, rewritten in place; nothing in a pipe."""

    def __init__(self) -> None:
        self._terminal = sys.stderr.isatty()
        self._shown = 0.0

    def __enter__(self) -> _Line:
        return self

    def __call__(self, progress: Progress) -> None:
        now = time.monotonic()
        if not self._terminal or now - self._shown < 0.1:
            return
        self._shown = now
        import shutil

        failed = f", {progress.failed} not right" if progress.failed else ""
        text = f"{progress.done} of {progress.total}{failed}  {progress.doing}"
        width = shutil.get_terminal_size().columns - 1
        sys.stderr.write(f"\r\x1b[K{text[:width]}")
        sys.stderr.flush()

    def __exit__(self, *_: object) -> None:
        if self._terminal and self._shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()
