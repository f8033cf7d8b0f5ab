"""Where a wrong value came from: the store or landing that made it, and the source lines behind that, nearest first."""

from __future__ import annotations

import heapq
import re
import shlex
from bisect import bisect_right
from collections.abc import Iterable, Iterator

import attrs

from vliwsim.description.operations import Kind, Role
from vliwsim.kernel.diagnose import line_of, where
from vliwsim.kernel.elements import ELEMENTS
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.runner import KernelRun
from vliwsim.program.code import Instruction, Register
from vliwsim.program.effects import effects
from vliwsim.program.kernel import Kernel
from vliwsim.regression.observe import Seen, observe

LONGEST = 200_000
"""Cycles of a run that is traced back, at most."""
MOST_LINES = 20
"""Lines named behind one wrong value."""

DATA, ADDRESS, GUARD, CONTROL = 2, 5, 5, 10
"""How far an operand, an address, a guard and the way through the program count as being from what they decide."""
FIRST, WORD = 1, 3
"""How far the first time an instruction was carried out is from a later one, and a definition from where it is used."""


@attrs.frozen(order=True)
class Deed:
    """Instruction ``instruction`` of bundle ``bundle``, issued in ``beat``."""

    beat: int
    bundle: int
    instruction: int


@attrs.frozen
class Line:
    """One source line behind a value: its number, and what it does there (an operation, or an input's name)."""

    number: int
    does: str


@attrs.frozen
class Origin:
    """``maker``: the last store or landing of the element, ``cycle`` its cycle, None where nothing reached it."""

    maker: str
    cycle: int | None
    lines: tuple[Line, ...]

    def __str__(self) -> str:
        chain = " ← ".join(f"line {line.number} {line.does}" for line in self.lines)
        return f"{self.maker}\nbehind it: {chain}" if chain else self.maker


class History:
    """What a run did, kept so that values can be followed back."""

    def __init__(self, run: KernelRun) -> None:
        self.run, self.kernel = run, run.kernel
        self.landings: dict[int, list[tuple[int, Deed]]] = {}
        self.stores: list[tuple[Deed, int, int]] = []
        self.stored: dict[int, list[int]] = {}
        """For every byte address, indices of the stores that wrote it."""
        self.loads: dict[Deed, tuple[int, int]] = {}
        self.cycles: dict[int, int] = {}
        self.branches: list[Deed] = []
        self.frozen: dict[int, dict[str, int]] = {}
        self.touched: dict[int, dict[str, None]] = {}
        """For every bundle that froze for memory, the arrays it was at."""
        self.first: dict[tuple[int, int], Deed] = {}
        self.last: dict[tuple[int, int], Deed] = {}
        self.skipped: dict[int, Deed] = {}
        """For every register, the last instruction that would have written it had its guard been on."""
        self.skipped_stores: dict[tuple[int, int], Deed] = {}
        self.definitions = _definitions(run.kernel.text)
        self.source = run.kernel.text.splitlines()
        observe(run.setup, self._see, limit=min(LONGEST, run.cycles + 1))

    def _see(self, seen: Seen) -> None:
        self.cycles[seen.beat] = seen.cycle
        for number, _ in seen.landed:
            self._landing(seen, number, seen.beat)
        if seen.issued is None:
            if seen.cause in ("hold", "fresh"):
                self._lost(seen.bundle, seen.cause, 1)
            return
        for cause, cycles in seen.issued.freezes:
            self._lost(seen.bundle, cause, cycles)
            if cause in ("bank", "wait"):
                names = [self._area(touch.address) for touch in seen.issued.touches]
                self.touched.setdefault(seen.bundle, {}).update((name, None) for name in names if name)
        parts = seen.ready[seen.bundle].parts
        stores = iter(seen.issued.stores)
        for k, (part, on) in enumerate(zip(parts, seen.issued.on, strict=True)):
            deed = Deed(seen.beat, seen.bundle, k)
            if part.branches:
                self.branches.append(deed)
            if not on:
                for write in part.effects.writes:
                    self.skipped[write.register] = deed
                if part.operation.kind is Kind.STORE:
                    self.skipped_stores[seen.bundle, k] = deed
                continue
            self.first.setdefault((seen.bundle, k), deed)
            self.last[seen.bundle, k] = deed
            if part.operation.kind is Kind.STORE:
                address, size, _ = next(stores)
                for byte in range(address, address + size):
                    self.stored.setdefault(byte, []).append(len(self.stores))
                self.stores.append((deed, address, size))
            elif part.operation.kind is Kind.LOAD and part.reach and part.operation.access:
                reach = part.reach
                address_value = reach.address(seen.operands[reach.base], seen.operands[reach.step])
                if isinstance(address_value, int):
                    self.loads[deed] = address_value, part.operation.access.bytes
        if seen.issued.halts:
            for number, beat in sorted(seen.flight, key=lambda f: f[1]):
                self._landing(seen, number, beat)

    def _lost(self, bundle: int, cause: str, cycles: int) -> None:
        causes = self.frozen.setdefault(bundle, {})
        causes[cause] = causes.get(cause, 0) + cycles

    def _landing(self, seen: Seen, number: int, beat: int) -> None:
        site = seen.ready.sites[number]
        deed = Deed(beat - site.write.latency, site.bundle, site.instruction)
        self.landings.setdefault(site.write.register, []).append((beat, deed))

    def deeds_at(self, lines: Iterable[int]) -> list[Deed]:
        """The last deeds of the instructions at these source lines, or what would have been done next there."""
        wanted, end = set(lines), max(self.cycles, default=-1) + 1
        return [
            Deed(end, bundle, k)
            for bundle, places in enumerate(self.kernel.map.instruction_places)
            for k, place in enumerate(places)
            if place.line in wanted
        ]

    # --------------------------------------------------------------------------------------------------- going back

    def last_landing(self, register: int, beat: int) -> Deed | None:
        """What made the value that a read of ``register`` in ``beat`` gets; None if it is the start value."""
        landings = self.landings.get(register, [])
        place = bisect_right(landings, beat, key=lambda landing: landing[0])
        return landings[place - 1][1] if place else None

    def last_store(self, address: int, size: int, beat: int | None = None) -> Deed | None:
        """The last store into these bytes, before ``beat`` if one is named."""
        found: Deed | None = None
        for byte in range(address, address + size):
            for index in reversed(self.stored.get(byte, ())):
                deed = self.stores[index][0]
                if beat is None or deed.beat < beat:
                    found = deed if found is None else max(found, deed)
                    break
        return found

    def says(self, deed: Deed) -> str:
        return self.kernel.program.bundles[deed.bundle].instructions[deed.instruction].operation.name

    def place(self, deed: Deed) -> str:
        """``line 24, sh at loop@2, cycle 31``."""
        place = line_of(self.kernel, deed.bundle, deed.instruction)
        cycle = self.cycles.get(deed.beat)
        line = f"line {place.line}, " if place else ""
        return f"{line}{self.says(deed)} at {where(self.kernel, deed.bundle)}, cycle {cycle}"

    def lines(self, deeds: Iterable[Deed]) -> tuple[Line, ...]:
        """The source lines behind ``deeds``, nearest first, at most :data:`MOST_LINES`."""
        ahead: list[tuple[int, int, Deed | Line]] = []
        for order, deed in enumerate(deeds):
            heapq.heappush(ahead, (0, order, deed))
        for order, deed in enumerate(self._way()):
            heapq.heappush(ahead, (CONTROL, 1000 + order, deed))
        lines: dict[tuple[int, str], Line] = {}
        known: set[object] = set()
        order = 2000
        while ahead and len({n for n, _ in lines}) < MOST_LINES and len(known) < 4000:
            far, _, here = heapq.heappop(ahead)
            if here in known:
                continue
            known.add(here)
            if isinstance(here, Line):
                lines.setdefault((here.number, here.does), here)
                continue
            place = line_of(self.kernel, here.bundle, here.instruction)
            behinds = list(self._behind(here))
            if place:
                key = place.line, self.says(here)
                if key in lines and far > CONTROL:
                    continue  # a line met long ago leads nowhere new
                if key not in lines:
                    behinds += self._words(place.line)
                lines.setdefault(key, Line(*key))
            first = self.first.get((here.bundle, here.instruction))
            if first is not None and first not in known:
                behinds.append((FIRST, first))  # which reads what a loop began with
            for step, behind in behinds:
                order += 1
                heapq.heappush(ahead, (far + step, order, behind))
        return tuple(lines.values())

    def _way(self) -> list[Deed]:
        """The last branches of the run, one an instruction."""
        found: dict[tuple[int, int], Deed] = {}
        for deed in reversed(self.branches):
            found.setdefault((deed.bundle, deed.instruction), deed)
        return list(found.values())[:4]

    def _behind(self, deed: Deed) -> Iterator[tuple[int, Deed | Line]]:
        """What an instruction's operands, memory, address and guard come from, with how far each is."""
        instruction = self.kernel.program.bundles[deed.bundle].instructions[deed.instruction]
        if deed in self.loads:
            address, size = self.loads[deed]
            store = self.last_store(address, size, deed.beat)
            yield from [(DATA, store)] if store else self._array(address)
        for read in effects(self.kernel.core, instruction).reads:
            far = ADDRESS if read.operand in ("base", "step") else DATA
            yield from self._register(read.register, deed.beat, far)
        if instruction.guard:
            yield from self._register(instruction.guard.register, deed.beat, GUARD)

    def _words(self, number: int) -> Iterator[tuple[int, Line]]:
        """Definitions (``let``, ``name``) of the words in a source line."""
        for word in dict.fromkeys(_WORDS.findall(self.source[number - 1].split("#")[0])):
            if word in self.definitions:
                yield WORD, Line(self.definitions[word], word)

    def _register(self, register: int, beat: int, far: int) -> Iterator[tuple[int, Deed | Line]]:
        landing = self.last_landing(register, beat)
        if landing is not None:
            yield far, landing
            return
        for item in self.kernel.items:
            if item.register == register and item.place.file == self.kernel.path and item.kind != "returns":
                yield far, Line(item.place.line, item.name)

    def _area(self, address: int) -> str:
        """The name of the array at an address, empty where there is none."""
        for area in self.run.setup.areas:
            if area.start <= address < area.start + area.bytes + area.over:
                return area.name
        return ""

    def _array(self, address: int) -> Iterator[tuple[int, Line]]:
        name = self._area(address)
        if name:
            yield DATA, self.item_line(name)

    def item_line(self, name: str) -> Line:
        """The header line of an interface item."""
        return Line(interface_of(self.kernel).items[name].place.line, name)

    def last_stores(self) -> list[Deed]:
        """The last time each store was carried out."""
        stores = {(deed.bundle, deed.instruction): deed for deed, _, _ in self.stores}
        return [*self.skipped_stores.values(), *stores.values()]


def origin_of_output(history: History, name: str, index: int | None) -> Origin:
    """Where element ``index`` of output ``name`` (or the value, for None) came from."""
    kernel = history.kernel
    item = interface_of(kernel).items[name]
    if item.size is None:
        assert item.register is not None
        deed, end = None, max(history.cycles, default=0) + 1_000_000
        deed = history.last_landing(item.register, end)
        shown = f"{name} ({kernel.core.register_names[item.register]})"
        verb = "written by"
        skipped = history.skipped.get(item.register)
        behind = [skipped] if skipped and (deed is None or skipped > deed) else []
    else:
        area, size = history.run.setup.area(name), ELEMENTS[item.type].bytes
        deed = history.last_store(area.start + size * (index or 0), size)
        shown, verb = f"{name}[{index}]", "stored by"
        behind = history.last_stores() if deed is None else []
    if deed is None:
        lines = (Line(item.place.line, name), *history.lines(behind))
        return Origin(f"nothing was written to {shown}", None, lines)
    return Origin(f"{verb} {history.place(deed)}", history.cycles.get(deed.beat), history.lines([deed, *behind]))


_WORDS = re.compile(r"[A-Za-z_]\w*")
_DEFINITION = re.compile(r"\s*(?:let|name)\s+([A-Za-z_]\w*)\s*=")


def _definitions(text: str) -> dict[str, int]:
    """The lines of ``let`` and ``name``, by what they define."""
    found: dict[str, int] = {}
    for number, line in enumerate(text.splitlines(), 1):
        if match := _DEFINITION.match(line):
            found.setdefault(match[1], number)
    return found


def unread(kernel: Kernel) -> list[Line]:
    """Instructions all of whose results go to registers that nothing reads and that are no outputs."""
    read = {item.register for item in kernel.items if item.kind in ("returns", "changes") and item.size is None}
    written: list[tuple[int, int, list[int]]] = []
    for bundle, content in enumerate(kernel.program.bundles):
        for k, instruction in enumerate(content.instructions):
            found = effects(kernel.core, instruction)
            read |= {each.register for each in found.reads}
            read |= {instruction.guard.register} if instruction.guard else set()
            read |= _targets(instruction)
            if found.writes:
                written.append((bundle, k, [write.register for write in found.writes]))
    lines: dict[Line, None] = {}
    for bundle, k, registers in written:
        place = line_of(kernel, bundle, k)
        if place and not read & set(registers):
            names = ", ".join(kernel.core.register_names[register] for register in registers)
            lines[Line(place.line, names)] = None
    return list(lines)


def _targets(instruction: Instruction) -> set[int]:
    """The register that an indirect branch goes to."""
    return {
        place.number
        for operand, place in zip(instruction.operation.operands, instruction.places, strict=True)
        if operand.role is Role.TARGET and isinstance(place, Register)
    }


def lost_cycles(history: History) -> list[str]:
    """Where the run stalled, most first: ``112 bank: loop@0, lines 24, 25, at x (line 5)``."""
    rows = []
    for bundle, causes in history.frozen.items():
        places = history.kernel.map.instruction_places[bundle]
        numbers = sorted({place.line for place in places})
        for cause, cycles in causes.items():
            lines = f"line{'s' if len(numbers) > 1 else ''} {', '.join(map(str, numbers))}" if numbers else "no line"
            arrays = [history.item_line(name) for name in history.touched.get(bundle, ())]
            lines += "".join(f", at {array.does} (line {array.number})" for array in arrays)
            rows.append((-cycles, bundle, f"{cycles} {cause}: {where(history.kernel, bundle)}, {lines}"))
    return [text for _, _, text in sorted(rows)]


def debug_line(kernel: Kernel, case: str) -> str:
    """A ready command that goes to the place."""
    parts = ["vliwsim", "debug", kernel.path]
    if [kernel.core.name] != list(kernel.cores_named[:1]):
        parts += ["--core", kernel.core.name]
    return shlex.join([*parts, "--case", case])
