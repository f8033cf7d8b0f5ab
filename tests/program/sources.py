"""Sources of a few lines, assembled for a shipped core, for the tests of the language and the assembler."""

from __future__ import annotations

from functools import cache

from vliwsim.description.core import Core
from vliwsim.description.corefile import load_core
from vliwsim.description.operations import OperationSet
from vliwsim.description.tables import load_operations
from vliwsim.program.assembler import assemble
from vliwsim.program.code import Instruction
from vliwsim.program.disassembly import text_of
from vliwsim.program.kernel import Kernel

FILE = "sensor.vliw"


@cache
def shipped(name: str) -> Core:
    return load_core(name)


@cache
def operations(families: tuple[str, ...]) -> OperationSet:
    return load_operations(families)


def source(text: str, core: str = "pair7") -> str:
    """``text`` as it stands when it has a kernel line; else code behind a small header."""
    return text if text.lstrip().startswith("kernel") else f"kernel sensor\ncore {core}\nstart:\n{text}"


def kernel(text: str, core: str | Core = "pair7", **more: bool) -> Kernel:
    """The kernel of a source, see :func:`source`."""
    on = shipped(core) if isinstance(core, str) else core
    return assemble(FILE, on, text=source(text, on.name), operations=operations(on.operations), **more)


def instructions(built: Kernel) -> list[Instruction]:
    return [instruction for bundle in built.program.bundles for instruction in bundle.instructions]


def lines(built: Kernel, slots: bool = True) -> list[str]:
    """What each bundle of the decoded program is: ``label@beat  operation on slot ; …``, idle words as their length."""
    labels = built.program.labels
    told = []
    for bundle, (label, beat) in zip(built.program.bundles, built.map.bundle_at, strict=True):
        code = " ; ".join(text_of(built.core, i, labels, slot=slots) for i in bundle.instructions)
        told.append(f"{label}@{beat}  {code or f'idle {bundle.beats}'}")
    return told
