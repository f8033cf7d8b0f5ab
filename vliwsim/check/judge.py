"""From a program to a verdict: walk its contexts, let what is known of values spread, and judge each rule."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence

from vliwsim.check.inputs import Inputs, inputs_of
from vliwsim.check.interrupts import Interrupts, interrupts_of
from vliwsim.check.items import Items, Tags, right_beats
from vliwsim.check.memory import Addresses
from vliwsim.check.rules import ALONE, INDIRECT, RULES, WRONG_ITEM, cannot_break
from vliwsim.check.spread import Spread
from vliwsim.check.undefined import PERHAPS, SURELY, Definedness, Use, way
from vliwsim.check.verdict import (
    NEEDS_INPUT,
    PROVED,
    UNDECIDED,
    VIOLATED,
    EarlyRead,
    Incident,
    Judgement,
    Moment,
    Site,
    Verdict,
    Wait,
)
from vliwsim.description.operations import Kind
from vliwsim.flow.beat import UNKNOWN
from vliwsim.flow.graph import MOST_CONTEXTS, Graph
from vliwsim.machine.parts import Part
from vliwsim.program.code import Program
from vliwsim.program.kernel import ItemTag, Kernel

NOTHING_GIVEN = Inputs()
MOST_PATHS = 20
"""Violations of one rule that come with their paths; of long programs each is long."""

COUNTED: Mapping[str, tuple[int, Callable[[Part], bool]]] = {
    "two-redirects": (1, lambda part: part.branches),
    "store-twice": (1, lambda part: part.operation.kind is Kind.STORE),
    "bank-conflict": (1, lambda part: part.operation.access is not None),
    "misaligned": (0, lambda part: part.operation.access is not None),
    "out-of-array": (0, lambda part: part.operation.access is not None),
    "link-nowhere": (0, lambda part: part.uses_link and part.link is None),
    INDIRECT: (0, lambda part: part.target_register is not None),
}
"""Rules that no bundle breaks which has at most so many operations of a kind."""


def check_kernel(kernel: Kernel, cap: int = MOST_CONTEXTS, *, interrupts: bool = True) -> Verdict:
    """The verdict on a kernel, for every input that its header allows. See :func:`judge`."""
    return judge(kernel.program, inputs_of(kernel), kernel.map.items, cap, interrupts=interrupts)


def judge(
    program: Program,
    inputs: Inputs = NOTHING_GIVEN,
    tags: Sequence[Sequence[ItemTag | None]] = (),
    cap: int = MOST_CONTEXTS,
    *,
    interrupts: bool = True,
) -> Verdict:
    """The verdict on a program, for every run without interrupts.

    ``cap``: contexts after which it gives up and calls undecided what is not violated. ``interrupts``: say also where
    one may be taken.
    """
    graph = Graph(program, inputs.facts)
    complete = graph.walk(cap)
    return _Judge(graph, inputs, tags, complete).verdict(interrupts)


class _Judge:
    """One verdict in the making."""

    def __init__(self, graph: Graph, inputs: Inputs, tags: Sequence[Sequence[ItemTag | None]], complete: bool) -> None:
        self.graph, self.inputs, self.tags, self.complete = graph, inputs, tags, complete
        self.core = graph.ready.core
        self.found: dict[str, dict[object, Incident]] = {}
        self.tagged = any(tag for bundle in tags for tag in bundle)
        self.right_beats: dict[Site, tuple[int, ...]] = {}
        self.astray = False
        """Some branch goes where nobody knows."""

    def verdict(self, with_interrupts: bool) -> Verdict:
        self._flow()
        self._undefined()
        self._memory()
        if self.tagged:
            self._items()
        found: Interrupts | None = interrupts_of(self.graph) if with_interrupts and self.complete else None
        return Verdict(
            len(self.graph.contexts),
            self.complete,
            None if self.complete else self.graph.crowded_bundle(),
            {rule: self._judgement(rule) for rule in RULES if rule != WRONG_ITEM or self.tagged},
            self._early(),
            self._waits(),
            found,
            self.tagged,
            self.right_beats,
            self.astray,
        )

    def _judgement(self, rule: str) -> Judgement:
        incidents = tuple(self.found.get(rule, {}).values())
        sure = tuple(i for i in incidents if i.sure)
        if sure:
            return Judgement(rule, VIOLATED, sure)
        because = cannot_break(self.core, rule)
        if because:
            return Judgement(rule, PROVED, (), because)
        unknown = rule != INDIRECT and self.astray
        if (unknown or not self.complete) and self._nothing_to_break(rule):
            return Judgement(rule, PROVED, (), "no bundle of the program could")
        if not self.complete:
            return Judgement(rule, UNDECIDED, incidents, f"more than {len(self.graph.contexts) - 1} contexts")
        if unknown:
            return Judgement(rule, UNDECIDED, incidents, "a branch goes where its register says, which is not known")
        return Judgement(rule, NEEDS_INPUT if incidents else PROVED, incidents)

    def _nothing_to_break(self, rule: str) -> bool:
        """Whether no bundle, wherever it is reached from, has what it takes to break a rule."""
        bundles = [self.graph.ready[index] for index in range(len(self.graph.ready.program.bundles))]
        if rule in ALONE:
            return not any(bundle.static for bundle in bundles)
        counted = COUNTED.get(rule)
        if counted is None:
            return False
        most, what = counted
        return all(sum(map(what, bundle.parts)) <= most for bundle in bundles)

    def _add(self, rule: str, sure: bool, context: int, sites: Iterable[Site], **more: object) -> None:
        """An incident; of those with the same operations the first is kept, one for certain before others."""
        way = more.pop("way", None)
        bundle, sites = self.graph.contexts[context].at, tuple(sites)
        key = bundle, sites, more.get("register")
        known = self.found.setdefault(rule, {}).get(key)
        if known is None or (sure and not known.sure):
            path: tuple[Moment, ...] = ()
            if sure and sum(i.sure for i in self.found[rule].values()) < MOST_PATHS:
                path = self.moments(way or self.graph.path(context))  # type: ignore[arg-type]
            self.found[rule][key] = Incident(rule, sure, bundle, sites, path=path, **more)  # type: ignore[arg-type]

    def moments(self, way: Sequence[int]) -> tuple[Moment, ...]:
        """The beats along some contexts; forks take no time."""
        found = []
        for index in way:
            context, beat = self.graph.contexts[index], self.graph.beats[index]
            if beat is not None and beat.did != "fork":
                sites = [self.graph.ready.sites[number] for number, _ in beat.landed]
                landed = tuple(((site.bundle, site.instruction), site.write.register) for site in sites)
                found.append(Moment(context.at, context.within, beat.did, landed))
        return tuple(found)

    def _flow(self) -> None:
        """What the graph itself finds."""
        for index, beat in self.graph.findings():
            for finding in beat.findings:
                rule = finding.rule
                if rule == "early-read" and cannot_break(self.core, rule):
                    continue
                sure = finding.sure or rule in ALONE
                self.astray |= rule == INDIRECT and finding.detail == UNKNOWN
                self._add(rule, sure, index, finding.sites, register=finding.register, detail=finding.detail)

    def _undefined(self) -> None:
        domain = Definedness(self.graph, self.inputs)
        spread = Spread(self.graph, domain)
        for index, registers in enumerate(spread.read):
            beat = self.graph.beats[index]
            if registers is None or beat is None:
                continue
            if None in self.graph.successors(index):
                for use in domain.at_the_end(spread, index):
                    self._use(spread, domain, use)
            for use in domain.uses(index, registers):
                self._use(spread, domain, use)
        if self.inputs.stored and self.complete:
            detail = f"bytes of {', '.join(self.inputs.stored)} that nothing is stored to"
            self.found.setdefault("undefined-used", {})["stored"] = Incident(
                "undefined-used", False, self.graph.contexts[0].at, (), detail=detail
            )

    def _use(self, spread: Spread[int], domain: Definedness, use: Use) -> None:
        sure = use.sure and use.level == SURELY
        at = self.graph.contexts[use.context].at
        sites = [] if use.instruction is None else [(at, use.instruction)]
        why = "" if use.level == SURELY else "on some data" if use.level == PERHAPS else "from memory"
        detail = f"{use.what}, {why}" if why else use.what
        path = way(spread, domain, use) if sure else None
        self._add("undefined-used", sure, use.context, sites, register=use.register, detail=detail, way=path)

    def _memory(self) -> None:
        domain = Addresses(self.graph, self.inputs)
        spread = Spread(self.graph, domain)
        for index, registers in enumerate(spread.read):
            beat = self.graph.beats[index]
            if registers is None or beat is None or not beat.guards:
                continue
            at = self.graph.contexts[index].at
            for doubt in domain.doubts(index, registers):
                sites = [(at, k) for k in doubt.instructions]
                self._add(doubt.rule, doubt.sure, index, sites, detail=doubt.detail)

    def _items(self) -> None:
        domain = Items(self.graph, self.tags)
        spread: Spread[Tags] = Spread(self.graph, domain)
        for index, registers in enumerate(spread.read):
            beat = self.graph.beats[index]
            if registers is not None and beat is not None and beat.guards:
                for wrong in domain.wrong(index, registers):
                    detail = f"{wrong.found} {wrong.wanted}" + (" oldest" if wrong.found == domain.oldest else "")
                    site = wrong.bundle, wrong.instruction
                    if site not in self.right_beats:
                        self.right_beats[site] = tuple(right_beats(spread, domain, *site))
                    self._add(WRONG_ITEM, True, index, [site], register=wrong.register, detail=detail)

    def _early(self) -> tuple[EarlyRead, ...]:
        """Reads with results in flight, one for each operand of the program."""
        found: dict[tuple[Site, int], dict[tuple[Site, int], bool]] = {}
        sites = self.graph.ready.sites
        for index, beat in self.graph.findings():
            for finding in beat.findings:
                if finding.rule != "early-read" or finding.register is None:
                    continue
                flights = found.setdefault((finding.sites[0], finding.register), {})
                for flight in self.graph.contexts[index].flights:
                    site = sites[flight.number]
                    if flight.beats and site.write.register == finding.register:
                        key = (site.bundle, site.instruction), flight.beats
                        flights[key] = flights.get(key, True) and not flight.on
        wrong = {(i.sites[0], i.register) for i in self.found.get(WRONG_ITEM, {}).values()}
        return tuple(
            EarlyRead(
                site,
                register,
                tuple((s, beats, sure) for (s, beats), sure in sorted(flights.items(), key=lambda f: f[0][::-1])),
                self._meant(site, (site, register) in wrong),
            )
            for (site, register), flights in sorted(found.items())
        )

    def _meant(self, site: Site, wrong: bool) -> bool | None:
        bundle, instruction = site
        tagged = self.tagged and self.tags[bundle][instruction] is not None
        return (not wrong) if tagged else None

    def _waits(self) -> tuple[Wait, ...]:
        """How long each bundle is held up, over all ways to it."""
        graph = self.graph
        waited: dict[int, tuple[int, int]] = {0: (0, 0)}
        ahead = [0]
        while ahead:
            index = ahead.pop()
            beat = graph.beats[index]
            if beat is None:
                continue
            held = beat.did in ("hold", "fresh")
            for target in graph.successors(index):
                if target is None:
                    continue
                least, most = waited[index] if held or beat.did == "fork" else (0, 0)
                here = least + held, most + held
                known = waited.get(target, here)
                joined = min(known[0], here[0]), max(known[1], here[1])
                if target not in waited or joined != known:
                    waited[target] = joined
                    ahead.append(target)
        bundles: dict[int, tuple[int, int]] = {}
        for index, (least, most) in waited.items():
            beat = graph.beats[index]
            if beat is not None and beat.did == "issue" and not graph.contexts[index].within:
                known = bundles.get(graph.contexts[index].at, (least, most))
                bundles[graph.contexts[index].at] = min(known[0], least), max(known[1], most)
        return tuple(Wait(bundle, *beats) for bundle, beats in sorted(bundles.items()) if beats[1])
