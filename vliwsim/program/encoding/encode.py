"""From bundles to words: the encoder, and the rule that places bundles in fetch groups.

Encoding is not the judge of legality: a slot used twice, a register out of a slot's reach, a guard the core does not
allow are all encoded, and the machine complains.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Mapping, Sequence

import attrs

from vliwsim.description.core import Core, Words
from vliwsim.description.operations import OperationSet
from vliwsim.problems import ImageError, Problem, problem
from vliwsim.problems import Place as SourcePlace
from vliwsim.program.code import Address, Immediate, Instruction, Label, Mode, Place, Register, indirect
from vliwsim.program.encoding.image import Image
from vliwsim.program.encoding.layout import MODES, MOST_OPERATIONS, RING_MODE, Field, Format, Layout, Part, layout

Draft = Sequence[Instruction] | int
"""A bundle's instructions, or the number of beats of an idle run."""

Where = Callable[[int, int], SourcePlace | None]
"""Where the source says a draft's instruction, by draft index and index in the draft."""

MOST_CODE_BYTES = 1 << 24
"""The largest code, in bytes: well inside what an image file may have."""


@attrs.define(eq=False, repr=False)
class _Word:
    """An operation word on its way: ``value`` in the field ``short`` or, ``extended``, in the next word."""

    bits: int
    short: Field
    label: str | None = None
    value: int | None = None
    value_bits: int = 32
    extended: bool = False
    targets: tuple[Immediate | Label, ...] = ()


def place_after(end: int, words: int, rule: Words) -> int:
    """The word at which a bundle of ``words`` words goes when the one before it ends before word ``end``.

    Grows with ``end`` and with ``words``: the proof that the encoder's forms of branches settle, and settle smallest.
    """
    into = end % rule.group
    if rule.straddle or into + words <= rule.group or not into:
        return end
    return end + rule.group - into


def fits(value: int, value_bits: int, width: int) -> bool:
    """Whether a raw value of ``value_bits`` bits, read as signed, fits a short immediate of ``width`` bits."""
    signed = value - (1 << value_bits) if value >> value_bits - 1 else value
    return width > 0 and -1 << width - 1 <= signed < 1 << width - 1


def encode(
    core: Core,
    operations: OperationSet,
    drafts: Sequence[Draft],
    labels: Mapping[str, int],
    digest: str = "",
    where: Where = lambda draft, instruction: None,
) -> Image:
    """The image of a program.

    drafts: bundles and idle runs (1 or more beats) in program order; of a bundle's instructions, those of one slot stay
    in their order. labels: name → index of a draft. digest: goes into the image. where: finds the place in the source
    for a complaint.

    Raises :class:`ImageError` with all problems: ``bundle-too-long``, ``bad-place`` (a place no word can say),
    ``no-label``, ``code-too-long``, ``no-code``; :class:`CoreError` when an operation does not fit the core's words.
    """
    return _Encoder(layout(core, operations), drafts, labels, where).image(digest)


class _Encoder:
    def __init__(self, to: Layout, drafts: Sequence[Draft], labels: Mapping[str, int], where: Where) -> None:
        self.layout = to
        self.rule = to.core.words
        self.labels = labels
        self.where = where
        self.problems: list[Problem] = []
        self.bundles: list[list[_Word] | int] = []
        """What is placed: operation words, or the beats of one idle word."""
        self.first: list[int] = []
        """For every draft, the index of its first in :attr:`bundles`."""
        for index, draft in enumerate(drafts):
            self.first.append(len(self.bundles))
            if isinstance(draft, int):
                self._idle(index, draft)
            else:
                self._bundle(index, draft)
        if not self.bundles:
            self.problems.append(problem("no-code", "no bundle at all", "at least one bundle"))
        for name, at in labels.items():
            if not 0 <= at < len(drafts):
                self.problems.append(problem("no-label", f"label {name} is not at a bundle", "a bundle behind a label"))
        self._refuse()

    def image(self, digest: str) -> Image:
        starts = self._settle()
        self._refuse()
        size = self.rule.bytes
        at = {name: starts[self.first[draft]] * size for name, draft in self.labels.items()}
        words = self._words(starts, at)
        targets = self._targets(starts, at)
        return Image(self.layout.core.name, self.rule.bits, words, at, digest, targets, tuple(self.first))

    def _refuse(self) -> None:
        if self.problems:
            raise ImageError(self.problems)

    def _idle(self, draft: int, beats: int) -> None:
        """An idle run, in as many words as its beats need."""
        most = self.layout.beats.mask
        if beats < 1:
            self.problems.append(
                problem("bad-place", f"an idle run of {beats} beats (draft {draft})", "at least 1 beat")
            )
        while beats > most:
            self.bundles.append(most)
            beats -= most
        self.bundles.append(beats)

    def _bundle(self, draft: int, instructions: Sequence[Instruction]) -> None:
        if not 1 <= len(instructions) <= MOST_OPERATIONS:
            self._complain("bundle-too-long", draft, 0, f"{len(instructions)} operations", f"1 to {MOST_OPERATIONS}")
            return
        words: list[tuple[int, _Word]] = []
        for index, instruction in enumerate(instructions):
            try:
                words.append((instruction.slot, self._word(instruction)))
            except _Unsayable as fault:
                found = f"{instruction.operation.name}: {fault.found}"
                self._complain("bad-place", draft, index, found, fault.allowed)
        words.sort(key=lambda pair: pair[0])
        self.bundles.append([word for _, word in words])

    def _complain(self, name: str, draft: int, instruction: int, found: str, allowed: str) -> None:
        place = self.where(draft, instruction)
        if place is None:
            found = f"{found} (draft {draft})"
        self.problems.append(problem(name, found, allowed, place=place))

    def _word(self, instruction: Instruction) -> _Word:
        """The word of an instruction without ``last``, ``extended`` and the immediate."""
        to, operation, guard = self.layout, instruction.operation, instruction.guard
        shape = to.format_of(operation)
        registers = to.immediate_code
        if not 0 <= instruction.slot < len(to.core.slots):
            raise _Unsayable(f"slot {instruction.slot}", f"0 to {len(to.core.slots) - 1}")
        if len(instruction.places) != len(shape.parts):
            raise _Unsayable(f"{len(instruction.places)} operands", f"{len(shape.parts)}")
        bits = instruction.slot << to.slot.low | operation.code << to.code.low
        if guard is not None:
            if not 0 <= guard.register < registers:
                raise _Unsayable(f"guard register {guard.register}", f"0 to {registers - 1}")
            bits |= (1 + 2 * guard.register + guard.negated) << to.guard.low
        word = _Word(bits, shape.immediate)
        for part, place in zip(shape.parts, instruction.places):
            self._place(word, shape, part, place)
        if instruction.targets:
            self._named_targets(word, instruction)
        if word.value is not None:
            word.extended = not fits(word.value, word.value_bits, word.short.width)
        return word

    def _named_targets(self, word: _Word, instruction: Instruction) -> None:
        """Take the places that a branch to a register may go to."""
        if indirect(instruction) is None:
            raise _Unsayable("places to go to", "none but of a branch to a register")
        missing = [t.name for t in instruction.targets if isinstance(t, Label) and t.name not in self.labels]
        if missing:
            raise _Unsayable(f"label {missing[0]} is nowhere", "a label of the program")
        word.targets = instruction.targets

    def _targets(self, starts: list[int], at: Mapping[str, int]) -> dict[int, tuple[int, ...]]:
        """Of every word with named targets, byte address → byte addresses, both in order."""
        found: dict[int, tuple[int, ...]] = {}
        for bundle, start in zip(self.bundles, starts):
            for word in () if isinstance(bundle, int) else bundle:
                if word.targets:
                    places = {at[t.name] if isinstance(t, Label) else t.value for t in word.targets}
                    found[start * self.rule.bytes] = tuple(sorted(places))
                start += 1 + word.extended
        return found

    def _place(self, word: _Word, shape: Format, part: Part, place: Place) -> None:
        """Put one operand into ``word``."""
        registers, field = self.layout.immediate_code, part.register
        if isinstance(place, Address) is not (part.address is not None):
            wanted = "a register or an immediate" if part.address is None else "an address"
            raise _Unsayable(f"{place} as {part.operand.name}", wanted)
        if isinstance(place, Address):
            assert part.address is not None
            if place.ring:
                assert shape.ring is not None
                assert shape.ring_immediate is not None
                word.bits |= RING_MODE << part.address.mode.low | _ring(place) << shape.ring.low
                word.short = shape.ring_immediate
            else:
                word.bits |= MODES.index(place.mode) << part.address.mode.low
            word.bits |= _register(place.base, registers) << part.address.base.low
            field, place = part.address.step, place.step
        if isinstance(place, Register):
            if field is None:
                raise _Unsayable(f"a register as {part.operand.name}", "an immediate")
            word.bits |= _register(place.number, registers) << field.low
            if (place.half is not None) is not (part.half is not None) or place.half not in (None, 0, 1):
                raise _Unsayable(f"half {place.half} of {part.operand.name}", "0 or 1 for a half operand, else None")
            if part.half is not None:
                word.bits |= (place.half or 0) << part.half.low
            if part.operand.pair and not self.layout.pair_starts[place.number]:
                raise _Unsayable(f"pair {self.layout.core.register_names[place.number]}", "an even register")
            return
        if part.constant is not None:
            self._constant(word, part, place)
            return
        if not part.immediate:
            raise _Unsayable(f"an immediate as {part.operand.name}", "a register")
        if word.value is not None or word.label is not None:
            raise _Unsayable("two immediates", "one immediate an operation")
        if field is not None:
            word.bits |= registers << field.low
        if isinstance(place, Label):
            if place.name not in self.labels:
                raise _Unsayable(f"label {place.name} is nowhere", "a label of the program")
            word.label = place.name
        else:
            self._check(part, place)
            word.value, word.value_bits = place.value, part.value_bits

    def _constant(self, word: _Word, part: Part, place: Place) -> None:
        """Put a constant into its own field."""
        if not isinstance(place, Immediate) or part.constant is None:
            raise _Unsayable(f"{place} as {part.operand.name}", "a constant")
        self._check(part, place)
        word.bits |= (place.value & part.constant.mask) << part.constant.low

    @staticmethod
    def _check(part: Part, place: Immediate) -> None:
        if not 0 <= place.value < 1 << part.value_bits:
            raise _Unsayable(f"immediate {place.value}", f"a raw value of {part.value_bits} bits")
        if not part.allows(place.value):
            raise _Unsayable(f"{place.value:#x} as {part.operand.name}", f"a constant of type {part.operand.type}")

    def _settle(self) -> list[int]:
        """Word index of every bundle, with every label's form chosen: short until it no longer fits, then extended.

        Bundles only ever move up (:func:`place_after`), so this ends, and no extended form at the end would fit short.
        """
        waiting = [
            word for bundle in self.bundles if not isinstance(bundle, int) for word in bundle if word.label is not None
        ]
        while True:
            starts = self._starts()
            grown = [
                word
                for word in waiting
                if not word.extended and not fits(self._address(word, starts), 32, word.short.width)
            ]
            if not grown:
                return starts
            for word in grown:
                word.extended = True

    def _starts(self) -> list[int]:
        rule, end = self.rule, 0
        starts: list[int] = []
        for bundle in self.bundles:
            words = 1 if isinstance(bundle, int) else len(bundle) + sum([word.extended for word in bundle])
            end = place_after(end, words, rule)
            starts.append(end)
            end += words
        if end * rule.bytes > MOST_CODE_BYTES:
            raise ImageError(
                problem("code-too-long", f"{end * rule.bytes} bytes of code", f"at most {MOST_CODE_BYTES} bytes")
            )
        return starts

    def _address(self, word: _Word, starts: list[int]) -> int:
        assert word.label is not None
        return starts[self.first[self.labels[word.label]]] * self.rule.bytes

    def _words(self, starts: list[int], at: Mapping[str, int]) -> tuple[int, ...]:
        words: list[int] = []
        for index, (bundle, start) in enumerate(zip(self.bundles, starts)):
            words.extend([1] * (start - len(words)))  # padding: last, operation 0, 0 beats
            if isinstance(bundle, int):
                words.append(1 | bundle << self.layout.beats.low)
                continue
            for word in bundle:
                value = word.value if word.label is None else at[word.label]
                if word.extended:
                    assert value is not None
                    words += (word.bits | 2, value)
                else:
                    words.append(word.bits | self._short(word, value))
            words[-2 if bundle[-1].extended else -1] |= 1
            length = len(words) - start
            if not self.rule.straddle and length > self.rule.group:
                draft = bisect_right(self.first, index) - 1
                found = f"{length} words in one bundle"
                self._complain("bundle-too-long", draft, 0, found, f"{self.rule.group} words, a fetch group")
        self._refuse()
        return tuple(words)

    @staticmethod
    def _short(word: _Word, value: int | None) -> int:
        if value is None:
            return 0
        field = word.short
        signed = value - (1 << word.value_bits) if value >> word.value_bits - 1 else value
        return (signed & field.mask) << field.low


class _Unsayable(Exception):
    """A place that no word can say."""

    def __init__(self, found: str, allowed: str) -> None:
        super().__init__(found)
        self.found = found
        self.allowed = allowed


def _register(number: int, registers: int) -> int:
    if not 0 <= number < registers:
        raise _Unsayable(f"register {number}", f"0 to {registers - 1}")
    return number


def _ring(address: Address) -> int:
    """The ring field's value."""
    ring = address.ring
    power = ring.bit_length() - 1
    if ring != 1 << power or not 1 <= power <= 31 or address.mode is not Mode.AFTER:
        raise _Unsayable(f"ring {ring}", "a power of two from 2 to 2147483648, with 'then +step'")
    return power
