"""The command line: its commands, found lazily, and how it ends.

Exit status: 0 all held; 1 the kernel is wrong, illegal or over budget; 2 the request or an input file is bad; 130 the
user stopped it. A mistake of the user is said as found, allowed, try on standard error, never as a traceback.
"""

from __future__ import annotations

import atexit
import contextlib
import errno
import gc
import io
import os
import sys
import threading
from collections.abc import Iterable, Sequence
from importlib import import_module
from typing import NoReturn

import click

from vliwsim.problems import Problem, VliwsimError, problem

COMMANDS = {
    "run": ("vliwsim.faces.run", "Run a kernel: compare it with its reference, account for every cycle."),
    "check": ("vliwsim.faces.check_command", "Prove kernels legal without input: every rule on every path."),
    "compare": ("vliwsim.faces.compare_command", "Set kernels of one interface side by side."),
    "regress": ("vliwsim.faces.regress_command", "Judge all kernels below some paths."),
    "golden": ("vliwsim.faces.golden_command", "Record what a kernel gives, to hold it against that later."),
    "debug": ("vliwsim.faces.debug_command", "Go to any cycle of a run, forwards and backwards, and see why."),
    "assemble": ("vliwsim.faces.images", "Assemble a kernel into an image."),
    "disassemble": ("vliwsim.faces.images", "Turn an image back into a source."),
    "layout": ("vliwsim.faces.catalogue", "Draw the bit fields of a core's operation words."),
    "cores": ("vliwsim.faces.catalogue", "List the cores, or describe one."),
    "ops": ("vliwsim.faces.catalogue", "List the operations, or show one's manual page."),
}
"""Commands in the order of the help: the module each is in, and what it does."""

STOPPED = 130


class _Commands(click.Group):
    """Imports a command's module only when that command is asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        command = getattr(import_module(COMMANDS[name][0]), name)
        assert isinstance(command, click.Command)
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, says) for name, (_, says) in COMMANDS.items()])


@click.group(
    cls=_Commands, no_args_is_help=False, invoke_without_command=True, context_settings={"max_content_width": 100}
)
@click.option("--version", is_flag=True, help="Show the version and leave.")
@click.pass_context
def cli(ctx: click.Context, version: bool) -> None:
    """Simulate hand-scheduled kernels on a parameterizable VLIW core, cycle by cycle.

    A kernel is a .vliw file; `vliwsim run energy` runs a shipped one. Exit status: 0 all held, 1 the kernel is wrong,
    illegal or over budget, 2 the request or an input file is bad.
    """
    if version:
        import vliwsim

        click.echo(f"vliwsim {vliwsim.__version__}")
    elif ctx.invoked_subcommand is None:
        click.echo(ctx.get_help())


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run the command line and leave with its exit status."""
    gc.set_threshold(100_000, 20, 50)  # starting makes many objects and hardly any garbage
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # what a terminal has no letter for is no reason to fail
    _leave(status_of(arguments))


_WRITERS = (io.TextIOWrapper, io.BufferedWriter, io.BufferedRandom)


def _leave(status: int) -> NoReturn:
    """End the process as ``sys.exit`` does, but leave its memory to the system as it is.

    Python would first search and free every object, which takes a quarter of a short run (``tools/bench start``). What
    was registered for the end is still done, and what still waits in an open file, be it one of a reference.py, is
    written. With other threads about, or a debugger or profiler that wants the last word, Python ends as ever.
    """
    if threading.active_count() > 1 or sys.gettrace() or sys.getprofile() or sys.flags.inspect:
        sys.exit(status)
    atexit._run_exitfuncs()
    for held in gc.get_objects():
        if type(held) in _WRITERS:
            with contextlib.suppress(OSError, ValueError):  # as Python does: it is closed, or nobody can be told
                held.flush()
    os._exit(status)


def status_of(arguments: Sequence[str] | None = None) -> int:
    """Run the command line; the exit status."""
    try:
        # not cli.main(): that would end the process itself when a pipe breaks
        with cli.make_context("vliwsim", list(sys.argv[1:] if arguments is None else arguments)) as context:
            result = cli.invoke(context)
        if sys.stdout is not None:  # it is where the caller has closed it
            sys.stdout.flush()
        return result if isinstance(result, int) else 0
    except VliwsimError as error:
        complain(error.problems)
        return error.status
    except click.exceptions.Exit as leave:
        return leave.exit_code
    except (click.Abort, KeyboardInterrupt):
        click.echo("stopped", err=True)
        return STOPPED
    except click.ClickException as error:
        complain([usage_problem(error, arguments)])
        return 2
    except MemoryError:
        complain(
            [problem("out-of-memory", "not enough memory", "what this machine has", "smaller sizes or memory.size")]
        )
        return 2
    except BrokenPipeError:
        _drop_output()  # whoever read it has gone
        return 0
    except OSError as error:
        if error.errno not in _FULL or error.filename is not None:
            raise
        _drop_output()
        said = f"standard output: {error.strerror}"
        complain([problem("output-file", said, "an output that can be written", "another place for it")])
        return 2


_FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO)


def _drop_output() -> None:
    """Let what is not yet written go nowhere, so that the interpreter's own flush at exit is quiet too."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def complain(problems: Iterable[Problem]) -> None:
    """Print problems on standard error, a blank line between them."""
    click.echo("\n\n".join(str(p) for p in problems), err=True)


def usage_problem(error: click.ClickException, arguments: Sequence[str] | None = None) -> Problem:
    """A mistake in the ``arguments``, as click found it, in our form."""
    context = getattr(error, "ctx", None)
    named = [word for word in (sys.argv[1:] if arguments is None else arguments)[:1] if word in COMMANDS]
    path = context.command_path if context else " ".join(["vliwsim", *named])
    remedy = f"{path} --help"
    if isinstance(error, click.NoSuchOption):
        options = [o for p in context.command.params for o in p.opts if o.startswith("-")] if context else []
        return problem(
            "no-such-option",
            f"option {error.option_name}",
            ", ".join(options),
            _near(error.option_name, options, remedy),
        )
    if isinstance(error, click.MissingParameter):
        what = error.param.human_readable_name if error.param else "an argument"
        return problem("missing-argument", f"nothing for {what}", f"{path} {what}", remedy)
    if isinstance(error, click.BadOptionUsage):
        message = error.format_message().rstrip(".")
        allowed = f"{error.option_name} and nothing" if "not take" in message else f"{error.option_name} and a value"
        return problem("bad-option", message[:1].lower() + message[1:], allowed, remedy)
    if isinstance(error, click.BadParameter):
        name = error.param.opts[0] if error.param else "an argument"
        kind = error.param.type if error.param else None
        found = error.message.rstrip(".").partition(" is not ")[0]
        return problem("bad-option", f"{name}: {found}", _allowed(kind), remedy)
    if isinstance(error, click.UsageError) and error.message.startswith("No such command"):
        given = error.message.split("'")[1] if "'" in error.message else ""
        near = _near(given, list(COMMANDS), "--help")
        return problem("no-such-command", f"command {given}", ", ".join(COMMANDS), f"vliwsim {near}")
    usage = context.get_usage().removeprefix("Usage: ") if context else f"{path} and its arguments"
    message = error.format_message().rstrip(".").removeprefix("Got ")
    return problem("bad-usage", message[:1].lower() + message[1:], " ".join(usage.split()), remedy)


def _allowed(kind: click.ParamType | None) -> str:
    """What an option of this type takes."""
    if isinstance(kind, click.Choice):
        return ", ".join(map(str, kind.choices))
    if isinstance(kind, (click.IntRange, click.FloatRange)):
        number = "a whole number" if isinstance(kind, click.IntRange) else "a number"
        return number if kind.min is None else f"{number}, {kind.min} or more"
    return str(getattr(kind, "allowed", "")) or f"a {getattr(kind, 'name', 'value')}"


def _near(text: str, known: Sequence[str], otherwise: str) -> str:
    import difflib

    return next(iter(difflib.get_close_matches(text, known, 1)), otherwise)
