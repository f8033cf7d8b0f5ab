"""Why a run is wrong, late or illegal, in lines that lead to the source."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping

import attrs

from vliwsim.kernel.compare import Difference
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import Problem
from vliwsim.program.kernel import Kernel
from vliwsim.regression.origin import (
    LONGEST,
    History,
    Line,
    debug_line,
    lost_cycles,
    origin_of_output,
    unread,
)


@attrs.frozen
class Explanation:
    """``text``: several lines; ``lines``: source lines named in it, nearest first; ``debug``: a ready command."""

    text: str
    lines: tuple[int, ...]
    debug: str


def text_of_difference(name: str, difference: Difference, whose: str = "expected") -> str:
    """``y[3] is 5, expected 6; 12 of 64 elements differ``."""
    where = name if difference.index is None else f"{name}[{difference.index}]"
    got = "undefined" if difference.got is None else difference.got
    text = f"{where} is {got}, {whose} {difference.expected}"
    if difference.size > 1:
        text += f"; {difference.differing} of {difference.size} elements differ"
    return text


def named_lines(problems: Iterable[Problem]) -> list[int]:
    """Every source line that some problems stand at or speak of."""
    lines: list[int] = []
    for each in problems:
        lines += [each.place.line] if each.place else []
        lines += [int(number) for number in re.findall(r"\bline (\d+)\b", f"{each.found} {each.remedy}")]
    return list(dict.fromkeys(lines))


def unread_text(kernel: Kernel) -> tuple[str, list[int]]:
    """What is written and never read, as a line of text, and the source lines; nothing where there is none."""
    found = unread(kernel)
    if not found:
        return "", []
    text = ", ".join(f"line {line.number} writes {line.does}" for line in found[:4])
    return f"  perhaps  {text}, which nothing reads", [line.number for line in found[:4]]


def explained(run: KernelRun, whose: str = "expected", traced: bool = True) -> Explanation:
    """Why a run is not right or not legal: problems, differences, and where the first wrong element came from.

    ``traced``: run it again in the open to find that; it takes as long as some ten runs.
    """
    parts, lines = [], list[int]()
    wrong = [(name, d) for name, d in run.differences.items() if d]
    if wrong:
        parts.append("\n".join(f"  {text_of_difference(name, d, whose)}" for name, d in wrong))
    debug = debug_line(run.kernel, run.case)
    history = History(run) if traced and run.cycles <= LONGEST and (wrong or run.problems) else None
    if wrong and history:
        name, difference = wrong[0]
        origin = origin_of_output(history, name, difference.index)
        parts.append(_block(origin.maker, origin.lines))
        lines += [line.number for line in origin.lines]
        debug_hint = f"then: at wrong {name}"
    else:
        debug_hint = "then: at end"
    for problem in run.problems:
        parts.append(str(problem))
    lines += named_lines(run.problems)
    if history and run.reason == "hazard":
        behind = _behind_hazard(history, run)
        if behind:
            parts.append(f"  behind   {_chain(behind)}")
            lines += [line.number for line in behind]
    unused, more = unread_text(run.kernel)
    parts += [unused] if unused else []
    lines += more
    parts.append(f"  look     {debug}   ({debug_hint})")
    return Explanation("\n".join(parts), tuple(dict.fromkeys(lines)), debug)


def _block(maker: str, lines: tuple[Line, ...]) -> str:
    text = f"  made     {maker}"
    return f"{text}\n  behind   {_chain(lines)}" if lines else text


def _chain(lines: tuple[Line, ...]) -> str:
    return " ← ".join(f"line {line.number} {line.does}" for line in lines)


def _behind_hazard(history: History, run: KernelRun) -> tuple[Line, ...]:
    """The lines behind the operations of the hazard, which the diagnostic names by line."""
    places = {p.place.line for p in run.problems if p.place}
    deeds = history.deeds_at(places)
    return history.lines(deeds) if deeds else history.lines(())


def over_budget(run: KernelRun, recorded: Mapping[str, int] | None = None) -> Explanation:
    """Where a run's cycles went, most expensive first; ``recorded``: cycles by section of a golden."""
    kernel, account = run.kernel, run.account
    text, lines = [f"  {account}"], list[int]()
    if account.budget is not None and kernel.budget is not None and recorded is None:
        text[0] += f"      (budget {account.budget:.10g}, line {kernel.budget.place.line})"
        lines.append(kernel.budget.place.line)
    history = History(run) if run.cycles <= LONGEST else None
    for place in lost_cycles(history)[:4] if history else ():
        text.append(f"  stalls   {place}")
    if history:
        for bundle in sorted(history.frozen, key=lambda b: -sum(history.frozen[b].values()))[:4]:
            lines += [p.line for p in kernel.map.instruction_places[bundle]]
            lines += [history.item_line(name).number for name in history.touched.get(bundle, ())]
    labels = {section.label: section.place.line for section in kernel.map.sections}
    for section in sorted(account.sections, key=lambda s: -s.cycles)[:4]:
        before = (recorded or {}).get(section.label)
        if recorded and before == section.cycles:
            continue
        was = f" (was {before})" if before is not None else " (new)" if recorded else ""
        passes = f", {section.passes} passes of {section.beats}" if section.passes > 1 else ""
        text.append(f"  section  {section.cycles} {section.label}{was}{passes}, from line {labels[section.label]}")
        lines += _section_lines(run, section.label)
    debug = debug_line(kernel, run.case)
    text.append(f"  look     {debug}")
    return Explanation("\n".join(text), tuple(dict.fromkeys(lines)), debug)


def _section_lines(run: KernelRun, label: str) -> list[int]:
    """The label's line, then those of what stands below it."""
    kernel = run.kernel
    first = [section.place.line for section in kernel.map.sections if section.label == label]
    found = {
        place.line
        for (name, _), places in zip(kernel.map.bundle_at, kernel.map.instruction_places)
        if name == label
        for place in places
    }
    return [*first, *sorted(found)]
