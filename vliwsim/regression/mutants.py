"""Wrong copies of a source, one change each: does some case find it? Those that none finds say what the cases miss."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

import attrs

from vliwsim.kernel.binding import bind
from vliwsim.kernel.engine import simulate
from vliwsim.kernel.runner import KernelRun, judged
from vliwsim.problems import SourceError, VliwsimError
from vliwsim.program.assembler import assemble
from vliwsim.program.kernel import Kernel
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.parser import parse
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.tree import Call, Node, Repeat, Stamp

if TYPE_CHECKING:
    from vliwsim.regression.judge import Judge


@attrs.frozen
class Mutant:
    """``text`` is the source with one change, on ``line``, that ``says`` describes."""

    line: int
    says: str
    text: str


def mutants(kernel: Kernel) -> Iterator[Mutant]:
    """Every mutant of a source: stamps a beat earlier and later, other registers, then sections a beat longer."""
    lines = kernel.text.splitlines()
    tree = parse(lines, Complaints(kernel.path, lines))
    for piece, kind in _pieces(tree.body):
        if kind == "stamp":
            for step in ("+ 1", "- 1"):
                yield _replaced(lines, piece, f"({piece.text}) {step}", f"@{piece.text} {step}")
        else:
            yield from _registers(kernel, lines, piece)
    yield from _waits(kernel, lines)


def _pieces(body: Sequence[Node]) -> Iterator[tuple[Piece, str]]:
    for node in body:
        if isinstance(node, Stamp):
            if node.expression.text:
                yield node.expression, "stamp"
        elif isinstance(node, Call):
            for operand in node.operands:
                yield operand, "operand"
            if node.guard:
                yield node.guard, "operand"
        elif isinstance(node, Repeat):
            yield from _pieces(node.body)


def _replaced(lines: Sequence[str], piece: Piece, new: str, says: str) -> Mutant:
    line = lines[piece.line - 1]
    start = piece.column - 1
    changed = [*lines[: piece.line - 1], line[:start] + new + line[start + len(piece.text) :], *lines[piece.line :]]
    return Mutant(piece.line, says, "\n".join(changed) + "\n")


_WORD = re.compile(r"[A-Za-z_]\w*(?:\{[^{}]*\})?")


def _registers(kernel: Kernel, lines: Sequence[str], operand: Piece) -> Iterator[Mutant]:
    """The operand with each register in it replaced by its neighbour."""
    core = kernel.core
    for match in _WORD.finditer(operand.text):
        word = match[0]
        computed = re.fullmatch(r"([a-z])\{(.*)\}", word)
        number = core.register_numbers.get(word, kernel.register_names.get(word))
        if computed:
            new = f"{computed[1]}{{({computed[2]}) + 1}}"
        elif number is not None:
            cluster = core.register_clusters[number]
            following = number + 1 < len(core.register_names) and core.register_clusters[number + 1] == cluster
            new = core.register_names[number + 1 if following else number - 1]
        else:
            continue
        part = Piece(word, operand.line, operand.column + match.start())
        yield _replaced(lines, part, new, f"{word} → {new}")


def _waits(kernel: Kernel, lines: Sequence[str]) -> Iterator[Mutant]:
    """Each section one beat longer."""
    sections = sorted(kernel.map.sections, key=lambda s: s.place.line)
    ends = [*(section.place.line for section in sections[1:]), len(lines) + 1]
    for section, end in zip(sections, ends):
        if lines[section.place.line - 1].split("#")[0].strip() != f"{section.label}:":
            continue
        changed = [*lines[: end - 1], f"@{section.beats} idle", *lines[end - 1 :]]
        yield Mutant(section.place.line, f"{section.label} one beat longer", "\n".join(changed) + "\n")


def judged_mutants(judge: Judge, most: int) -> dict[str, Any]:
    """Up to ``most`` mutants, spread evenly over the source, run on the cases until one finds each; as plain data."""
    kernel = judge.kernel
    runs = sorted(_right_runs(judge), key=lambda run: run.cycles)
    every = list(mutants(kernel))
    step = max(1.0, len(every) / most)
    chosen = [every[int(k * step)] for k in range(min(most, len(every)))]
    counts = {"made": 0, "refused": 0, "found": 0}
    survivors = []
    for number, mutant in enumerate(chosen):
        judge.about(f"mutant {number + 1} of {len(chosen)}")
        try:
            made = assemble(kernel.path, kernel.core, text=mutant.text, operations=kernel.operations)
        except SourceError:
            counts["made"] += 1
            counts["refused"] += 1
            continue
        if made.image == kernel.image:
            continue
        counts["made"] += 1
        if any(_finds(made, run) for run in runs):
            counts["found"] += 1
        else:
            survivors.append({"line": mutant.line, "says": mutant.says})
    return {**counts, "cases": len(runs), "survivors": survivors}


def _right_runs(judge: Judge) -> Iterator[KernelRun]:
    for case in judge.cases:
        try:
            run = judge.run(case)
        except VliwsimError:
            continue
        if run.ok:
            yield run


def _finds(made: Kernel, run: KernelRun) -> bool:
    """Does a case that the kernel itself passes fail on this copy of it?"""
    setup = run.setup
    inputs: dict[str, Any] = {item.name: setup.arrays[item.name] for item in _given(made) if item.size is not None}
    inputs |= {item.name: setup.values[item.name] for item in _given(made) if item.size is None}
    inputs |= setup.sizes
    limit = 4 * run.cycles + 1000
    expected = run.expected if run.expected is not None else run.outputs
    bound = bind(made, inputs)
    return not judged(bound, simulate(bound, limit=limit), case=run.case, expected=expected, limit=limit).ok


def _given(kernel: Kernel) -> list[Any]:
    return [i for i in kernel.items if i.kind == "changes" or (i.kind == "given" and i.value is None)]
