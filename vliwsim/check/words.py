"""Incidents said in terms of the source: one diagnostic each, with its place, found, allowed, try."""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.check.rules import ALLOWS, WRONG_ITEM
from vliwsim.check.verdict import NEEDS_INPUT, UNDECIDED, VIOLATED, EarlyRead, Incident, Judgement, Site, Verdict
from vliwsim.description.operations import Kind
from vliwsim.flow.beat import NAMED, UNKNOWN
from vliwsim.problems import Place, Problem, problem
from vliwsim.program.code import Immediate
from vliwsim.program.effects import effects
from vliwsim.program.kernel import Kernel

CANNOT_EXCLUDE = "cannot-exclude"
"""Of two results that guards may keep apart, or may not."""

PAIRS = ("lands-twice", "written-twice")


class Words:
    """Says what a check of ``kernel`` found."""

    def __init__(self, kernel: Kernel, verdict: Verdict) -> None:
        self.kernel, self.verdict = kernel, verdict
        self.core, self.bundles = kernel.core, kernel.program.bundles
        self.lines = kernel.text.splitlines()

    def at(self, bundle: int, within: int = 0) -> str:
        """A bundle as the source names it: ``loop@2``."""
        where = self.kernel.map.bundle_at
        if not 0 <= bundle < len(where):
            return "behind the last bundle"
        label, beat = where[bundle]
        return f"{label}@{beat + within}"

    def place(self, site: Site) -> Place | None:
        bundle, instruction = site
        places = self.kernel.map.instruction_places
        if 0 <= bundle < len(places) and 0 <= instruction < len(places[bundle]):
            return places[bundle][instruction]
        return None

    def excerpt(self, place: Place | None) -> str:
        return self.lines[place.line - 1] if place and 0 < place.line <= len(self.lines) else ""

    def name(self, site: Site) -> str:
        """The mnemonic of an operation and where it stands: ``dot.h2 (line 24, loop@0)``."""
        place = self.place(site)
        line = f"line {place.line}, " if place else ""
        return f"{self.mnemonic(site)} ({line}{self.at(site[0])})"

    def mnemonic(self, site: Site) -> str:
        return self.bundles[site[0]].instructions[site[1]].operation.name

    def problems(self) -> tuple[Problem, ...]:
        """Every violation, then what data decides or was not decided."""
        found = []
        for outcome in (VIOLATED, UNDECIDED, NEEDS_INPUT):
            for judgement in self.verdict.judgements.values():
                if judgement.outcome == outcome:
                    found += [self.problem(judgement, incident) for incident in judgement.incidents]
                    if outcome == UNDECIDED and not judgement.incidents:
                        found.append(self.undecided(judgement))
        return (*found, *self.notes())

    def violations(self) -> tuple[Problem, ...]:
        """The diagnostics of what is violated alone."""
        return tuple(self.problem(j, i) for j in self.verdict.violated for i in j.incidents)

    def problem(self, judgement: Judgement, incident: Incident) -> Problem:
        """One incident."""
        rule, violated = judgement.rule, judgement.outcome == VIOLATED
        name = CANNOT_EXCLUDE if rule in PAIRS and not incident.sure else rule
        site = self._main(incident)
        place = self.place(site) if site else self._output(incident) or self._last_line(incident.bundle)
        kind = "note" if not violated else "error" if rule == WRONG_ITEM else "illegal"
        return problem(
            name,
            self.found(incident),
            ALLOWS[rule],
            self.remedy(incident) if violated else "",
            place=place,
            excerpt=self.excerpt(place),
            kind=kind,
        )

    def _main(self, incident: Incident) -> Site | None:
        """The operation to point at: one of the bundle at hand, else the first behind it."""
        here = [site for site in incident.sites if site[0] == incident.bundle]
        return next(iter([*here, *incident.sites]), None)

    def _output(self, incident: Incident) -> Place | None:
        """Where the header says the output that an incident is about."""
        what, _, name = incident.detail.partition(",")[0].partition(" ")
        return next((item.place for item in self.kernel.items if what == "output" and item.name == name), None)

    def _last_line(self, bundle: int) -> Place | None:
        """The place of the nearest operation at or before a bundle."""
        places = self.kernel.map.instruction_places
        for index in range(min(bundle, len(places) - 1), -1, -1):
            if places[index]:
                return places[index][0]
        return None

    def undecided(self, judgement: Judgement) -> Problem:
        crowded = self.verdict.blown_up
        place = self._last_line(crowded) if crowded is not None else None
        many = f"; most of them are at {self.at(crowded)}" if crowded is not None else ""
        found = f"{judgement.rule}: {judgement.because}{many}"
        return problem(
            "undecided", found, ALLOWS[judgement.rule], place=place, excerpt=self.excerpt(place), kind="note"
        )

    def found(self, incident: Incident) -> str:
        """What was found, in one sentence."""
        rule, at = incident.rule, self.at(incident.bundle)
        register = self.core.register_names[incident.register] if incident.register is not None else ""
        may = "" if incident.sure else "may "
        sent = "; ".join(self.name(site) for site in incident.sites)
        one = self.name(incident.sites[0]) if incident.sites else ""
        if rule in PAIRS:
            return f"two results {may}reach {register} at {at}: {sent}"
        if rule == "write-ports":
            return f"more results {may}land in cluster {incident.detail} at {at} than it has write ports: {sent}"
        if rule == "fresh":
            return f"{register} {may}{self._s('land', may)} in the very beat {one} reads it over a link"
        if rule == "busy":
            slot = self.core.slots[self.bundles[incident.sites[0][0]].instructions[incident.sites[0][1]].slot].name
            return f"the unit of {slot} is still taken when {one} comes"
        if rule == "early-read":
            return f"{one} {may}{self._s('read', may)} {register} before a result in flight for it lands: {sent}"
        if rule == "undefined-used":
            return self._undefined(incident, one, register)
        if rule == "two-redirects":
            return f"two branches of {at} {may}{'are' if incident.sure else 'be'} taken: {sent}"
        if rule == "branch-overlap":
            return f"{sent} with another branch in flight" if len(incident.sites) == 1 else f"{sent} in one bundle"
        if rule == "link-nowhere":
            return f"no word begins {self.core.branch.latency} bundles behind {one}"
        if rule == "ran-off-the-end":
            return f"{incident.detail}, at {at}{f': {one}' if one else ''}"
        if rule == "branch-past-halt":
            return f"halt at {at} {may}{self._s('come', may)} with a branch in flight: {sent}"
        if rule == "indirect-target":
            return self._target(incident, one)
        if rule == WRONG_ITEM:
            return self._item(incident, one, register)
        if rule in ("misaligned", "out-of-array"):
            may_be = {"misaligned": "be misaligned", "out-of-array": "be outside its array"}[rule]
            detail = f": its address is {incident.detail}" if incident.detail else ""
            return f"the address of {one} {'is misaligned' if incident.sure else f'may {may_be}'}{detail}"
        if rule == "store-twice":
            return f"two stores of {at} {may}{self._s('reach', may)} one byte: {sent}"
        if rule == "bank-conflict":
            return f"accesses of {at} {may}meet in a bank: {sent}"
        return f"{incident.detail}: {one}" if incident.detail else one

    @staticmethod
    def _s(verb: str, may: str) -> str:
        return verb if may else f"{verb}es" if verb.endswith("ch") else f"{verb}s"

    def _target(self, incident: Incident, one: str) -> str:
        if incident.detail == UNKNOWN:
            return f"where {one} goes is not known"
        bundle, instruction = incident.sites[0]
        begins, targets = self.kernel.program.index_at, self.bundles[bundle].instructions[instruction].targets
        names = sentence([self.at(begins[place.value]) for place in targets if isinstance(place, Immediate)])
        if incident.detail == NAMED:
            return f"data say which way {one} goes, to {names}; a run that would go elsewhere stops there"
        may = "goes" if incident.sure else "may go"
        where = begins.get(int(incident.detail, 0))
        to = f"byte {incident.detail}" if where is None else self.at(where)
        return f"{one} {may} to {to}, and names {names}"

    def _undefined(self, incident: Incident, one: str, register: str) -> str:
        what, _, why = incident.detail.partition(", ")
        verb = "is" if incident.sure else "may be"
        if not incident.sites and incident.register is None:
            return f"{incident.detail} may be undefined"
        if what.startswith("output"):
            return (
                f"{what} ({register}) {verb} undefined when {self.at(incident.bundle)} halts{f' {why}' if why else ''}"
            )
        whose = f"{what} {register}" if what == "guard" else f"{register}, {_ARTICLE[what]} {what},"
        return f"{whose} of {one} {verb} undefined{f' {why}' if why else ''}"

    def _item(self, incident: Incident, one: str, register: str) -> str:
        found, wanted, *more = incident.detail.split()
        site = incident.sites[0]
        tag = self.kernel.map.items[site[0]][site[1]]
        assert tag is not None
        says = f"works on item {tag.age}"
        if incident.register in dict(tag.others):
            says += f" with {register} of {wanted}"
        return f"{one} {says}, but at {self.at(site[0])} {register} is of item {found}{' or older' if more else ''}"

    def remedy(self, incident: Incident) -> str:
        """The obvious change, where there is one."""
        if incident.rule in PAIRS and incident.sites:
            site = incident.sites[-1]
            place, (_, beat) = self.place(site), self.kernel.map.bundle_at[site[0]]
            return f"line {place.line} at @{beat + 1}" if place else ""
        if incident.rule == "ran-off-the-end":
            return "halt in the last bundle"
        if incident.rule == "undefined-used" and incident.register is not None:
            name = self.core.register_names[incident.register]
            return f"a later stamp where a value for {name} is still in flight; else a value in it first, or a `given`"
        if incident.rule == WRONG_ITEM:
            return self._right_stamp(incident)
        return ""

    def _right_stamp(self, incident: Incident) -> str:
        """The beats where all operands are of the items that the operation says, else the item it does work on."""
        site = incident.sites[0]
        found = incident.detail.split()[0]
        right = self.verdict.right_beats.get(site, ())
        section = self.kernel.map.bundle_at[site[0]][0]
        same = [b for b in right if self.kernel.map.bundle_at[b][0] == section]
        if same or right:
            nearest = min(same or right, key=lambda b: (abs(b - site[0]), b))
            label, beat = self.kernel.map.bundle_at[nearest]
            if label == section:
                return f"@{beat}, where it is of the item said"
            if beat == 0 and nearest > site[0]:  # just behind a section that an earlier stamp has made too short
                beats = sum(self.bundles[k].beats for k in range(site[0], nearest))
                return f"@{self.kernel.map.bundle_at[site[0]][1] + beats}, for which {section} has become too short"
            return f"{label}@{beat}"
        return f"item {found}, or an earlier or later stamp for what sends it"

    def notes(self) -> tuple[Problem, ...]:
        """One note on reads before a landing of which the source does not say that they are meant."""
        unsaid = [early for early in self.verdict.early if early.meant is None]
        if not unsaid:
            return ()
        first = unsaid[0]
        place = self.place(first.site)
        more = f", and {len(unsaid) - 1} more" if len(unsaid) > 1 else ""
        found = f"{self.early(first)}; the source does not say that it is meant{more}"
        return (
            problem(
                "item-not-said",
                found,
                "",
                "item N behind the operation: the item of the loop it works on, counted from the newest",
                place=place,
                excerpt=self.excerpt(place),
                kind="note",
            ),
        )

    def early(self, read: EarlyRead) -> str:
        """One read before a landing: who reads what, and what is in flight."""
        flights = ", ".join(
            f"{self.mnemonic(site)} of {self.at(site[0])} in {beats}{'' if sure else ' (if it was on)'}"
            for site, beats, sure in read.flights
        )
        return (
            f"{self.name(read.site)} reads {self.core.register_names[read.register]} with results in flight: {flights}"
        )

    def flight(self, site: Site, incident: Incident) -> int:
        """Beats until what an operation sends lands: a branch, or the result that the incident is about; 0 of none."""
        instruction = self.bundles[site[0]].instructions[site[1]]
        if instruction.operation.kind is Kind.BRANCH and incident.register is None:
            return self.core.branch.latency
        chosen = [w.latency for w in effects(self.core, instruction).writes if incident.register in (None, w.register)]
        return max(chosen, default=0)


_ARTICLE = {"address": "in the", "count": "in the", "condition": "in the", "target": "the"}


def sentence(names: Sequence[str]) -> str:
    """Names as one reads them: ``a, b and c``."""
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}" if names else ""
