"""``run --interrupt-at every``: one run interrupted wherever it can be, as text and as data."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import attrs
import click

if TYPE_CHECKING:
    from vliwsim.kernel.runner import KernelRun
    from vliwsim.regression.interrupts import Injected


class Moment(click.ParamType):
    """A cycle from 0, or ``every``."""

    name = "cycle"
    allowed = "a cycle, 0 or more, or `every`"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        if value == "every" or isinstance(value, int):
            return value
        if isinstance(value, str) and value.isascii() and value.isdigit() and len(value) < 19:
            return int(value)
        self.fail(f"{value}", param, ctx)


def injected(run: KernelRun, limit: int) -> Injected:
    """The run, which halted, interrupted at every cycle at which it can be."""
    from vliwsim.regression.interrupts import inject

    return inject(run.setup, limit)


def text(found: Injected) -> str:
    """What the interrupts did, no trailing newline."""
    lines = []
    if found.harms:
        lines.append(f"{len(found.harms)} of {found.tried} interrupts change what it gives: unsafe at")
        shown = {harm.place: harm for harm in reversed(found.harms)}
        lines += [f"  {shown[place]}" for place in found.unsafe[:12]]
        if len(found.unsafe) > 12:
            lines.append(f"  and {len(found.unsafe) - 12} more bundles")
    else:
        lines.append(f"{found.tried} interrupts, one at every cycle that allows one, change nothing.")
    if found.longest:
        stretch = found.longest
        place = f"{stretch.place} (cycle {stretch.first}) to {stretch.until}"
        lines.append(f"  longest stretch without a safe point: {stretch.cycles} cycles, {place}")
    return "\n".join(lines)


def data(found: Injected) -> dict[str, object]:
    """The same as JSON data."""
    return {
        "tried": found.tried,
        "unsafe": list(found.unsafe),
        "harms": [attrs.asdict(harm) for harm in found.harms],
        "longest": attrs.asdict(found.longest) if found.longest else None,
    }
