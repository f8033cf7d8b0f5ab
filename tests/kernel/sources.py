"""Kernels made from a few lines of header, for tests that do not run them, and small whole ones for tests that do."""

from __future__ import annotations

from pathlib import Path

from vliwsim.description.core import Cluster, Core, Latency, Memory, Slot
from vliwsim.description.operations import OperationSet
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import Kernel

TINY = Core(
    name="tiny",
    summary="one cluster, one slot",
    clusters=(Cluster("g", 24, 4, 2),),
    slots=(Slot("g.all", ("arithmetic", "control")),),
    latency=Latency(),
    memory=Memory(size=65536, banks=4, bank_width=4),
)


def header(text: str, core: Core = TINY, path: str | Path = "frame.vliw") -> Kernel:
    """A kernel with this interface and no code but an idle beat."""
    lines = [line.strip() for line in text.strip().splitlines()]
    source = "\n".join(["kernel frame", f"core {core.name}", *lines, "start:", "@0 idle", ""])
    return assemble(str(path), core, text=source, operations=OperationSet({}, {}, ""), allow_illegal=True)
