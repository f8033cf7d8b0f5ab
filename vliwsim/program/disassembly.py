"""From decoded code back to source text: one instruction for a message, a whole program as a source file."""

from __future__ import annotations

import struct
from collections.abc import Iterator, Mapping

from vliwsim.description.core import Core
from vliwsim.description.operations import Operand, Role
from vliwsim.program.code import Address, Bundle, Immediate, Instruction, Label, Mode, Place, Program, Register
from vliwsim.program.encoding.layout import longest_idle

DECIMAL_LIMIT = 1 << 16
"""Packed and unsigned immediates from here up are written in hexadecimal."""


def text_of(core: Core, instruction: Instruction, labels: Mapping[str, int] | None = None, slot: bool = False) -> str:
    """The instruction as the source writes it: ``lw g2, [g10 then +8] if g20``.

    labels: name → byte address, for targets; one that has no label is written as its address. slot: add the pin
    (``on g.mem``).
    """
    names_at: dict[int, str] = {}
    if labels and any(True for _ in _targets(instruction)):
        for name, address in labels.items():
            names_at.setdefault(address, name)
    return _text(core, instruction, names_at, slot)


def disassemble(program: Program, kernel: str = "disassembled") -> str:
    """A source file that assembles to the very words of ``program``.

    Every operation is pinned to its slot; the program's labels are kept, and names are made up where a target, the
    beginning or an idle run that must not melt into the one before it has none. kernel: the name to give.
    """
    labels = _labels(program)
    named: dict[int, list[str]] = {}
    for name, address in labels.items():
        named.setdefault(address, []).append(name)
    names_at = {address: names[0] for address, names in named.items()}
    lines = [f"kernel {kernel}", f"core   {program.core.name}"]
    beat = 0
    bundles = program.bundles
    for index, bundle in enumerate(bundles):
        if bundle.address in named:
            lines.append("")
            lines += [f"{name}:" for name in named[bundle.address]]
            beat = 0
        beat += bundle.beats
        following = bundles[index + 1].address if index + 1 < len(bundles) else None
        if bundle.instructions:
            lines += _bundle_lines(program.core, bundle, beat - 1, names_at)
        elif following is None or following in named:
            lines.append(f"@{beat - 1:<3} idle")
    return "\n".join(lines) + "\n"


def address_text(core: Core, address: Address) -> str:
    """An address operand as the source writes it."""
    return _address(core.register_names, address)


def immediate_text(value: int, operand: Operand) -> str:
    """A raw immediate in the form that suits the operand's type."""
    kind = operand.type
    if kind == "f32":
        return _float(value)
    bits = 16 if operand.half else 32
    if kind.startswith("u") or "x" in kind:
        return f"{value:#x}" if value >= DECIMAL_LIMIT else str(value)
    return str(_signed(value, bits))


def _text(core: Core, instruction: Instruction, names_at: Mapping[int, str], slot: bool) -> str:
    """The instruction with the labels at the addresses of its targets."""
    operation, names, guard = instruction.operation, core.register_names, instruction.guard
    places = [_place(names, operand, place, names_at) for operand, place in zip(operation.operands, instruction.places)]
    text = f"{operation.name} {', '.join(places)}" if places else operation.name
    if guard is not None:
        text += f" if {'not ' if guard.negated else ''}{names[guard.register]}"
    if instruction.targets:
        text += " to " + ", ".join(_code_address(target, names_at) for target in instruction.targets)
    return f"{text} on {core.slots[instruction.slot].name}" if slot else text


def _bundle_lines(core: Core, bundle: Bundle, beat: int, names_at: Mapping[int, str]) -> Iterator[str]:
    stamp = f"@{beat:<3}"
    for instruction in bundle.instructions:
        yield f"{stamp} {_text(core, instruction, names_at, slot=True)}"
        stamp = " " * len(stamp)


def _labels(program: Program) -> dict[str, int]:
    """The program's labels by address, with made-up ones where the text needs more."""
    from vliwsim.program.assembly.schedule import MOST_BEATS
    from vliwsim.program.source.header import HEADER_WORDS
    from vliwsim.program.source.parser import BODY_WORDS, OPERAND_WORDS

    unusable = {*HEADER_WORDS, *BODY_WORDS, *OPERAND_WORDS} | program.core.register_numbers.keys()
    found = {name: address for name, address in program.labels.items() if name not in unusable}
    known = set(found.values())
    wanted = {program.bundles[0].address}
    run, full = 0, longest_idle(program.core)
    section = 0
    for bundle in program.bundles:
        for instruction in bundle.instructions:
            wanted |= set(_targets(instruction))
        # An idle run becomes a gap in the stamps, and a gap one word, or several full ones and a rest.
        melts = bool(run) and not bundle.instructions and run != full
        if melts or section + bundle.beats > MOST_BEATS:
            wanted.add(bundle.address)
        section = bundle.beats + (0 if bundle.address in wanted or bundle.address in known else section)
        run = 0 if bundle.instructions else bundle.beats
    number = 0
    for address in sorted(wanted - known):
        while f"place{number}" in found:
            number += 1
        found[f"place{number}"] = address
    return dict(sorted(found.items(), key=lambda pair: pair[1]))


def _targets(instruction: Instruction) -> Iterator[int]:
    """Byte addresses of direct targets, and of those that a branch to a register names."""
    for operand, place in zip(instruction.operation.operands, instruction.places):
        if operand.role is Role.TARGET and isinstance(place, Immediate):
            yield place.value
    for place in instruction.targets:
        if isinstance(place, Immediate):
            yield place.value


def _place(names: tuple[str, ...], operand: Operand, place: Place, names_at: Mapping[int, str]) -> str:
    if isinstance(place, Register):
        return names[place.number] + ("" if place.half is None else (".lo", ".hi")[place.half])
    if isinstance(place, Address):
        return _address(names, place)
    if isinstance(place, Label):
        return place.name
    if operand.role is Role.TARGET:
        return _code_address(place, names_at)
    return immediate_text(place.value, operand)


def _code_address(place: Immediate | Label, names_at: Mapping[int, str]) -> str:
    return place.name if isinstance(place, Label) else names_at.get(place.value, f"{place.value:#x}")


def _address(names: tuple[str, ...], address: Address) -> str:
    base, step = names[address.base], address.step
    negative = isinstance(step, Immediate) and _signed(step.value, 32) < 0
    amount = names[step.number] if isinstance(step, Register) else str(abs(_signed(step.value, 32)))
    sign = "-" if negative else "+"
    if address.mode is Mode.BEFORE:
        return f"[{sign}{amount} then {base}]"
    if address.mode is Mode.AFTER:
        return f"[{base} then {sign}{amount}{f' in ring {address.ring}' if address.ring else ''}]"
    return f"[{base}]" if amount == "0" else f"[{base} {sign} {amount}]"


def _signed(value: int, bits: int) -> int:
    return value - (1 << bits) if value >> bits - 1 else value


def _float(bits: int) -> str:
    """The shortest decimal number that rounds to these binary32 bits; the bits themselves where there is none."""
    value = struct.unpack("<f", struct.pack("<I", bits))[0]
    if value - value != 0:  # an infinity or not a number
        return f"{bits:#010x}"
    text = next(text for digits in range(1, 18) if _bits_of(text := f"{value:.{digits}g}") == bits)
    return repr(float(text))


def _bits_of(text: str) -> int | None:
    """The binary32 bits of a decimal number, None for one that is too large."""
    try:
        return int.from_bytes(struct.pack("<f", float(text)), "little")
    except OverflowError:
        return None
