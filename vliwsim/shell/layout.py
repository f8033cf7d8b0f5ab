"""Where things are: bundles by label and beat, passes of a section, registers by any of their names."""

from __future__ import annotations

import re
from collections.abc import Mapping

from vliwsim.description.operations import Role
from vliwsim.kernel.diagnose import line_of, where
from vliwsim.machine.state import State
from vliwsim.program.code import Immediate
from vliwsim.program.disassembly import text_of
from vliwsim.program.kernel import Kernel, Section

_WORD = re.compile(r"[A-Za-z_]\w*")


class Layout:
    """The names and places of one kernel."""

    def __init__(self, kernel: Kernel) -> None:
        self.kernel = kernel
        self.core = kernel.core
        self.aliases = {number: name for name, number in kernel.register_names.items()}
        self.registers: dict[str, int] = {**self.core.register_numbers, **kernel.register_names}
        self.sections: Mapping[str, Section] = {section.label: section for section in kernel.map.sections}
        self._looped = self._targets()

    def _targets(self) -> set[int]:
        """Indices of bundles that a direct branch goes to."""
        program = self.kernel.program
        return {
            program.index_at[place.value]
            for bundle in program.bundles
            for instruction in bundle.instructions
            for operand, place in zip(instruction.operation.operands, instruction.places)
            if operand.role is Role.TARGET and isinstance(place, Immediate) and place.value in program.index_at
        }

    def register(self, number: int) -> str:
        """A register's name: the source's own where it has one."""
        return self.aliases.get(number, self.core.register_names[number])

    def text(self, bundle: int, instruction: int) -> str:
        """An instruction as the source might write it, with the source's names of registers."""
        program = self.kernel.program
        text = text_of(self.core, program.bundles[bundle].instructions[instruction], program.labels)
        numbers = self.core.register_numbers

        def named(match: re.Match[str]) -> str:
            number = numbers.get(match[0])
            return match[0] if number is None else self.register(number)

        head, blank, rest = text.partition(" ")
        return head + blank + _WORD.sub(named, rest)

    def line(self, bundle: int, instruction: int) -> int | None:
        """The source line of an instruction."""
        place = line_of(self.kernel, bundle, instruction)
        return place.line if place else None

    def where(self, bundle: int, within: int = 0) -> str:
        return where(self.kernel, bundle, within)

    def bundle_of(self, section: Section, beat: int) -> tuple[int, int] | None:
        """(bundle index, beat within its idle word) of a beat of a section; None where it has no such beat."""
        index = section.first
        bundles = self.kernel.program.bundles
        while index < len(bundles) and beat >= bundles[index].beats:
            beat -= bundles[index].beats
            index += 1
        return (index, beat) if index < len(bundles) else None

    def section_at(self, bundle: int) -> Section:
        """The section a bundle stands in."""
        return self.sections[self.kernel.map.bundle_at[bundle][0]]

    def pass_of(self, state: State) -> int:
        """The pass of its section in which ``state`` stands, from 1."""
        section = self.section_at(state.at)
        at_first = state.at == section.first and state.within == 0 and state.halt_beat is None
        return max(1, state.begun[section.first] + at_first)

    def repeats(self, section: Section) -> bool:
        """Whether passes of the section are worth counting: a branch comes back to it."""
        return section.first in self._looped
