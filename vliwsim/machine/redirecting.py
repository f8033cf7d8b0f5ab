"""Step 5, redirect: judge the bundle's branches and choose the next bundle."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from vliwsim.description.core import Core
from vliwsim.description.operations import Kind
from vliwsim.machine.hazards import Cause
from vliwsim.machine.issued import Issued, stop
from vliwsim.machine.prepared import Preparation, Prepared
from vliwsim.machine.state import State


def redirect(ready: Preparation, state: State, prepared: Prepared, issued: Issued) -> None:
    """Step 5: judge the bundle's branches and choose the next bundle; advances the issue index."""
    core, index = ready.core, state.issue
    latency = core.branch.latency
    causes = [Cause(prepared.index, k, state.beat) for k, _ in issued.taken]
    if len(issued.taken) > 1:
        raise stop(
            "two-redirects", state, prepared.index, f"{len(issued.taken)} branches of one bundle are taken", causes
        )
    if issued.taken:
        state.redirects[index + latency] = issued.taken[0][1]
    lands = index + 1 in state.redirects
    following = state.redirects.get(index + 1) if lands else following_bundle(state, prepared)
    if not issued.halts and (following is None or following >= len(ready.program.bundles)):
        found = "a branch goes where no bundle begins" if lands else "the program ends without halt"
        raise stop("ran-off-the-end", state, prepared.index, found, causes if lands else [])
    branches = [k for k, part in enumerate(prepared.parts) if part.branches]
    judge_branches(ready, state, prepared, issued, branches)
    if issued.halts and state.redirects:
        found = f"halt with a taken branch in flight, to land {min(state.redirects) - index} bundles on"
        raise stop("branch-past-halt", state, prepared.index, found, [*causes, *_halts(prepared, issued, state)])
    if branches:
        state.last_branch = index
    state.issue += 1
    if issued.halts:
        state.halt_beat = state.beat
        return
    assert following is not None
    if lands:
        del state.redirects[index + 1]
        state.at, state.within = following, 0
        for cause, cycles in redirect_freezes(ready, following):
            state.frozen.append([cause, cycles])
    elif following == prepared.index:
        state.within += 1
    else:
        state.at, state.within = following, 0


def following_bundle(state: State, prepared: Prepared) -> int:
    """The next bundle's index without a redirect: the same idle word while it lasts."""
    return prepared.index if state.within + 1 < prepared.bundle.beats else prepared.index + 1


def redirect_freezes(ready: Preparation, target: int) -> list[tuple[str, int]]:
    """What a taken redirect to ``target`` costs at once: the taken penalty, and the freeze of a straddling target."""
    core = ready.core
    straddle = core.words.straddle_freeze if ready.program.bundles[target].straddles else 0
    return [(c, n) for c, n in (("penalty", core.branch.taken_penalty), ("straddle", straddle)) if n]


def judge_branches(
    ready: Preparation, state: State, prepared: Prepared, issued: Issued, branches: Sequence[int]
) -> None:
    """``branch-overlap`` where the core forbids it, then ``link-nowhere``."""
    core = ready.core
    causes = [Cause(prepared.index, k, state.beat) for k in branches]
    if not core.branch.overlap and branches:
        if len(branches) > 1:
            raise stop("branch-overlap", state, prepared.index, f"{len(branches)} branches in one bundle", causes)
        if state.issue - state.last_branch < core.branch.latency:
            found = (
                f"a branch {state.issue - state.last_branch} bundles behind another, of latency {core.branch.latency}"
            )
            raise stop("branch-overlap", state, prepared.index, found, causes)
    for k in branches:
        part = prepared.parts[k]
        if issued.on[k] and part.uses_link and part.link is None:
            found = f"no word begins {core.branch.latency} bundles behind this {part.operation.name}"
            raise stop("link-nowhere", state, prepared.index, found, [Cause(prepared.index, k, state.beat)])


def _halts(prepared: Prepared, issued: Issued, state: State) -> Iterator[Cause]:
    for k, part in enumerate(prepared.parts):
        if issued.on[k] and part.operation.kind is Kind.HALT:
            yield Cause(prepared.index, k, state.beat)


def branch_in_flight(core: Core, state: State) -> bool:
    """Whether a branch, on or off, has issued and not yet reached its landing index."""
    return state.issue - state.last_branch < core.branch.latency
