"""The assembler: a source file to a kernel whose program is what the decoder makes of the encoded image."""

from __future__ import annotations

import gc
import os
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from vliwsim.description.core import Core
from vliwsim.description.files import open_regular
from vliwsim.description.operations import Kind, OperationSet
from vliwsim.problems import CoreError, ImageError, OptionError, Place, problem
from vliwsim.program.assembly.legality import Judge
from vliwsim.program.assembly.operands import Ready
from vliwsim.program.assembly.schedule import Section as Stretch
from vliwsim.program.assembly.schedule import schedule
from vliwsim.program.assembly.slots import NoSlots, SlotChooser
from vliwsim.program.code import Instruction, Program
from vliwsim.program.encoding.layout import MOST_OPERATIONS
from vliwsim.program.kernel import ItemTag, Kernel, Section, SourceMap
from vliwsim.program.source.complaints import Complaints
from vliwsim.program.source.interface import interface, judge_type
from vliwsim.program.source.parser import parse
from vliwsim.program.source.scope import Scope
from vliwsim.program.source.tree import Tree

MOST_BYTES = 8 << 20
"""The largest source file that is read, in bytes."""
MOST_LINES = 200_000
MANY_LINES = 1000
"""From here on assembling is worth some care with memory."""

_LINE_END = re.compile("\r\n?|[\x0b\x0c\x1c-\x1e\x85\u2028\u2029]")

LoadCore = Callable[..., Core]
Draft = list[tuple[Ready, int]] | int
"""A bundle's operations with their slots, in slot order, or the beats of an idle run."""


def assemble(
    path: str | os.PathLike[str],
    core: Core | None = None,
    *,
    text: str | None = None,
    load_core: LoadCore | None = None,
    changes: Mapping[str, Any] | Sequence[str] = (),
    operations: OperationSet | None = None,
    allow_illegal: bool = False,
) -> Kernel:
    """Assemble one source file.

    core: the core to assemble for; None: the first one that the header names, from ``load_core(name, changes)``
    (:func:`vliwsim.description.corefile.load_core` when not given). text: the source itself; ``path`` then only names
    it. operations: the core's operations where they are already loaded. allow_illegal: leave to the machine what it
    judges itself (slots, guards, read ports, links, the end of the code); pins then decide.

    Raises :class:`SourceError` with all problems of the file, :class:`OptionError` when the file cannot be read,
    :class:`CoreError` and :class:`OperationError` for a bad core or table.
    """
    name = os.fspath(path)
    source = read_source(name) if text is None else _lines_as_seen(text)
    lines = source.splitlines()
    with _collector_paused(len(lines) > MANY_LINES):
        return _assemble(name, source, lines, core, load_core, changes, operations, allow_illegal)


def _assemble(
    name: str,
    source: str,
    lines: list[str],
    core: Core | None,
    load_core: LoadCore | None,
    changes: Mapping[str, Any] | Sequence[str],
    operations: OperationSet | None,
    allow_illegal: bool,
) -> Kernel:
    complaints = Complaints(name, lines)
    if len(lines) > MOST_LINES:
        complaints.add("too-long", (MOST_LINES + 1, 1), f"{len(lines)} lines", f"at most {MOST_LINES}")
        complaints.raise_if_any()
    tree = parse(lines, complaints)
    _check_header(tree, complaints)
    if core is None:
        core = _core(tree, load_core, changes, complaints)
    elif changes:
        from vliwsim.description.corefile import evolve

        core = evolve(core, changes)
    if tree.cores and core.name not in [named.text.removesuffix(".toml") for named in tree.cores]:
        where, found = tree.cores[0].where, f"assembled for {core.name}"
        complaints.add("other-core", where, found, "named here: " + ", ".join(c.text for c in tree.cores), kind="note")
    if operations is None:
        from vliwsim.description.tables import load_operations

        operations = load_operations(core.operations)
    return _Assembly(name, source, core, operations, tree, complaints, allow_illegal).kernel()


@contextmanager
def _collector_paused(pause: bool) -> Iterator[None]:
    """Keep the garbage collector from looking through a growing program again and again: a third of the time."""
    pause = pause and gc.isenabled()
    if pause:
        gc.disable()
    try:
        yield
    finally:
        if pause:
            gc.enable()


def read_source(path: str) -> str:
    """The text of a source file; raises :class:`OptionError` when it cannot be read as text."""
    try:
        with open_regular(path) as file:
            data = file.read(MOST_BYTES + 1)
    except (OSError, ValueError) as error:
        said = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise OptionError(problem("unreadable", f"{path}: {said}", "a source file (.vliw)")) from None
    if len(data) > MOST_BYTES:
        raise OptionError(problem("unreadable", f"{path} has more than {MOST_BYTES} bytes", f"at most {MOST_BYTES}"))
    try:
        return _lines_as_seen(data.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise OptionError(
            problem(
                "not-text", f"byte {data[error.start]:#04x}, which is no UTF-8", "UTF-8 text", place=Place(path, line)
            )
        ) from None


def _lines_as_seen(text: str) -> str:
    """The text with lines as an editor counts them: what else Python takes for the end of one becomes a blank."""
    return _LINE_END.sub(lambda found: "\n" if found[0][0] == "\r" else " ", text)


def _check_header(tree: Tree, complaints: Complaints) -> None:
    if tree.kernel is None:
        complaints.add("no-kernel", (1, 1), "no kernel line", "kernel NAME", "kernel " + _stem(complaints.file))
    if not tree.cores:
        complaints.add("no-core", (1, 1), "no core line", "core NAME", "core pair7")
    if not tree.body:
        complaints.add(
            "no-code", (max(1, len(complaints.lines)), 1), "no label and no operation", "start: and a schedule"
        )


def _stem(file: str) -> str:
    word = "".join(c if c.isalnum() else "_" for c in Path(file).stem)
    return word if word.isidentifier() else "frame"


def _core(tree: Tree, load: LoadCore | None, changes: Any, complaints: Complaints) -> Core:
    """The first core that the header names."""
    if not tree.cores:
        complaints.raise_if_any()
    if load is None:
        from vliwsim.description.corefile import load_core

        load = load_core
    named = tree.cores[0]
    beside = named.text.endswith(".toml")  # a file of the user's own, in the source's folder
    try:
        return load(str(Path(complaints.file).parent / named.text) if beside else named.text, changes)
    except CoreError as error:
        first = error.problems[0]
        if len(error.problems) > 1 or first.place or first.key:
            raise
        complaints.add("unknown-core", named.where, first.found, first.allowed, first.remedy)
        for line in tree.items:
            judge_type(line, complaints)
        complaints.raise_if_any()
        raise


class _Assembly:
    """One file on one core, from its tree to the kernel."""

    def __init__(
        self,
        path: str,
        text: str,
        core: Core,
        operations: OperationSet,
        tree: Tree,
        complaints: Complaints,
        allow_illegal: bool,
    ) -> None:
        self.path, self.text, self.core, self.operations = path, text, core, operations
        self.tree, self.complaints, self.allow_illegal = tree, complaints, allow_illegal
        self.scope = Scope(core, operations, complaints)
        self.chooser = SlotChooser(core)
        self.judge = Judge(core, self.chooser, complaints)
        self.drafts: list[Draft] = []
        self.at: list[tuple[str, int]] = []
        """For each draft, its label and beat."""
        self.first_draft: dict[str, int] = {}

    def kernel(self) -> Kernel:
        """The kernel; raises with every problem of the file."""
        tree, scope = self.tree, self.scope
        scope.expect([*tree.lets, *tree.names])
        for let in tree.lets:
            scope.define(let)
        for name in tree.names:
            scope.define_name(name)
        header = interface(tree, scope)
        sections = schedule(tree.body, scope)
        for section in sections:
            if not self.complaints.full:
                self._place(section)
        self._check_ends(sections)
        self.complaints.raise_if_any()
        assert tree.kernel
        program, image, drafts = self._encode()
        return Kernel(
            name=tree.kernel.text,
            path=self.path,
            text=self.text,
            core=self.core,
            operations=self.operations,
            cores_named=tuple(core.text for core in tree.cores),
            items=header.items,
            needs=header.needs,
            budget=header.budget,
            constants=scope.constants,
            register_names=scope.names,
            image=image,
            program=program,
            map=self._map(sections, program, drafts),
            notes=tuple(self.complaints.notes),
        )

    def _place(self, section: Stretch) -> None:
        """Slots for the bundles of a section, and idle runs for its gaps."""
        label = section.label.text
        self.first_draft.setdefault(label, len(self.drafts))
        free_at: dict[int, int] = {}
        end = 0
        for beat in sorted(section.bundles):
            if beat > end:
                self._draft(beat - end, label, end)
            placed = self._slots(section.bundles[beat], beat, free_at)
            self._draft(placed, label, beat)
            end = beat + 1
        if section.beats > end:
            self._draft(section.beats - end, label, end)

    def _draft(self, draft: Draft, label: str, beat: int) -> None:
        self.drafts.append(draft)
        self.at.append((label, beat))

    def _slots(self, bundle: list[Ready], beat: int, free_at: dict[int, int]) -> list[tuple[Ready, int]]:
        """The bundle's operations with slots, in slot order; what is illegal is told.

        bundle: at least one operation.

        free_at: for slots with units that are not pipelined, the beat of this section from which they are free.
        """
        if len(bundle) > MOST_OPERATIONS:
            found = f"{len(bundle)} operations in one bundle"
            self.judge.illegal("bundle-too-long", bundle[MOST_OPERATIONS], found, f"at most {MOST_OPERATIONS}")
            return []
        busy = frozenset(slot for slot, free in free_at.items() if free > beat) if free_at else frozenset()
        try:
            placed = list(zip(bundle, self.chooser.choose(bundle, busy)))
        except NoSlots as none:
            self.judge.no_slot(bundle, none.crowds)
            return []
        if len(placed) > 1:
            placed.sort(key=lambda pair: pair[1])
        for ready, slot in placed:
            if self.core.slots[slot].busy:
                free_at[slot] = beat + self.core.busy(slot, ready.operation.name, ready.operation.operation_class)
        if not self.allow_illegal:
            self.judge.judge(placed)
        return placed

    def _check_ends(self, sections: Sequence[Stretch]) -> None:
        """The last label has code, and something halts."""
        if sections and not sections[-1].beats:
            label = sections[-1].label
            self.complaints.add(
                "no-code", label.where, f"nothing behind {label.text}", "an operation or idle", "@0 halt"
            )
        halts = any(
            ready.operation.kind is Kind.HALT
            for section in sections
            for bundle in section.bundles.values()
            for ready in bundle
        )
        if sections and not halts and not self.complaints.problems:
            line = len(self.complaints.lines)
            kind = "note" if self.allow_illegal else "illegal"
            self.complaints.add(
                "no-halt", (line, 1), "no halt", "a halt on the way out", "halt in the last bundle", kind
            )

    def _encode(self) -> tuple[Program, bytes, tuple[int, ...]]:
        """The decoded program, the image file's bytes, and each draft's first bundle."""
        from vliwsim.description.corefile import core_digest
        from vliwsim.program.encoding.decode import decode
        from vliwsim.program.encoding.encode import encode
        from vliwsim.program.encoding.image import to_bytes

        drafts: list[list[Instruction] | int] = [
            draft
            if isinstance(draft, int)
            else [Instruction(ready.operation, slot, ready.places, ready.guard, ready.targets) for ready, slot in draft]
            for draft in self.drafts
        ]
        digest = core_digest(self.core, self.operations.digest)
        try:
            image = encode(self.core, self.operations, drafts, self.first_draft, digest, self._where)
        except ImageError as error:
            for fault in error.problems:
                place = fault.place or self.complaints.place(1)
                self.complaints.add(fault.name, place, fault.found, fault.allowed, fault.remedy, "illegal")
            self.complaints.raise_if_any()
            raise
        return decode(self.core, self.operations, image), to_bytes(image), image.draft_bundles

    def _where(self, draft: int, instruction: int) -> Place | None:
        found = self.drafts[draft]
        if isinstance(found, int):
            return None
        return self._instruction_place(found[instruction][0])

    def _instruction_place(self, ready: Ready) -> Place:
        mnemonic = ready.call.mnemonic
        return Place(self.path, mnemonic.line, mnemonic.column, len(mnemonic.text))

    def _map(self, sections: Sequence[Stretch], program: Program, first_bundles: Sequence[int]) -> SourceMap:
        """The way back from bundles to the source."""
        where: list[tuple[str, int]] = []
        places: list[tuple[Place, ...]] = []
        items: list[tuple[ItemTag | None, ...]] = []
        known: dict[int, Place] = {}
        ends = [*first_bundles[1:], len(program.bundles)]
        for draft, (label, beat), first, end in zip(self.drafts, self.at, first_bundles, ends):
            for bundle in program.bundles[first:end]:
                where.append((label, beat))
                beat += bundle.beats
                if isinstance(draft, int):
                    places.append(())
                    items.append(())
            if not isinstance(draft, int):
                for ready, _ in draft:
                    if id(ready.call) not in known:
                        known[id(ready.call)] = self._instruction_place(ready)
                places.append(tuple([known[id(ready.call)] for ready, _ in draft]))
                items.append(tuple([ready.item for ready, _ in draft]))
        stretches = tuple(
            Section(
                section.label.text,
                first_bundles[self.first_draft[section.label.text]],
                section.beats,
                Place(self.path, section.label.line, section.label.column, len(section.label.text)),
            )
            for section in sections
        )
        tagged = any(any(bundle) for bundle in items)
        return SourceMap(stretches, tuple(where), tuple(places), tuple(items) if tagged else ())
