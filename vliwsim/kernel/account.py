"""Where a run's cycles went: by section of the source, by cause of stall, by slot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple

from vliwsim.program.kernel import Kernel, Section


class SectionCost(NamedTuple):
    """One labelled stretch of a run. ``bundles`` it issued, of which each pass through all of it issues ``beats``.

    ``passes``: how often its first beat was issued. ``whole``: every pass went through all of it. ``drain``: cycles of
    drain behind the halt that stands in it.
    """

    label: str
    bundles: int
    passes: int
    beats: int
    whole: bool
    drain: int = 0

    @property
    def cycles(self) -> int:
        return self.bundles + self.drain


class SlotUse(NamedTuple):
    """``used``: beats of the hottest section in which the slot's unit was taken, whether the guard was on or off."""

    slot: str
    used: int


class Account(NamedTuple):
    """The cycles of a run; :attr:`cycles` is always bundles + stalls + drain.

    ``stalls`` by cause, ``sections`` in program order (those that issued anything), ``hottest`` the label of the
    section that issued most, ``slots`` the use of every slot in it, in the core's order.
    """

    bundles: int
    stalls: Mapping[str, int]
    drain: int
    budget: int | float | None
    code_bytes: int
    sections: tuple[SectionCost, ...]
    hottest: str
    slots: tuple[SlotUse, ...]

    @property
    def stalled(self) -> int:
        return sum(self.stalls.values())

    @property
    def cycles(self) -> int:
        return self.bundles + self.stalled + self.drain

    @property
    def judged_cycles(self) -> int:
        """The cycles that the budget is for: all but those of interrupt service, which is not the kernel's."""
        return self.cycles - self.stalls.get("interrupt", 0)

    @property
    def within_budget(self) -> bool | None:
        """None where the source sets no budget."""
        return None if self.budget is None else self.judged_cycles <= self.budget

    @property
    def busiest(self) -> tuple[SlotUse, ...]:
        """The slots that were used most in the hottest section."""
        most = max((s.used for s in self.slots), default=0)
        return tuple(s for s in self.slots if s.used == most) if most else ()

    def section(self, label: str) -> SectionCost:
        """The cost of the section of this label; raises KeyError if it issued nothing."""
        for section in self.sections:
            if section.label == label:
                return section
        raise KeyError(label)

    def __str__(self) -> str:
        return f"{self.cycles} cycles = {self.bundles} bundles + {self.stalled} stalls + {self.drain} drain"


def account_of(
    kernel: Kernel,
    counts: Sequence[int],
    begun: Sequence[int],
    stalls: Mapping[str, int],
    drain: int,
    budget: int | float | None,
    halted_in: int | None,
) -> Account:
    """The account of a run from its counters.

    ``counts``: executions of each bundle of the program, an idle word's in beats; ``begun``: how often its first beat
    was issued. ``halted_in``: index of the bundle with the halt that ended the run, None if none did.
    """
    lengths = [bundle.beats for bundle in kernel.program.bundles]
    assert all(b <= c <= b * beats for b, c, beats in zip(begun, counts, lengths, strict=True))
    sections = []
    for first, last, section in _stretches(kernel):
        bundles = sum(counts[first:last])
        if not bundles:
            continue
        passes = begun[first]
        here = halted_in is not None and first <= halted_in < last
        whole = all(counts[k] == passes * lengths[k] for k in range(first, last))
        sections.append(SectionCost(section.label, bundles, passes, section.beats, whole, drain if here else 0))
    hottest = max(sections, key=lambda s: s.bundles, default=None)
    slots = _slots(kernel, counts, hottest.label, hottest.bundles) if hottest else ()
    return Account(
        sum(counts),
        dict(stalls),
        drain,
        budget,
        kernel.program.code_bytes,
        tuple(sections),
        hottest.label if hottest else "",
        slots,
    )


def _stretches(kernel: Kernel) -> list[tuple[int, int, Section]]:
    """(first bundle index, end excluded, section) of every section, in program order."""
    sections = sorted(kernel.map.sections, key=lambda s: s.first)
    ends = [*(s.first for s in sections[1:]), len(kernel.program.bundles)]
    return [(section.first, end, section) for section, end in zip(sections, ends) if end > section.first]


def _slots(kernel: Kernel, counts: Sequence[int], label: str, bundles: int) -> tuple[SlotUse, ...]:
    core = kernel.program.core
    used = [0] * len(core.slots)
    for first, last, section in _stretches(kernel):
        if section.label != label:
            continue
        for index in range(first, last):
            for slot, beats in _taken(kernel, index).items():
                used[slot] += beats * counts[index]
    return tuple(SlotUse(slot.name, min(n, bundles)) for slot, n in zip(core.slots, used))


def _taken(kernel: Kernel, index: int) -> dict[int, int]:
    """Beats for which a bundle takes each slot it uses."""
    core = kernel.program.core
    return {
        i.slot: core.busy(i.slot, i.operation.name, i.operation.operation_class)
        for i in kernel.program.bundles[index].instructions
    }
