"""From words back to bundles: the decoder, which accepts exactly what the encoder makes.

Every accepted image is the encoding of the program it decodes to, word for word; anything else is refused, with all
complaints at once. The fast path only reads; what is wrong with a word is found out after it has failed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind, Operation, OperationSet, Role
from vliwsim.problems import ImageError, Problem, problem
from vliwsim.program.code import (
    Address,
    Bundle,
    Guard,
    Immediate,
    Instruction,
    Mode,
    Place,
    Program,
    Register,
    indirect,
)
from vliwsim.program.encoding.encode import fits, place_after
from vliwsim.program.encoding.image import Image
from vliwsim.program.encoding.layout import (
    MODES,
    MOST_OPERATIONS,
    RING_MODE,
    AddressFields,
    Field,
    Format,
    Layout,
    Part,
    layout,
)

MOST_PROBLEMS = 20
"""Complaints given for one image; a last one counts the rest."""


def decode(core: Core, operations: OperationSet, image: Image, digest: str | None = None) -> Program:
    """The program in ``image``.

    digest: of this core and its operations; an image with another one is refused (None: not compared).

    Raises :class:`ImageError` with up to 20 problems: ``other-core``, ``other-words``, ``no-code``, ``bad-word``,
    ``names-twice``, ``cut-off``, ``bundle-too-long``, ``slot-order``, ``bad-padding``, ``target-nowhere``,
    ``label-nowhere``, ``targets-of-nothing``.
    """
    rule = core.words
    if digest is not None and image.digest != digest:
        found = f"an image for {image.core} ({image.digest[:12] or 'no digest'}); this is {core.name} ({digest[:12]})"
        raise ImageError(
            problem("other-core", found, "an image for this very core", "assemble the source for this core")
        )
    if image.bits != rule.bits:
        found = f"words of {image.bits} bits, for core {image.core}"
        raise ImageError(problem("other-words", found, f"words of {rule.bits} bits, as {core.name} has them"))
    if not image.words:
        raise ImageError(problem("no-code", "an image without words", "at least one bundle"))
    return _Decoder(layout(core, operations), image).program()


class _Bad(Exception):
    """A word, or a part of it, that the encoder would not have made."""

    def __init__(self, found: str, allowed: str, name: str = "bad-word") -> None:
        super().__init__(found)
        self.name = name
        self.found = found
        self.allowed = allowed


class _Decoder:
    def __init__(self, of: Layout, image: Image) -> None:
        self.layout = of
        self.core = of.core
        self.image = image
        self.words = image.words
        self.problems: list[Problem] = []
        self.known: dict[tuple[int, int | None], Instruction] = {}
        """Instructions by word (``last`` cleared) and extension: loops written out repeat themselves."""
        self.targets: list[tuple[int, int]] = []
        """Direct targets, and named ones: (index of the word, byte address)."""
        self.named = {at: tuple([Immediate(place) for place in places]) for at, places in image.targets.items()}
        """Named targets whose branch has not come yet, by the byte address of its word."""

    def program(self) -> Program:
        bundles = tuple(self._bundles())
        starts = {bundle.address for bundle in bundles}
        for at, target in self.targets:
            if target not in starts:
                self._complain(
                    at, "target-nowhere", f"a branch to byte {target}", "the address of a bundle's first word"
                )
        for address in self.named:
            found = f"places to go to of byte {address}"
            self.problems.append(problem("targets-of-nothing", found, "the address of a branch to a register"))
        for name, address in self.image.labels.items():
            if address not in starts:
                found = f"label {name} at byte {address}"
                self.problems.append(problem("label-nowhere", found, "the address of a bundle's first word"))
        if self.problems:
            more = len(self.problems) - MOST_PROBLEMS
            rest = [problem("more-problems", f"{more} more problems in this image")] if more > 0 else []
            raise ImageError([*self.problems[:MOST_PROBLEMS], *rest])
        return Program(self.core, bundles, self.image.code_bytes, dict(self.image.labels))

    def _complain(self, at: int, name: str, found: str, allowed: str) -> None:
        here = f"word {at} (byte {at * self.core.words.bytes}): "
        self.problems.append(problem(name, here + found, allowed))

    def _bundles(self) -> Iterator[Bundle]:
        """The bundles; padding is checked and left out."""
        rule, words, total = self.core.words, self.words, len(self.words)
        idle = self.layout.code.mask << self.layout.code.low
        at = position = end = 0
        while at < total:
            if words[at] == 1:  # padding
                at += 1
                if at == total:
                    self._complain(at - 1, "bad-padding", "padding at the end", "padding before a bundle that needs it")
                continue
            start, beats = at, 1
            if words[at] & idle:
                at, instructions = self._operations(at)
            else:
                instructions, beats = (), self._beats(at)
                at += 1
            length = at - start
            if place_after(end, length, rule) != start:
                found, allowed = f"a bundle at word {start}", f"word {place_after(end, length, rule)}"
                self._complain(start, "bad-padding", found, allowed)
            straddles = start // rule.group != (at - 1) // rule.group
            if straddles and not rule.straddle and length > rule.group:
                self._complain(start, "bundle-too-long", f"{length} words in one bundle", f"{rule.group} words")
            yield Bundle(start * rule.bytes, position, instructions, beats, length, straddles)
            position += beats
            end = at

    def _beats(self, at: int) -> int:
        """Beats of the idle word at ``at``."""
        word, beats = self.words[at], self.layout.beats
        if word != 1 | beats.take(word) << beats.low or not beats.take(word):
            allowed = "last = 1, beats from 1 up, all other bits 0"
            self._complain(at, "bad-word", f"operation 0 in {word:#x}, which is no idle word", allowed)
        return beats.take(word) or 1

    def _operations(self, start: int) -> tuple[int, tuple[Instruction, ...]]:
        """The index behind the bundle that starts at ``start``, and its instructions."""
        words, total, known, at = self.words, len(self.words), self.known, start
        instructions: list[Instruction] = []
        operations, last = 0, False
        while not last:
            if at == total:
                self._complain(
                    at - 1, "cut-off", "the end of the code inside a bundle", "last = 1 in its last operation"
                )
                break
            word, here, extension = words[at], at, None
            at += 1
            if word & 2:
                if at == total:
                    self._complain(here, "cut-off", "the end of the code", "an extension word")
                    break
                extension = words[at]
                at += 1
            last = bool(word & 1)
            operations += 1
            instruction = known.get((word & -2, extension))
            if instruction is None:
                instruction = self._instruction(here, word & -2, extension)
                if instruction is None:
                    continue
            if instruction.operation.kind is Kind.BRANCH:
                instruction = self._target(here, instruction)
            if instructions and instruction.slot < instructions[-1].slot:
                found = f"slot {instruction.slot} behind slot {instructions[-1].slot}"
                self._complain(here, "slot-order", found, "operations in slot order")
            instructions.append(instruction)
        if operations > MOST_OPERATIONS:
            self._complain(start, "bundle-too-long", f"{operations} operations", f"at most {MOST_OPERATIONS}")
        return at, tuple(instructions)

    def _target(self, at: int, instruction: Instruction) -> Instruction:
        """The branch with the targets it names, if it does."""
        for operand, place in zip(instruction.operation.operands, instruction.places):
            if operand.role is Role.TARGET and isinstance(place, Immediate):
                self.targets.append((at, place.value))
        byte = at * self.core.words.bytes
        if byte not in self.named or indirect(instruction) is None:
            return instruction
        named = self.named.pop(byte)
        self.targets += [(at, place.value) for place in named]
        return instruction._replace(targets=named)

    def _instruction(self, at: int, word: int, extension: int | None) -> Instruction | None:
        """The instruction of a word not met before; None, with all complaints, when it is bad."""
        reader = _Reader(self.layout, word, extension)
        try:
            found = reader.instruction()
        except _Bad:
            for bad in reader.faults():
                self._complain(at, bad.name, bad.found, bad.allowed)
            return None
        self.known[word, extension] = found
        return found


class _Reader:
    """Reads one operation word, ``last`` cleared, with its extension word if it has one."""

    def __init__(self, of: Layout, word: int, extension: int | None) -> None:
        self.layout = of
        self.core = of.core
        self.word = word
        self.extension = extension
        self.given: Part | None = None
        """The part that turned out to be an immediate."""
        self.short = Field("immediate", 0, 0)
        """The short immediate of this word."""

    def instruction(self) -> Instruction:
        """The instruction; raises :class:`_Bad` at the first thing wrong."""
        shape = self._format()
        slot, guard = self._slot(), self._guard()
        self._spare()
        places = tuple([self._place(part, shape) for part in shape.parts])
        self._unused_immediate()
        instruction = Instruction(shape.operation, slot, places, guard)
        self._named_once(shape.operation, places)
        return instruction

    def faults(self) -> list[_Bad]:
        """Everything wrong with a word that :meth:`instruction` has refused."""
        self.given = None
        found: list[_Bad] = []

        def try_out(step: Callable[[], object]) -> object:
            try:
                return step()
            except _Bad as bad:
                found.append(bad)
                return None

        try_out(self._slot)
        try_out(self._guard)
        shape = try_out(self._format)
        if isinstance(shape, Format):
            try_out(self._spare)
            places = [try_out(lambda part=part: self._place(part, shape)) for part in shape.parts]  # type: ignore[misc]
            try_out(self._unused_immediate)
            if not found:
                try_out(lambda: self._named_once(shape.operation, tuple(places)))  # type: ignore[arg-type]
        return found

    def _format(self) -> Format:
        code = self.layout.code.take(self.word)
        operation = self.layout.operations.by_code.get(code)
        if operation is None:
            raise _Bad(f"operation code {code:#x}", f"the code of an operation of {self.core.name}")
        shape = self.layout.format_of(operation)
        self.short = shape.immediate
        if shape.ring is not None and shape.ring_immediate is not None:
            mode = next(part.address.mode for part in shape.parts if part.address)
            if mode.take(self.word) == RING_MODE:
                self.short = shape.ring_immediate
        return shape

    def _slot(self) -> int:
        slot = self.layout.slot.take(self.word)
        if slot >= len(self.core.slots):
            raise _Bad(f"slot {slot}", f"0 to {len(self.core.slots) - 1}")
        return slot

    def _guard(self) -> Guard | None:
        code = self.layout.guard.take(self.word)
        if not code:
            return None
        if code > 2 * self.layout.immediate_code:
            raise _Bad(f"guard code {code}", f"0 to {2 * self.layout.immediate_code}")
        return Guard((code - 1) // 2, code % 2 == 0)

    def _spare(self) -> None:
        end = self.short.end
        if self.word >> end:
            raise _Bad(f"{self.word >> end:#x} above bit {end - 1}", "0 where the operation has no field")

    def _place(self, part: Part, shape: Format) -> Place:
        if part.address is not None:
            return self._address(part, part.address, shape)
        word, field = self.word, part.register
        if field is None:
            return self._constant(part)
        number = word >> field.low & field.mask
        half = None if part.half is None else part.half.take(word)
        if part.immediate and number == self.layout.immediate_code:
            if half:
                raise _Bad(f"{part.operand.name} half = 1 beside an immediate", "0")
            return self._immediate(part)
        self._register(field, number)
        if part.operand.pair and not self.layout.pair_starts[number]:
            raise _Bad(f"{part.operand.name} = {self.core.register_names[number]}", "the even register of a pair")
        return Register(number, half)

    def _register(self, field: Field, number: int) -> None:
        if number >= self.layout.immediate_code:
            raise _Bad(f"{field.name} = {number}", f"a register, 0 to {self.layout.immediate_code - 1}")

    def _address(self, part: Part, fields: AddressFields, shape: Format) -> Address:
        base, mode = fields.base.take(self.word), fields.mode.take(self.word)
        step, ring = fields.step.take(self.word), 0
        self._register(fields.base, base)
        if mode == RING_MODE:
            assert shape.ring is not None
            ring = shape.ring.take(self.word)
            if not ring:
                raise _Bad("a ring of 1 byte", "ring = 1 to 31 in mode 3")
        if part.immediate and step == self.layout.immediate_code:
            by: Register | Immediate = self._immediate(part)
        else:
            self._register(fields.step, step)
            by = Register(step)
        return Address(base, Mode.AFTER if ring else MODES[mode], by, 1 << ring if ring else 0)

    def _constant(self, part: Part) -> Immediate:
        """A constant, from its own field or as the immediate."""
        if part.constant is not None:
            field, value = part.constant, part.constant.take(self.word)
            negative = part.operand.type[0] == "i" and value >> field.width - 1
            return Immediate(value - (1 << field.width) & 0xFFFFFFFF if negative else value)
        found = self._immediate(part)
        if not part.allows(found.value):
            raise _Bad(f"{part.operand.name} = {found.value:#x}", f"a constant of type {part.operand.type}")
        return found

    def _immediate(self, part: Part) -> Immediate:
        """The one immediate, from the short field or from the extension word, whichever it must be in."""
        if self.given is not None:
            raise _Bad(f"immediates as {self.given.operand.name} and {part.operand.name}", "one an operation")
        self.given = part
        bits, field = part.value_bits, self.short
        short = field.take(self.word)
        signed = short - (1 << field.width) if short >> (field.width - 1) & 1 and field.width else short
        if self.extension is None:
            if not field.width:
                raise _Bad(f"an immediate as {part.operand.name} with no bit for it", "an extension word")
            if not -1 << bits - 1 <= signed < 1 << bits - 1:
                raise _Bad(f"immediate {signed}", f"a signed value of {bits} bits")
            return Immediate(signed & (1 << bits) - 1)
        if short:
            raise _Bad(f"immediate = {short:#x} beside an extension word", "0")
        if self.extension >> bits:
            raise _Bad(f"extension word {self.extension:#x}", f"a value of {bits} bits")
        if fits(self.extension, bits, field.width):
            raise _Bad(f"{self.extension:#x} in an extension word", f"what does not fit {field.width} bits")
        return Immediate(self.extension)

    def _unused_immediate(self) -> None:
        if self.given is None:
            if self.extension is not None:
                raise _Bad("extended = 1 without an immediate", "0")
            if self.short.take(self.word):
                raise _Bad(f"immediate = {self.short.take(self.word):#x}, which no operand uses", "0")

    def _named_once(self, operation: Operation, places: tuple[Place, ...]) -> None:
        twice = named_twice(operation, places)
        if twice is not None:
            name = self.core.register_names[twice]
            raise _Bad(f"{operation.name} writes {name} twice", "one result or updated base a register", "names-twice")


def named_twice(operation: Operation, places: tuple[Place, ...]) -> int | None:
    """The number of a register that is named twice among results and updated base, pairs as two; None for none."""
    written: list[int] = []
    for operand, place in zip(operation.operands, places):
        if isinstance(place, Address):
            if place.mode is not Mode.OFFSET:
                written.append(place.base)
        elif isinstance(place, Register) and operand.role in (Role.RESULT, Role.INOUT, Role.STICKY):
            written.append(place.number)
            if operand.pair:
                written.append(place.number + 1)
    if len(written) == len(set(written)):
        return None
    return next(register for register in written if written.count(register) > 1)
