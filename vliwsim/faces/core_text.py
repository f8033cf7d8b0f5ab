"""A core as text, in the order its questions are asked: what is there, how long it takes, what is in the way."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence

from vliwsim.description.core import Core

EARLY = {"old": "gets the old value", "warn": "gets the old value, with a note", "reject": "is a hazard"}


def described(core: Core) -> str:
    """The whole description, no trailing newline."""
    parts = {
        "clusters": [
            f"{c.name}  {c.registers} registers, {c.read_ports} read ports, {c.write_ports} write ports"
            for c in core.clusters
        ],
        "slots": list(_slots(core)),
        "latency": [_latency(core)],
        "links": [_link(link.source, link.reader, link.operands, link.shared, link.fresh) for link in core.links]
        or ["none"],
        "guards": [ranges(core.guards) or "none"],
        "branch": [_branch(core)],
        "issue": [f"{core.issue.rule}; a register read before its result lands {EARLY[core.issue.early]}"],
        "memory": list(_memory(core)),
        "words": [_words(core)],
        "interrupt": [f"{core.interrupt.service} beats of service"],
        "zero": [" ".join(core.zero_registers)] if core.zero_registers else [],
        "operations": [", ".join(core.operations)],
    }
    lines = [f"{core.name}: {core.summary}", ""]
    for title, texts in parts.items():
        for number, text in enumerate(texts):
            lines.append(f"  {title if number == 0 else '':<10}  {text}")
    return "\n".join(lines)


def _slots(core: Core) -> Iterator[str]:
    width = max(len(s.name) for s in core.slots)
    for slot in core.slots:
        text = f"{slot.name:<{width}}  {' '.join(slot.classes)}"
        if slot.crossing:
            text += f"; {' and '.join(slot.crossing)} may come over a link"
        busy = [f"{name} {beats}" for name, beats in slot.busy.items()]
        yield text + (f"; takes the unit for {', '.join(busy)} beats" if busy else "")


def _latency(core: Core) -> str:
    named = [f"{name} {beats}" for name, beats in (*core.latency.classes.items(), *core.latency.operations.items())]
    return ", ".join([*named, f"all else {core.latency.otherwise}"])


def _link(source: str, reader: str, operands: int, shared: bool, fresh: str) -> str:
    things = ("register" if shared else "operand") + ("" if operands == 1 else "s")
    text = f"{reader} reads {operands} {things} of {source} a bundle"
    late = {"stall": "one that landed in this beat costs a cycle", "reject": "none that landed in this beat"}.get(fresh)
    return f"{text}; {late}" if late else text


def _branch(core: Core) -> str:
    branch = core.branch
    text = f"latency {branch.latency}, {'may' if branch.overlap else 'may not'} overlap in flight"
    return f"{text}, {_cycles(branch.taken_penalty)} more when taken" if branch.taken_penalty else text


def _memory(core: Core) -> Iterator[str]:
    memory = core.memory
    banks = "1 bank" if memory.banks == 1 else f"{memory.banks} banks"
    yield f"{memory.size} bytes, {memory.endianness}-endian, {banks} of {memory.bank_width} bytes"
    conflict = "freezes the core" if memory.conflict == "stall" else "is a hazard"
    broadcast = ", loads of the same words count once" if memory.broadcast else ""
    yield f"two accesses to a bank in a beat: {conflict}{broadcast}"
    yield f"a misaligned access {'is a hazard' if memory.misaligned == 'reject' else 'is split'}"
    for wait in memory.waits:
        yield f"{wait.name}: {wait.bytes} bytes from {wait.start:#x} cost {_cycles(wait.cycles)} more an access"


def _words(core: Core) -> str:
    words = core.words
    may = "may" if words.straddle else "may not"
    text = f"{words.bits} bits, fetched in groups of {words.group}; a bundle {may} straddle groups"
    freeze = _cycles(words.straddle_freeze) if words.straddle_freeze else ""
    return f"{text}; a branch to one that does costs {freeze}" if freeze else text


def ranges(names: Iterable[str]) -> str:
    """Register names with runs drawn together: ``g16..g23 h4``."""
    runs: list[list[tuple[str, int]]] = []
    for name in names:
        cluster, number = name[:1], int(name[1:])
        if runs and runs[-1][-1] == (cluster, number - 1):
            runs[-1].append((cluster, number))
        else:
            runs.append([(cluster, number)])
    return " ".join(_run(run) for run in runs)


def _run(run: Sequence[tuple[str, int]]) -> str:
    first, last = (f"{cluster}{number}" for cluster, number in (run[0], run[-1]))
    return first if len(run) == 1 else f"{first}..{last}"


def _cycles(count: int) -> str:
    return "1 cycle" if count == 1 else f"{count} cycles"
