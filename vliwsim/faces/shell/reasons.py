"""Reasons as indented sentences: origins, uses, verdicts, stalls."""

from __future__ import annotations

from collections.abc import Iterable

from vliwsim.description.values import Undefined, Value
from vliwsim.faces.shell.lines import Line, clipped, tint, wrapped
from vliwsim.faces.shell.view import CAUSES, store_words
from vliwsim.shell.forms import element_text, value_text
from vliwsim.shell.judging import Verdict
from vliwsim.shell.nodes import Leaf, Origin, Source, Step, reached_elements
from vliwsim.shell.readers import Use, Uses
from vliwsim.shell.session import Session
from vliwsim.shell.stalls import Stall

ROWS = 40
"""Lines of one answer to ``why``, its summary not counted."""
DEEPEST = 14
"""Levels that are indented; what lies deeper is summed up."""


# ----------------------------------------------------------------------------------------------------------- origins


def why(session: Session, origin: Origin, width: int, rows: int = ROWS) -> list[Line]:
    """An origin as indented sentences, repeats folded, then what it all depends on."""
    return _Telling(session, origin, width, rows).lines()


class _Telling:
    """One answer in the making."""

    def __init__(self, session: Session, origin: Origin, width: int, rows: int) -> None:
        self.session, self.origin, self.width, self.rows = session, origin, width, rows
        self.out: list[Line] = []
        self.told: set[int] = set()
        self.folded: set[int] = set()
        self.cut = False

    def lines(self) -> list[Line]:
        root = self.origin.root
        if not root.nodes:
            return [[("", f"  {root.name} = {value_text(root.value or 0)}, from nowhere that was followed")]]
        self._source(root, 1)
        if self.cut:
            self._say(1, [("faint", f"… the first {self.rows} lines")], always=True)
        self.out += self._summary()
        return self.out

    def _say(self, depth: int, line: Line, always: bool = False) -> None:
        if len(self.out) >= self.rows and not always:
            self.cut = True
            return
        self.out.append(clipped([("", "  " * depth), *line], self.width))

    def _source(self, source: Source, depth: int) -> None:
        """All that one source came from."""
        for node in source.nodes:
            if len(self.out) >= self.rows:
                self.cut = True
                return
            if isinstance(node, Leaf):
                if node.kind != "constant":  # the operation's own text has it
                    self._say(depth, self._leaf(source, node))
            else:
                self._step(source, node, depth)

    def _leaf(self, source: Source, leaf: Leaf) -> Line:
        if leaf.kind == "element":
            array = self.session.names.arrays[leaf.array]
            assert isinstance(leaf.value, int)
            return [("", f"{leaf.what} = {element_text(array.element, leaf.value)}, as given")]
        if leaf.kind == "undefined":
            return [("wrong", f"undefined: {leaf.what}")]
        value = "" if source.value is None else f"{source.name} = {value_text(source.value)}, "
        says = {"supposed": f"supposed: {leaf.what}"}
        return [("", value + says.get(leaf.kind, leaf.what))]

    def _step(self, source: Source, step: Step, depth: int) -> None:
        head = self._head(source, step)
        if id(step) in self.told:
            self._say(depth, [*head[: len(step.values) * 2 - 1 or 1], ("faint", ", told above")])
            return
        if id(step) in self.folded:
            self._say(depth, [*head[: len(step.values) * 2 - 1 or 1], ("faint", ", one of the run below")])
            return
        self.told.add(id(step))
        self._say(depth, head)
        if depth >= DEEPEST and step.sources:
            self._beyond(step, depth + 1)
            return
        chain = self._chain(step)
        if len(chain) > 1:
            self.folded |= {id(one) for one in chain}
        self._operands(step, depth + 1, chain[0] if chain else None)
        if len(chain) > 1:
            last = chain[-1]
            text = f"… {len(chain)} more {self._name(step)} to {source.name}, cycles {last.cycle} to {chain[0].cycle}"
            self._say(depth + 1, [("", text), ("faint", self._passes(last, chain[0]))])
            self.told |= {id(one) for one in chain}
            self._operands(last, depth + 2, None)
        elif chain:
            self._source_to(step, chain[0], depth + 1)

    def _source_to(self, step: Step, node: Step, depth: int) -> None:
        for source in step.sources:
            if node in source.nodes and source.role in ("operand", "memory"):
                self._step(source, node, depth)
                return

    def _operands(self, step: Step, depth: int, left_out: Step | None) -> None:
        """What the operation used, but for the one that the chain goes on with; guards and addresses where data."""
        if not step.sources and step.cycle < 0:
            self._say(depth, [("faint", "not followed further back")])
        told: set[tuple[str, tuple[int, ...]]] = set()
        for source in sorted(step.sources, key=lambda s: s.role == "memory"):
            nodes = [n for n in source.nodes if n is not left_out]
            key = source.name, tuple(id(n) for n in source.nodes)
            if source.role not in ("operand", "memory") or key in told:
                continue
            told.add(key)
            if len(nodes) > 1 and all(isinstance(n, Leaf) and n.kind == "element" for n in nodes):
                self._say(depth, [("", self._elements([n for n in nodes if isinstance(n, Leaf)]))])
            else:
                self._source(Source(source.name, source.role, source.value, nodes), depth)
        for source in step.sources:
            if source.role in ("guard", "address") and any(isinstance(n, Step) and n.given for n in source.nodes):
                self._say(depth, [("faint", f"its {source.role}:")])
                self._source(source, depth + 1)

    def _elements(self, leaves: list[Leaf]) -> str:
        array = self.session.names.arrays[leaves[0].array]
        texts = [
            f"{leaf.what} = {element_text(array.element, leaf.value)}" for leaf in leaves if isinstance(leaf.value, int)
        ]
        return f"{', '.join(texts[:4])}{f' and {len(texts) - 4} more' if len(texts) > 4 else ''}, as given"

    def _beyond(self, step: Step, depth: int) -> None:
        elements = reached_elements(self.origin, step)
        text = f"… goes on, back to {ranges(elements)}" if elements else "… goes on"
        self._say(depth, [("faint", text)])

    def _chain(self, step: Step) -> list[Step]:
        """The run of operations of the same name behind this one that each feed the next: latest first."""
        chain: list[Step] = []
        here = step
        while True:
            following = self._same(here)
            met = id(following) in self.told or id(following) in self.folded
            if following is None or following.cycle < 0 or met:
                return chain
            chain.append(following)
            here = following

    def _same(self, step: Step) -> Step | None:
        """The operation of the same name and register that made one of the operands."""
        registers = set(step.values)
        for source in step.sources:
            if source.role != "operand":
                continue
            for node in source.nodes:
                if isinstance(node, Step) and self._alike(node, step) and registers & set(node.values):
                    return node
        return None

    def _alike(self, one: Step, other: Step) -> bool:
        return one.updates == other.updates and self._name(one) == self._name(other)

    def _name(self, step: Step) -> str:
        return self.session.machine.ready[step.bundle].parts[step.instruction].operation.name

    def _registers(self, step: Step) -> str:
        return " and ".join(self.session.layout.register(r) for r in sorted(step.values))

    def _passes(self, first: Step, last: Step) -> str:
        if first.bundle != last.bundle or not self._repeats(first):
            return ""
        return f", passes {first.counted} to {last.counted} of {self.session.layout.section_at(first.bundle).label}"

    def _repeats(self, step: Step) -> bool:
        return self.session.layout.repeats(self.session.layout.section_at(step.bundle))

    def _head(self, source: Source, step: Step) -> Line:
        """``g6 = 9, at loop@0 pass 7, cycle 14 (line 27): dot.h2 g6, g2, g2``."""
        layout = self.session.layout
        if step.stored is not None and source.role == "memory":
            value, address, size = step.stored
            words = store_words(self.session, address, size, value)
            if source is self.origin.root and isinstance(source.value, int):
                array = self.session.names.arrays[source.name.partition("[")[0]]
                words = f"{source.name} = {element_text(array.element, source.value)}"
            shown: Line = [("", words)]
        elif step.values:
            shown = []
            for register, held in sorted(step.values.items()):
                name = layout.register(register)
                shown += [("", " and ")] if shown else []
                shown.append((tint(register, held), f"{name} = {value_text(held)}"))
        else:
            shown = [("", source.name)]
        text = layout.text(step.bundle, step.instruction)
        return [*shown, ("faint", f",{where(self.session, step)}"), ("", f": {text}")]

    def _summary(self) -> list[Line]:
        """One sentence: how much was followed, and to which inputs."""
        origin = self.origin
        count = len(origin.steps)
        operations = f"{count} operation{'s' * (count != 1)}"
        rest = f"back to {ranges(origin.elements)}" if origin.elements else "with no element of a given array"
        text = f"{operations} in all, {rest}."
        if not origin.whole:
            text = f"{operations} followed, {rest}; what lies further back was not."
        return wrapped(text, self.width)


def where(session: Session, step: Step | Use) -> str:
    """`` at loop@0 pass 7, cycle 14 (line 27)``."""
    layout = session.layout
    line = layout.line(step.bundle, step.instruction)
    source = f" (line {line})" if line else ""
    if step.cycle < 0:
        return f" at {layout.where(step.bundle)}{source}"
    counted = f" pass {step.counted}" if layout.repeats(layout.section_at(step.bundle)) else ""
    return f" at {layout.where(step.bundle, step.within)}{counted}, cycle {step.cycle}{source}"


def ranges(elements: Iterable[tuple[str, int]]) -> str:
    """``x[0:4], x[7]``: sets of elements as slices."""
    by_array: dict[str, list[int]] = {}
    for name, index in sorted(elements):
        by_array.setdefault(name, []).append(index)
    texts = []
    for name, indices in by_array.items():
        runs: list[list[int]] = []
        for index in indices:
            if runs and runs[-1][1] == index:
                runs[-1][1] = index + 1
            else:
                runs.append([index, index + 1])
        shown = [f"{name}[{a}]" if b == a + 1 else f"{name}[{a}:{b}]" for a, b in runs]
        more = f" and {len(indices) - sum(b - a for a, b in runs[:6])} more of {name}" if len(runs) > 6 else ""
        texts.append(", ".join(shown[:6]) + more)
    return "; ".join(texts)


# -------------------------------------------------------------------------------------------------------------- uses


def uses(session: Session, name: str, value: Value | None, found: Uses, width: int, shown: int = 12) -> list[Line]:
    """Who reads a value next, and what ends its life."""
    head = name if value is None else f"{name} = {value_text(value)}"
    if not found.found:
        lines: list[Line] = [[("", f"  {head} is read by nothing")]]
    else:
        count = len(found.found) + found.more
        lines = [[("", f"  {head} is read by {count} operation{'s' * (count != 1)}")]]
    for use in found.found[:shown]:
        text = session.layout.text(use.bundle, use.instruction)
        how = "" if use.operands == ("memory",) else f", as {' and '.join(use.operands)}"
        off = ", its guard off" if use.off else ""
        lines.append(clipped([("", f"    {text}"), ("faint", f"{how}{off}{where(session, use)}")], width))
    if len(found.found) + found.more > shown:
        lines.append([("faint", f"    … {len(found.found) + found.more - shown} more")])
    lines.append([("", f"  {_ended(session, found)}")])
    return lines


def _ended(session: Session, found: Uses) -> str:
    if found.why == "replaced" and found.by is not None:
        text = session.layout.text(*found.by)
        return f"until cycle {found.cycle}, when {text} replaces it"
    if found.why == "end":
        return f"and it is still there when the run ends in cycle {found.cycle}"
    return f"looked up to cycle {found.cycle}"


# ------------------------------------------------------------------------------------------------------------ verdicts


def verdict(session: Session, judged: Verdict, step: Step | None, width: int) -> list[Line]:
    """One output so far; ``step`` is what made the first wrong element, if anything did."""
    difference = judged.difference
    scalar = judged.name in session.names.scalars
    if difference is None:
        if judged.written == 0:
            what = "is judged when the run is over" if scalar else f"has none of its {judged.size} elements yet"
        elif scalar:
            what = "is what the reference says"
        else:
            what = f"has {judged.written} of {judged.size} elements, all as the reference says"
        return [[("", f"  {judged.name} {what}")]]
    name = judged.name if difference.index is None else f"{judged.name}[{difference.index}]"
    got = "undefined" if difference.got is None else difference.got
    text = f"{name} is {got}, the reference says {difference.expected}"
    if not scalar:
        text += f"; {difference.differing} of {judged.written} elements differ"
    lines: list[Line] = [clipped([("wrong", f"  {text}")], width)]
    if step is None:
        lines.append([("", "  nothing has stored it" if not scalar else "  nothing was sent to its register")])
        return lines
    made = "stored by" if step.stored is not None or not scalar else "made by"
    operation = session.layout.text(step.bundle, step.instruction)
    lines.append(clipped([("", f"  {made} {operation}"), ("faint", where(session, step))], width))
    lines.append([("", f"  at wrong {judged.name} goes there, why {name} says what it is made of")])
    return lines


# -------------------------------------------------------------------------------------------------------------- stalls


def stall(session: Session, found: Stall, width: int) -> list[Line]:
    """Why a cycle issued nothing."""
    layout = session.layout
    waiting = found.cause in ("hold", "fresh", "interrupt")
    bundle = layout.where(found.bundle, found.within)
    left = f", {found.left} cycles to go" if found.left > 1 else ""
    who = f"{bundle} waits" if waiting else f"behind {bundle}"
    lines = wrapped(f"cycle {found.cycle} issues nothing: {CAUSES[found.cause]}, {who}{left}", width)
    for role, flight in found.flights:
        site = flight.site
        name = layout.register(flight.register)
        text = layout.text(site.bundle, site.instruction)
        line = layout.line(site.bundle, site.instruction)
        says = (
            f"    {name}, "
            + (f"{'an' if role == 'operand' else 'a'} {role}, " if found.cause == "hold" else "")
            + f"is sent by {text}"
        )
        more = f", lands in beat {flight.lands}{f' (line {line})' if line else ''}"
        lines.append(clipped([("", says), ("faint", more)], width))
    for slot, beat in found.units:
        lines.append([("", f"    {slot} is taken until beat {beat - 1}")])
    if found.ports:
        lines.append([("", "    its results would not fit the write ports beside those in flight")])
    for name in found.crossing:
        lines.append([("", f"    {name} landed in this very beat and crosses to another cluster")])
    banks: dict[int, int] = {}
    for access in found.accesses:
        for bank in access.banks:
            banks[bank] = banks.get(bank, 0) + 1
    for access in found.accesses:
        if found.cause == "bank" and not any(banks[bank] > 1 for bank in access.banks):
            continue
        text = layout.text(found.bundle, access.instruction)
        array = session.names.array_at(access.address)
        at = f"{array[0].name}[{array[1]}]" if array else f"{access.address:#x}"
        wait = f", {access.wait} cycles of wait" if access.wait else ""
        numbers = ", ".join(map(str, access.banks))
        says = f"    {text} at {at}, bank{'s' * (len(access.banks) > 1)} {numbers}{wait}"
        lines.append(clipped([("", says)], width))
    return lines


def undefined_words(value: Value) -> str:
    """A value for a sentence."""
    return "undefined" if isinstance(value, Undefined) else value_text(value)
