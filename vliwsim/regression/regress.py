"""A whole regression: kept verdicts first, everything else judged in parallel, and what it all comes to."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import Any

import attrs

from vliwsim.regression.claims import Options, Verdict
from vliwsim.regression.keep import Keep
from vliwsim.regression.sources import Target


@attrs.frozen
class Progress:
    """How far a regression is. ``doing``: what the last process that spoke is at."""

    done: int
    total: int
    failed: int
    doing: str


@attrs.frozen
class Result:
    """Verdicts in the order of the targets; ``kept`` of them were not judged again."""

    verdicts: tuple[Verdict, ...]
    kept: int

    @property
    def held(self) -> bool:
        return all(verdict.held for verdict in self.verdicts)

    @property
    def claims(self) -> int:
        return sum(len(verdict.claims) for verdict in self.verdicts)

    @property
    def failed(self) -> int:
        return sum(claim.held is False for verdict in self.verdicts for claim in verdict.claims)

    def as_json(self) -> dict[str, Any]:
        return {
            "held": self.held,
            "claims": self.claims,
            "failed": self.failed,
            "kernels": [{**verdict.as_json(), "seconds": verdict.seconds} for verdict in self.verdicts],
        }


def regress(
    targets: Sequence[Target],
    options: Options,
    keep: Keep,
    jobs: int | None = None,
    tell: Callable[[Progress], None] = lambda progress: None,
) -> Result:
    """Judge ``targets``. ``jobs``: processes at a time, by default one a processor."""
    found: dict[Target, Verdict] = {}
    for target in targets:
        verdict = keep.find(target)
        if verdict is not None:
            found[target] = verdict
    kept = len(found)
    left = [target for target in targets if target not in found]
    failed = sum(not verdict.held for verdict in found.values())

    def told(target: Target, doing: str) -> None:
        tell(Progress(len(found), len(targets), failed, f"{target.title}: {doing}" if doing else target.title))

    if left:
        from vliwsim.regression.workers import judge_all

        for target, verdict, opened in judge_all(left, jobs or processors(), options, told):
            found[target] = verdict
            failed += not verdict.held
            keep.put(target, verdict, opened)
            told(target, "")
    return Result(tuple(found[target] for target in targets), kept)


def processors() -> int:
    """Processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
