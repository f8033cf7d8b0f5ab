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


SUM = """
kernel  total
core    pair7
given   x     : i16[n]          at g10
given   trips : i32 = n - 1     in g16
returns sum   : i32             in g4
needs   n >= 1
budget  5 * n + 2
start:
@0 li g4, 0
loop:
@0 lh g2, [g10 then +2]
@1 count g16, loop
@4 add g4, g4, g2
finish:
@0 halt
"""
"""Adds up an array, five beats an element."""

DOUBLE = """
kernel  double
core    pair7
given   x     : i16[n]      at g10
given   trips : i32 = n - 1 in g16
returns y     : i16[n]      at g11 within 1 lsb
needs   n >= 1
start:
@0 idle
loop:
@0 lh g2, [g10 then +2]
@2 count g16, loop
@4 add g3, g2, g2
@5 sh g3, [g11 then +2]
finish:
@0 halt
"""
"""Doubles every element, six beats each."""

REFERENCES = {
    "total": "def total(x):\n    return int(x.astype(int).sum())\n",
    "double": "import numpy as np\ndef double(x):\n    return (x.astype(int) * 2).astype(np.int16)\n",
}


def write(folder: Path, source: str, reference: str | None = None) -> Path:
    """A kernel folder with this source and its reference (by default the one above); the source's path."""
    name = source.split()[1]
    path = folder / f"{name}.vliw"
    path.write_text(source)
    code = REFERENCES.get(name) if reference is None else reference
    if code:
        (folder / "reference.py").write_text(code)
    return path
