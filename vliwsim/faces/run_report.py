"""A run as text: the verdict sentence, what differs, the account that adds up, what is illegal, notes."""

from __future__ import annotations

from collections.abc import Iterator

from vliwsim.kernel.account import Account, SectionCost
from vliwsim.kernel.compare import Difference
from vliwsim.kernel.runner import KernelRun


def report(run: KernelRun) -> str:
    """The whole report, no trailing newline."""
    parts = [[run.verdict], list(_differences(run)), list(_account(run.account, run.reason))]
    parts += [str(p).splitlines() for p in run.problems]
    notes = [f"  note     {_note(p.found, str(p.place) if p.place else '')}" for p in run.notes]
    parts.append(notes)
    return "\n\n".join("\n".join(lines) for lines in parts if lines)


def line(run: KernelRun) -> str:
    """One line for one of several cases."""
    return f"  {run.case:<16} {run.cycles:>9}  {run.verdict}"


def _note(found: str, place: str) -> str:
    return f"{found} ({place})" if place else found


def _differences(run: KernelRun) -> Iterator[str]:
    wrong = {name: d for name, d in run.differences.items() if d}
    width = max((len(_element(name, d)) for name, d in wrong.items()), default=0)
    for name, difference in wrong.items():
        yield f"  {_element(name, difference):<{width}}  {_values(difference)}"


def _element(name: str, difference: Difference) -> str:
    return name if difference.index is None else f"{name}[{difference.index}]"


def _values(difference: Difference) -> str:
    text = f"is {difference.got}, expected {difference.expected}"
    if difference.size > 1:
        text += f"; {difference.differing} of {difference.size} elements differ"
        if difference.distance is not None:
            text += f", by up to {difference.distance} in the last place"
    return text


def _account(account: Account, reason: str) -> Iterator[str]:
    budget = "" if account.budget is None or reason != "halt" else f"      (budget {account.budget:g})"
    if account.budget is not None and account.budget == int(account.budget) and budget:
        budget = f"      (budget {int(account.budget)})"
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
