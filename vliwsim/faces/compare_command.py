"""``vliwsim compare``: kernels of one interface side by side."""

from __future__ import annotations

import sys
from collections.abc import Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import click

from vliwsim.faces.options import given_values
from vliwsim.problems import OptionError, problem

if TYPE_CHECKING:
    from vliwsim.regression.comparison import Compared, Comparison

SHOWN = 12
"""Sizes in the table, at most."""


@click.command(short_help="Set kernels of one interface side by side.")
@click.argument("kernels", nargs=-1, required=True, metavar="A B…")
@click.option("--core", metavar="NAME|FILE", help="The core for all of them, instead of the first each names.")
@click.option("--give", multiple=True, metavar="NAME=VALUE", help="Inputs instead of the cases: x=FILE.npy, n=40.")
@click.option("--case", "names", multiple=True, metavar="NAME", help="Only this case of A; may be given again.")
@click.option("--sizes", metavar="N,N,…", help="The sizes to time; without it small ones, neighbours and large ones.")
@click.option("--no-reference", is_flag=True, help="Do not load A's reference.py (which is Python code).")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object instead of the table.")
def compare(kernels: Sequence[str], core: str | None, as_json: bool, **options: Any) -> int:
    """Run A and B… on the same inputs: are the outputs equal, how many cycles does each take, how large is each?

    A folder stands for all sources in it. All must have the inputs and outputs of the first. The inputs are the cases
    of A, those named, or those given; and a random one for each size. Status 1 if they differ.
    """
    from vliwsim.kernel.cases import find_case
    from vliwsim.kernel.loading import assemble_source
    from vliwsim.kernel.reference import load_reference
    from vliwsim.regression.comparison import compare_kernels
    from vliwsim.regression.sources import targets

    sources = list(dict.fromkeys(target.source for path in kernels for target in targets([path])))
    if len(sources) < 2:
        raise OptionError(problem("bad-option", f"one kernel, {sources[0]}", "two or more", "vliwsim compare A B"))
    loaded = [assemble_source(source, core) for source in sources]
    reference = None if options["no_reference"] else load_reference(loaded[0])
    chosen = [find_case(loaded[0], reference, name) for name in options["names"]] or None
    if options["give"]:
        chosen = [*(chosen or []), _given(loaded[0], reference, given_values(options["give"]))]
    result = compare_kernels(loaded, reference, cases=chosen, sizes=_sizes(options["sizes"]), about=_silent)
    if as_json:
        from vliwsim.faces.json_text import json_text

        click.echo(json_text(_plain(result)))
    else:
        click.echo("\n".join(screen(result)))
    return 0 if result.equal else 1


def _silent(text: str) -> None:
    if sys.stderr.isatty():
        sys.stderr.write(f"\r\x1b[K{text[:100]}\r")
        sys.stderr.flush()


def _given(kernel: Any, reference: Any, given: Mapping[str, Any]) -> Any:
    from vliwsim.kernel.binding import bind
    from vliwsim.kernel.cases import case_with
    from vliwsim.kernel.interface import interface_of

    arrays = {item.name for item in interface_of(kernel).arrays}
    values = {n: [v] if n in arrays and isinstance(v, (int, float)) else v for n, v in given.items()}
    case = case_with(kernel, reference, None, values)
    bind(kernel, case.inputs)  # what was asked for must fit; cases that do not are only left out
    return case


def _sizes(text: str | None) -> list[int]:
    if text is None:
        return []
    parts = [part.strip() for part in text.split(",") if part.strip()]
    if not parts or not all(part.isascii() and part.isdigit() and len(part) < 9 for part in parts):
        raise OptionError(problem("bad-option", f"--sizes {text}", "whole numbers with commas", "--sizes 16,32,64"))
    return sorted({int(part) for part in parts})


def _plain(result: Comparison) -> dict[str, object]:
    """The comparison as JSON data."""
    return {
        "equal": result.equal,
        "size": result.size,
        "cases": result.cases,
        "kernels": [
            {
                "name": kernel.name,
                "core": kernel.core,
                "equal": kernel.equal,
                "first_difference": kernel.first_difference,
                "code_bytes": kernel.code_bytes,
                "cycles": dict(kernel.cycles),
                "cycles_by_size": {str(size): cycles for size, cycles in kernel.by_size.items()},
                "formula": kernel.fitted.formula if kernel.fitted else None,
                "outliers": [[size, str(more)] for size, more in kernel.fitted.outliers] if kernel.fitted else [],
                "hottest": kernel.hottest,
                "slots": dict(kernel.slots),
                "moved": [list(each) for each in kernel.moved],
            }
            for kernel in result.kernels
        ],
    }


def screen(result: Comparison) -> Iterator[str]:
    """One screen: equal or not, cycles against size, formula, code, slots."""
    from rich.console import Console

    yield _verdict(result)
    yield ""
    console = Console(width=max(100, 16 * len(result.kernels) + 24), color_system=None, highlight=False)
    with console.capture() as capture:
        console.print(_table(result))
    yield from (line.rstrip() for line in capture.get().rstrip().splitlines())
    remarks = [remark for kernel in result.kernels for remark in _remarks(kernel)]
    yield from ["", *remarks] if remarks else []


def _verdict(result: Comparison) -> str:
    first, *others = result.kernels
    different = [kernel for kernel in others if kernel.equal is False]
    runs = f"{result.cases} cases and {len(result.sizes)} sizes" if result.sizes else f"{result.cases} cases"
    if first.equal is False:
        return f"{first.name} itself fails: {first.first_difference}."
    if not different:
        return f"Equal on {runs}, wherever needs allows them."
    return f"Different: {'; '.join(f'{k.name}: {k.first_difference}' for k in different)}."


def _table(result: Comparison) -> Any:
    from rich.table import Table

    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0))
    table.add_column("")
    for kernel in result.kernels:
        table.add_column(kernel.name, justify="right")
    for size in _shown(result):
        cells = [str(k.by_size.get(size, "–")) for k in result.kernels]
        table.add_row(f"{result.size} = {size}", *cells)
    if any(k.fitted for k in result.kernels):
        table.add_row("cycles", *(k.fitted.formula if k.fitted else "–" for k in result.kernels))
    table.add_row("code bytes", *(str(k.code_bytes) for k in result.kernels))
    if len({k.core for k in result.kernels}) > 1:
        table.add_row("core", *(k.core for k in result.kernels))
    names = list(dict.fromkeys(name for k in result.kernels for name in k.slots))
    for name in names:
        table.add_row(name, *(f"{100 * k.slots[name]:.0f} %" if k.slots.get(name) else "·" for k in result.kernels))
    return table


def _shown(result: Comparison) -> list[int]:
    """The sizes for the table: the smallest, and those that most kernels take."""
    sizes = list(result.sizes)
    if len(sizes) <= SHOWN:
        return sizes
    taken = sorted(sizes, key=lambda s: (-sum(s in k.by_size for k in result.kernels), s))[: SHOWN - 3]
    return sorted({*sizes[:2], *taken, sizes[-1]})


def _remarks(kernel: Compared) -> Iterator[str]:
    fitted = kernel.fitted
    if fitted and fitted.outliers:
        where = f" ({fitted.pattern})" if fitted.pattern else ""
        odd = ", ".join(f"{fitted.size} = {size} {float(more):+g}" for size, more in fitted.outliers[:6])
        more = f" and {len(fitted.outliers) - 6} more" if len(fitted.outliers) > 6 else ""
        yield f"  {kernel.name}: beside the formula{where}: {odd}{more}"
    if kernel.moved:
        some = ", ".join(f"{array} {shift} bytes further on {more:+d}" for array, shift, more in kernel.moved[:4])
        yield f"  {kernel.name}: cycles when an array stands elsewhere: {some}"
    if kernel.refused:
        yield f"  {kernel.name}: {kernel.refused} of the inputs are not what it needs"
