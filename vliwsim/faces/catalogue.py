"""``vliwsim cores``, ``ops`` and ``layout``: what is available."""

from __future__ import annotations

import difflib
from collections.abc import Sequence

import click

from vliwsim.description.core import Core
from vliwsim.description.operations import Operation, OperationSet
from vliwsim.faces.options import core_options
from vliwsim.problems import OptionError, problem

DEFAULT_CORE = "pair7"


@click.command(short_help="List the cores, or describe one.")
@click.argument("name", required=False)
@click.option("--set", "changes", multiple=True, metavar="KEY=VALUE", help="Change a value first: latency.load=5.")
def cores(name: str | None, changes: Sequence[str]) -> int:
    """List the shipped cores, or describe the core NAME (a shipped one or a .toml file)."""
    from vliwsim.description.corefile import core_names, load_core
    from vliwsim.faces.core_text import described

    if name is not None:
        click.echo(described(load_core(name, tuple(changes))))
        return 0
    if changes:
        raise OptionError(
            problem("bad-option", "--set without a core", "the name of a core", "vliwsim cores pair7 --set …")
        )
    names = core_names()
    width = max((len(n) for n in names), default=0)
    for each in names:
        click.echo(f"  {each:<{width}}  {load_core(each).summary}")
    return 0


@click.command(short_help="List the operations, or show one's manual page.")
@click.argument("name", required=False)
@core_options
def ops(name: str | None, core: str | None, changes: Sequence[str]) -> int:
    """List the operations by family, or show the manual page of the operation NAME.

    Without --core all shipped operations; with it those of that core, its own included, with latencies and slots.
    """
    chosen = _core(core, changes) if core or changes else None
    operations = _operations(chosen)
    if name is not None:
        click.echo(_page(operations, name, chosen))
        return 0
    click.echo(_listing(operations))
    return 0


def _core(core: str | None, changes: Sequence[str]) -> Core:
    from vliwsim.description.corefile import load_core

    return load_core(core or DEFAULT_CORE, tuple(changes))


def _operations(core: Core | None) -> OperationSet:
    """The operations of a core, or all shipped ones."""
    from vliwsim.description.places import isa_folder
    from vliwsim.description.tables import load_operations

    if core is not None:
        return load_operations(core.operations)
    return load_operations(tuple(sorted(path.stem for path in (isa_folder() / "operations").glob("*.toml"))))


def _find(operations: OperationSet, name: str) -> Operation:
    found = operations.by_name.get(name)
    if found is None:
        close = difflib.get_close_matches(name, operations.by_name, 3)
        found_text = f"no operation {name}"
        raise OptionError(
            problem("unknown-operation", found_text, "the names that vliwsim ops lists", ", ".join(close))
        )
    return found


def _listing(operations: OperationSet) -> str:
    families: dict[str, list[Operation]] = {}
    for operation in operations.by_name.values():
        families.setdefault(operation.family, []).append(operation)
    width = max((len(name) for name in operations.by_name), default=0)
    lines = []
    for family, members in families.items():
        lines += ["", f"{family}  ({len(members)})"]
        lines += [f"  {o.name:<{width}}  {o.summary}" for o in members]
    return "\n".join(lines[1:])


def _page(operations: OperationSet, name: str, core: Core | None) -> str:
    from vliwsim.description.manual import manual

    operation = _find(operations, name)
    page = manual(operation)
    if core is not None:
        slots = [s.name for s in core.slots if operation.operation_class in s.classes]
        latency = core.latency.of(operation.name, operation.operation_class)
        page.append((f"On {core.name}", f"latency {latency}; slots {', '.join(slots) or 'none'}"))
    width = max(len(heading) for heading, _ in page)
    lines = [operation.name, ""]
    for heading, text in page:
        first, *rest = text.splitlines() or [""]
        lines += [f"  {heading:<{width}}  {first}", *(f"  {'':<{width}}  {line}" for line in rest)]
    return "\n".join(lines)


@click.command(short_help="Draw the bit fields of a core's operation words.")
@click.argument("operation", required=False)
@core_options
def layout(operation: str | None, core: str | None, changes: Sequence[str]) -> int:
    """Draw the bit fields of a core's operation words, or only those of OPERATION. The core is pair7 unless named."""
    from vliwsim.program.encoding.layout import layout as layout_of
    from vliwsim.program.encoding.picture import picture

    chosen = _core(core, changes)
    operations = _operations(chosen)
    shape = layout_of(chosen, operations)
    click.echo(picture(shape, _find(operations, operation) if operation else None))
    return 0
