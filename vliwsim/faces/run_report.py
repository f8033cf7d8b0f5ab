"""A run as text: the verdict sentence, what differs, the account that adds up, what is illegal, notes."""

from __future__ import annotations

from collections.abc import Iterator

from vliwsim.kernel.account import Account, SectionCost
from vliwsim.kernel.compare import Difference
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import Problem


def report(run: KernelRun, all_notes: bool = False) -> str:
    """The whole report, no trailing newline. Of several notes of one name the first is shown, unless ``all_notes``."""
    parts = [[run.verdict], list(_differences(run)), list(account_lines(run.account, run.reason))]
    parts += [str(p).splitlines() for p in run.problems]
    parts.append(list(note_lines(run.notes, all_notes)))
    return "\n\n".join("\n".join(lines) for lines in parts if lines)


def line(run: KernelRun, width: int) -> str:
    """One line for one of several cases, the longest of whose names has ``width`` characters."""
    return f"  {run.case:<{width}}  {run.cycles:>8}  {run.verdict}"


def note_lines(notes: tuple[Problem, ...], all_notes: bool) -> Iterator[str]:
    groups: dict[str, list[Problem]] = {}
    for note in notes:
        groups.setdefault(note.name, []).append(note)
    for group in groups.values():
        each = all_notes or group[0].place is None
        for note in group if each else group[:1]:
            place = f" ({note.place})" if note.place else ""
            more = f", and {len(group) - 1} more such (--notes)" if not each and len(group) > 1 else ""
            yield f"  note     {note.found}{place}{more}"


def _differences(run: KernelRun) -> Iterator[str]:
    wrong = {name: d for name, d in run.differences.items() if d}
    width = max((len(element(name, d)) for name, d in wrong.items()), default=0)
    for name, difference in wrong.items():
        yield f"  {element(name, difference):<{width}}  {difference_values(difference)}"


def element(name: str, difference: Difference) -> str:
    return name if difference.index is None else f"{name}[{difference.index}]"


def difference_values(difference: Difference) -> str:
    got = "undefined" if difference.got is None else difference.got
    text = f"is {got}, expected {difference.expected}"
    if difference.size > 1:
        text += f"; {difference.differing} of {difference.size} elements differ"
        if difference.distance is not None:
            text += f", by up to {difference.distance} in the last place"
    return text


def account_lines(account: Account, reason: str) -> Iterator[str]:
    budget = ""
    if account.budget is not None and reason == "halt":
        beside = ", beside interrupt service" if account.judged_cycles != account.cycles else ""
        budget = f"      (budget {account.budget:.10g}{beside})"
    width = len(str(account.cycles))
    yield f"  {account}{budget}"
    rows = [(section.cycles, section.label, _section(section)) for section in account.sections]
    causes = ", ".join(f"{n} {cause}" for cause, n in account.stalls.items() if n)
    if account.stalled:
        rows.append((account.stalled, "stalled", causes))
    placed = sum(section.drain for section in account.sections)
    if account.drain > placed:
        rows.append((account.drain - placed, "drain", ""))
    label = max((len(name) for _, name, _ in rows), default=0)
    for cycles, name, text in rows:
        yield f"  {cycles:>{width}}  {name:<{label}}  {text}".rstrip()
    busiest = _busiest(account)
    if busiest:
        yield f"  Busiest: {busiest}."


def _section(section: SectionCost) -> str:
    said = []
    if section.passes > 1:
        said.append(f"{section.passes} passes of {section.beats}" if section.whole else f"{section.passes} passes")
    if section.drain:
        said.append(f"{section.drain} of them drain")
    return ", ".join(said)


def _busiest(account: Account) -> str:
    """The slots used most in the section that took most, and how much of it."""
    most = account.busiest
    if not most:
        return ""
    issued = account.section(account.hottest).bundles
    names = ", ".join(use.slot for use in most)
    share = "every beat" if most[0].used == issued else f"{most[0].used} of {issued} beats"
    return f"{names} ({share} of {account.hottest})"
