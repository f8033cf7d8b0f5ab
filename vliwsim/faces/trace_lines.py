"""A trace as text: one line a beat, saying what landed and what issued."""

from __future__ import annotations

from collections.abc import Iterator

from vliwsim.description.values import Undefined, Value
from vliwsim.kernel.diagnose import where
from vliwsim.machine.recorder import Record
from vliwsim.program.disassembly import text_of
from vliwsim.program.kernel import Kernel


def lines(kernel: Kernel, record: Record) -> Iterator[str]:
    """The lines of one beat: the beat itself, then one for each freeze behind it."""
    names = kernel.core.register_names
    landed = ", ".join(f"{names[landing.register]} = {_value(landing.value)}" for landing in record.landings)
    text = f"{record.cycle:>8}  {where(kernel, record.bundle, record.within):<14}  {_did(kernel, record)}"
    yield f"{text}  <- {landed}" if landed else text
    for cause, cycles in record.freezes:
        yield f"{record.cycle + 1:>8}  {'':<14}  frozen for {cycles}: {cause}"


def _did(kernel: Kernel, record: Record) -> str:
    if record.cause:
        return f"no issue: {record.cause}"
    instructions = kernel.program.bundles[record.bundle].instructions
    if not instructions:
        return "idle"
    texts = [text_of(kernel.core, i, kernel.program.labels) for i in instructions]
    return " ; ".join(text if on else f"({text})" for text, on in zip(texts, record.on))


def _value(value: Value) -> str:
    return repr(value) if isinstance(value, Undefined) else f"{value:#x}"
