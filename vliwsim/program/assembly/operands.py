"""Operands: the text of an operation to its places in the machine."""

from __future__ import annotations

import re
import struct
from collections.abc import Collection

import attrs

from vliwsim.description.operations import Operand, Operation, Role
from vliwsim.program.code import Address, Guard, Immediate, Label, Mode, Place, Register
from vliwsim.program.effects import touched
from vliwsim.program.encoding.layout import constant_limits, takes_immediate
from vliwsim.program.kernel import ItemTag
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.scope import Scope
from vliwsim.program.source.tree import Call

MOST_RING = 1 << 31
OLDEST_ITEM = 4096
"""Passes that an `item` may be old."""

_HALVES = {".lo": 0, ".hi": 1}
_INTEGER = re.compile(r"-?(?:\d+|0[xX][0-9a-fA-F]+|0[bB][01]+)\Z")
_BITS = re.compile(r"0[xX][0-9a-fA-F]+\Z|0[bB][01]+\Z")
_COMPUTED = re.compile(r"([A-Za-z_]\w*)\{(.*)\}\Z")
_WORD = re.compile(r"[A-Za-z_][\w.]*\Z")
_THEN = re.compile(r"(?<!\w)then(?!\w)")
_RING = re.compile(r"(?<!\w)in\s+ring(?!\w)")
_SUM = re.compile(r"\s*([A-Za-z_][\w.]*(?:\{[^}]*\})?)\s*([-+].*)?\Z")
_WRITTEN = (Role.RESULT, Role.INOUT, Role.STICKY)


@attrs.define(eq=False, repr=False)
class Ready:
    """An operation with its places found, not yet in a slot. ``pin``: the slot index it asks for.

    ``reads`` and ``writes`` are those of :func:`~vliwsim.program.effects.touched`.
    """

    operation: Operation
    places: tuple[Place, ...]
    guard: Guard | None
    pin: int | None
    call: Call
    reads: list[tuple[int, str]]
    writes: list[tuple[int, str, str]]
    item: ItemTag | None = None
    targets: tuple[Label, ...] = ()


class OperandReader:
    """Reads the operations of one source; ``labels`` are all labels of the file."""

    def __init__(self, scope: Scope, labels: Collection[str]) -> None:
        self.scope = scope
        self.complaints = scope.complaints
        self.labels = labels
        self.slots = {slot.name: k for k, slot in enumerate(scope.core.slots)}
        clusters = scope.core.clusters
        self.pair_start = tuple(k % 2 == 0 and k + 1 < c.registers for c in clusters for k in range(c.registers))
        self._registers: dict[str, Register] = {}
        self._numbers: dict[int, Immediate] = {}
        self._fixed: dict[tuple[str, int], Place] = {}
        """Places by text and identity of the operand, of texts that mean the same wherever they stand."""

    def read(self, call: Call) -> Ready | None:
        """The operation with its places; None when something is wrong with it, which is told."""
        before = len(self.complaints.problems)
        operation = self.scope.operations.by_name.get(call.mnemonic.text)
        guard = self.guard(call) if call.guard else None
        pin = self.pin(call.pin) if call.pin else None
        if operation is None:
            self._unknown_mnemonic(call)
            return None
        if len(call.operands) != len(operation.operands):
            self._wrong_count(call, operation)
            return None
        places: list[Place] = []
        fixed = self._fixed
        for operand, piece in zip(operation.operands, call.operands):
            place = fixed.get((piece.text, id(operand))) or self.place(operand, piece)
            if place is not None:
                places.append(place)
        targets = self.targets(call) if call.targets is not None else ()
        if len(places) < len(call.operands) or len(self.complaints.problems) > before:
            return None
        ready = Ready(operation, tuple(places), guard, pin, call, *touched(operation, places), self.item(call), targets)
        self._check_whole(ready)
        return ready

    def _unknown_mnemonic(self, call: Call) -> None:
        word = call.mnemonic
        names = self.scope.operations.by_name
        remedy = self.complaints.nearest(word.text, names) or self.complaints.nearest(
            word.text.partition(".")[0], names
        )
        if call.operands and call.operands[0].text.startswith("="):
            remedy = "let or name in front of it"
        allowed = "an operation of this core (vliwsim ops)"
        self.complaints.add("unknown-operation", word.where, f"no operation {word.text}", allowed, remedy)

    def _wrong_count(self, call: Call, operation: Operation) -> None:
        form = f"{operation.name} {', '.join(operand_form(operand) for operand in operation.operands)}".strip()
        found = f"{len(call.operands)} operands for {operation.name}"
        self.complaints.add("operand-count", call.mnemonic.where, found, form)

    def item(self, call: Call) -> ItemTag | None:
        """The item that an operation works on, where it says so."""
        if call.item is None:
            return None
        age = self.age(call.item)
        others = []
        for name, piece in call.others:
            register, other = self.register(name), self.age(piece)
            if register is not None and other is not None:
                others.append((register, other))
        return None if age is None else ItemTag(age, tuple(others))

    def age(self, piece: Piece) -> int | None:
        """A number of passes."""
        value = self.integer(piece)
        if value is not None and not 0 <= value <= OLDEST_ITEM:
            found = f"item {piece.text}" + ("" if str(value) == piece.text else f", which is {value}")
            self.complaints.add("unclear-item", piece.where, found, f"0, the newest, to {OLDEST_ITEM}")
            return None
        return value

    def targets(self, call: Call) -> tuple[Label, ...]:
        """The labels that a branch to a register may go to."""
        found: dict[str, Label] = {}
        for piece in call.targets or ():
            if not piece.text:
                self.complaints.add("incomplete", piece.where, "nothing where a label is due", "to LABEL, LABEL …")
            elif piece.text in found:
                self.complaints.add("twice", piece.where, f"{piece.text} twice", "each label once")
            elif label := self._label(piece, "a label of this file"):
                found[piece.text] = label
        return tuple(found.values())

    def guard(self, call: Call) -> Guard | None:
        assert call.guard
        register = self.register(call.guard)
        return None if register is None else Guard(register, call.negated)

    def pin(self, piece: Piece) -> int | None:
        """The slot index of a pin."""
        index = self.slots.get(piece.text)
        if index is None:
            allowed = " ".join(self.slots)
            found = f"no slot {piece.text}"
            self.complaints.add(
                "unknown-slot", piece.where, found, allowed, self.complaints.nearest(piece.text, self.slots)
            )
        return index

    def register(self, piece: Piece) -> int | None:
        """The number of a whole register, an alias, or a computed one such as ``g{4 + i}``."""
        match = _COMPUTED.match(piece.text) if piece.text.endswith("}") else None
        if not match:
            return self.scope.register(piece)
        index = self.integer(piece.part(match.start(2), match.end(2)))
        if index is None:
            return None
        return self.scope.register(piece._replace(text=f"{match[1]}{index}"))

    def integer(self, piece: Piece) -> int | None:
        """The value of an expression that must be an integer."""
        if _INTEGER.match(piece.text):
            try:
                return int(piece.text, 0)
            except ValueError:  # 007: the expression language says what is wrong with it
                pass
        value = self.scope.value(piece)
        if isinstance(value, float):
            remedy = "// instead of /" if "/" in piece.text else ""
            found = f"{piece.text} is {value}" if piece.text != str(value) else piece.text
            self.complaints.add("not-an-integer", piece.where, found, "an integer", remedy)
            return None
        return None if value is None else int(value)

    def place(self, operand: Operand, piece: Piece) -> Place | None:
        """Where one operand comes from or goes to; None, with the problem told, when it is bad."""
        text, role = piece.text, operand.role
        if not text:
            self.complaints.add("operand-missing", piece.where, f"nothing for {operand.name}", operand_form(operand))
            return None
        if self._is_code_address(operand, text):
            return Label(text)
        if text[0] == "[" or role is Role.ADDRESS:
            return self._address(operand, piece)
        if role is Role.CONSTANT:
            return self._constant(operand, piece)
        half = _HALVES.get(text[-3:])
        name = piece if half is None else piece._replace(text=text[:-3])
        computed = name.text[-1:] == "}"
        if computed or name.text in self.scope.registers:
            return self._register_place(operand, piece, name, half, computed)
        if role is Role.TARGET:
            return self._label(piece)
        if role in _WRITTEN or operand.pair:
            if _WORD.match(name.text):
                self.scope.unknown_register(name)
            else:
                self.complaints.add("bad-operand", piece.where, f"{text} for {operand.name}", operand_form(operand))
            return None
        if half is not None or (_WORD.match(text) and text not in self.scope.environment):
            self._unknown_word(piece)
            return None
        return self._immediate(operand, piece)

    def _register_place(
        self, operand: Operand, piece: Piece, name: Piece, half: int | None, computed: bool
    ) -> Register | None:
        number = self.register(name)
        if number is None:
            return None
        add = self.complaints.add
        if half is not None and not operand.half:
            found = f"a half for {operand.name}, which is whole"
            add("half-of-whole", piece.where, found, "the register alone", name.text)
            return None
        if half is None and operand.half:
            found = f"{operand.name} reads a half"
            add("no-half", piece.where, found, f"{name.text}.lo or {name.text}.hi", f"{name.text}.lo")
            return None
        if operand.pair and not self.pair_start[number]:
            core = self.scope.core
            even = core.register_names[number - 1] if number and self.pair_start[number - 1] else ""
            add("odd-pair", piece.where, f"a pair at {name.text}", "an even register with one behind it", even)
            return None
        place = Register(number, half)
        if not computed:
            self._fixed[piece.text, id(operand)] = place
        return place

    def _is_code_address(self, operand: Operand, text: str) -> bool:
        """Whether a label stands where a whole number of 32 bits may: the address of its code."""
        if text not in self.labels or text in self.scope.environment or text in self.scope.registers:
            return False
        whole = operand.type in ("i32", "u32") and not operand.half and not operand.pair
        return whole and (operand.role is Role.SOURCE or (operand.role is Role.CONSTANT and takes_immediate(operand)))

    def _unknown_word(self, piece: Piece) -> None:
        scope = self.scope
        if piece.text in self.labels:
            found, remedy = f"label {piece.text} as a value", ""
        else:
            found = f"{piece.text} is no register and no constant"
            remedy = self.complaints.nearest(piece.text, [*scope.registers, *scope.environment])
        allowed = "a register, a let name or a number"
        self.complaints.add("unknown-name", piece.where, found, allowed, remedy)

    def _label(self, piece: Piece, allowed: str = "a label of this file or a register") -> Label | None:
        if piece.text not in self.labels:
            self.complaints.add(
                "unknown-label",
                piece.where,
                f"no label {piece.text}",
                allowed,
                self.complaints.nearest(piece.text, self.labels),
            )
            return None
        return Label(piece.text)

    def _constant(self, operand: Operand, piece: Piece) -> Immediate | None:
        if piece.text in self.scope.registers:
            found = f"register {piece.text} for {operand.name}"
            self.complaints.add("constant-only", piece.where, found, "a constant")
            return None
        return self._immediate(operand, piece)

    def _immediate(self, operand: Operand, piece: Piece) -> Immediate | None:
        """An immediate as the raw bits the operation receives."""
        if operand.type == "f32":
            return self._float(piece)
        value = self.integer(piece)
        if value is None:
            return None
        low, high, mask = immediate_range(operand)
        if not low <= value <= high:
            found = f"{value} for {operand.name}"
            self.complaints.add("immediate-range", piece.where, found, f"{low} to {high}")
            return None
        return Immediate(value & mask)

    def _float(self, piece: Piece) -> Immediate | None:
        """A number as binary32; hexadecimal and binary literals are the bits themselves."""
        if _BITS.match(piece.text):
            bits = int(piece.text, 0)
            if bits < 1 << 32:
                return Immediate(bits)
            self.complaints.add("immediate-range", piece.where, f"{piece.text} as bits", "32 bits")
            return None
        value = self.scope.value(piece)
        if value is None:
            return None
        try:
            (bits,) = struct.unpack("<I", struct.pack("<f", value))
        except OverflowError:
            self.complaints.add("immediate-range", piece.where, f"{piece.text} is {value}", "a finite binary32 number")
            return None
        return Immediate(bits)

    def _address(self, operand: Operand, piece: Piece) -> Address | None:
        """An address form: ``[r]``, ``[r + s]``, ``[r then +s]``, ``[+s then r]``, ``[r then +s in ring N]``."""
        if operand.role is not Role.ADDRESS or piece.text[:1] != "[" or piece.text[-1:] != "]":
            wanted = operand.role is Role.ADDRESS
            found = f"{piece.text}, where an address stands" if wanted else f"address {piece.text} for {operand.name}"
            remedy = f"[{piece.text}]" if wanted and piece.text in self.scope.registers else ""
            self.complaints.add("bad-operand", piece.where, found, operand_form(operand), remedy)
            return None
        inner = piece.part(1, len(piece.text) - 1)
        then = _THEN.search(inner.text)
        if then:
            before, after = inner.part(0, then.start()), inner.part(then.end())
            if before.text[:1] in ("+", "-"):
                return self._finish(piece, after, Mode.BEFORE, before, None)
            in_ring = _RING.search(after.text)
            moved = after.part(0, in_ring.start()) if in_ring else after
            return self._finish(piece, before, Mode.AFTER, moved, after.part(in_ring.end()) if in_ring else None)
        match = _SUM.match(inner.text)
        if not match or _RING.search(inner.text):
            self._bad_address(piece)
            return None
        step = inner.part(match.start(2), match.end(2)) if match[2] else None
        return self._finish(piece, inner.part(match.start(1), match.end(1)), Mode.OFFSET, step, None)

    def _finish(self, piece: Piece, base: Piece, mode: Mode, step: Piece | None, ring: Piece | None) -> Address | None:
        if not base.text or (step is not None and step.text[:1] not in ("+", "-")):
            self._bad_address(piece)
            return None
        number = self.register(base)
        found_step: Register | Immediate | None = Immediate(0) if step is None else self._step(step)
        size = 0
        if ring is not None:
            value = self.integer(ring)
            if value is not None and (not 2 <= value <= MOST_RING or value & (value - 1)):
                found, allowed = f"a ring of {value} bytes", f"a power of two from 2 to {MOST_RING}"
                remedy = str(1 << (value - 1).bit_length()) if 2 < value < MOST_RING else ""
                self.complaints.add("bad-ring", ring.where, found, allowed, remedy)
                return None
            if value is None:
                return None
            size = value
        if number is None or found_step is None:
            return None
        return Address(number, mode, found_step, size)

    def _step(self, step: Piece) -> Register | Immediate | None:
        """A step with its sign: a register behind ``+``, or an expression."""
        name = step.part(1)
        if name.text in self.scope.registers or name.text[-1:] == "}":
            if step.text[0] == "-":
                found = f"register {name.text} subtracted in an address"
                self.complaints.add("bad-address", step.where, found, "registers are added", f"+{name.text}")
                return None
            number = self.register(name)
            return None if number is None else Register(number)
        if _WORD.match(name.text) and name.text not in self.scope.environment:
            self._unknown_word(name)
            return None
        value = self.integer(step if step.text[0] == "-" else name)
        if value is None:
            return None
        if not -(1 << 31) <= value < 1 << 32:
            self.complaints.add(
                "immediate-range", step.where, f"{value} in an address", f"{-(1 << 31)} to {(1 << 32) - 1}"
            )
            return None
        return Immediate(value & 0xFFFFFFFF)

    def _bad_address(self, piece: Piece) -> None:
        allowed = "[r] [r + 8] [r + s] [r then +8] [+8 then r] [r then +8 in ring 64]"
        remedy = ""
        if then := _THEN.search(piece.text):
            left, right = piece.text[: then.end()], piece.text[then.end() :].lstrip()
            if right and right[0].isalnum():
                remedy = f"{left} +{right}"
        self.complaints.add("bad-address", piece.where, f"address {piece.text}", allowed, remedy)

    def _check_whole(self, ready: Ready) -> None:
        """What concerns several operands at once: one immediate, no register twice among the results."""
        call, core = ready.call, self.scope.core
        immediates = 0
        for operand, place, piece in zip(ready.operation.operands, ready.places, call.operands):
            kind = type(place)
            if kind is Register or (kind is Address and type(place.step) is Register):  # type: ignore[union-attr]
                continue
            immediate = operand.role is not Role.CONSTANT or takes_immediate(operand)
            immediates += immediate
            if immediate and immediates == 2:
                found = f"a second immediate, {piece.text}"
                allowed = "one immediate an operation, an offset or a label included"
                self.complaints.add("two-immediates", piece.where, found, allowed, "one of them in a register")
        if ready.call.targets and not any(
            operand.role is Role.TARGET and type(place) is Register
            for operand, place in zip(ready.operation.operands, ready.places)
        ):
            found = f"{ready.operation.name} goes nowhere by a register, and names labels behind to"
            allowed = "to LABEL, LABEL … behind a branch to a register"
            self.complaints.add("no-indirect-branch", ready.call.targets[0].where, found, allowed)
        if len(ready.writes) > 1:
            seen: set[int] = set()
            for register, _, _ in ready.writes:
                if register in seen:
                    found = f"{ready.operation.name} writes {core.register_names[register]} twice"
                    allowed = "different registers as results and updated base"
                    self.complaints.add("names-twice", call.mnemonic.where, found, allowed, kind="illegal")
                seen.add(register)


def immediate_range(operand: Operand) -> tuple[int, int, int]:
    """The least and the greatest immediate of an integer operand, and the mask of its raw bits.

    Whatever has 32 bits may be written signed or unsigned, and so may a half; a smaller constant keeps to its type.
    """
    if operand.half:
        return -(1 << 15), (1 << 16) - 1, 0xFFFF
    low, high = constant_limits(operand) if operand.role is Role.CONSTANT else (-(1 << 31), (1 << 32) - 1)
    if high - low >= (1 << 32) - 1:
        low, high = -(1 << 31), (1 << 32) - 1
    return low, high, 0xFFFFFFFF


def operand_form(operand: Operand) -> str:
    """How an operand is written, for people."""
    if operand.role is Role.ADDRESS:
        return "[ADDRESS]"
    if operand.role is Role.TARGET:
        return "LABEL"
    if operand.role is Role.CONSTANT:
        return f"CONSTANT {operand.name}"
    what = "PAIR" if operand.pair else "HALF" if operand.half else "REGISTER"
    return f"{what} {operand.name}"
