"""What is said of a kernel and whether it holds: plain data, so that it can be kept, sent and printed."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import PurePath
from typing import Any

import attrs

KINDS = ("legal", "reference", "cases", "case", "golden", "budget", "interrupts")


@attrs.frozen
class Claim:
    """One claim about a kernel on a core.

    ``kind``: one of :data:`KINDS`. ``name``: of the case, else the kind again.
    ``held``: None where it could not be judged. ``says``: one line. ``detail``: what is wrong, as several lines.
    ``lines``: the source lines it leads to, nearest first. ``debug``: a command that goes to the place. ``cycles``: of
    the run it is about, if it is about one.
    """

    kind: str
    name: str
    held: bool | None
    says: str = ""
    detail: str = ""
    lines: tuple[int, ...] = ()
    debug: str = ""
    cycles: int | None = None

    @property
    def title(self) -> str:
        """``case zeros``, ``legal``."""
        return self.kind if self.name == self.kind else f"{self.kind} {self.name}"

    def as_json(self) -> dict[str, object]:
        whole = attrs.asdict(self)
        return {
            key: value for key, value in whole.items() if value not in ("", ()) and (key, value) != ("cycles", None)
        }


@attrs.frozen
class Change:
    """What a golden's case became, in cycles. ``why``: ``core``, ``source``, or ``tool`` where neither changed."""

    case: str
    before: int
    after: int
    why: str


@attrs.frozen
class Verdict:
    """All that was found of one source on one core.

    ``source``: its path as given. ``cycles`` by case. ``golden_bytes``: code bytes in the goldens, None without any.
    ``notes``: odd things that break no claim. ``measures``: what was asked for beside the claims (headroom, coverage,
    interrupts, mutants), plain data by name. ``kept``: False where the verdict may not be kept for later.
    """

    source: str
    kernel: str
    core: str
    claims: tuple[Claim, ...]
    code_bytes: int | None = None
    golden_bytes: int | None = None
    cycles: Mapping[str, int] = attrs.field(factory=dict)
    changes: tuple[Change, ...] = ()
    notes: tuple[str, ...] = ()
    measures: Mapping[str, Any] = attrs.field(factory=dict)
    seconds: float = 0.0
    kept: bool = True

    @property
    def held(self) -> bool:
        return all(claim.held is not False for claim in self.claims)

    @property
    def title(self) -> str:
        """``energy on pair7``; of a source that is not called like its kernel, ``weighted_sum/plain on pair7``."""
        if not self.core or not self.kernel:
            return self.source
        stem = PurePath(self.source).stem
        return f"{self.kernel}{'' if stem == self.kernel else f'/{stem}'} on {self.core}"

    @property
    def broken(self) -> list[Claim]:
        """The claims that do not hold, by kind; of cases the shortest run first, which is easiest to follow."""
        bad = [claim for claim in self.claims if claim.held is False]
        return sorted(bad, key=lambda claim: (KINDS.index(claim.kind), claim.cycles or 0))

    def count(self, kind: str) -> int:
        return sum(claim.kind == kind for claim in self.claims)

    def as_json(self) -> dict[str, Any]:
        """Plain data, and the way back in :func:`verdict_from_json`."""
        return {
            **{f.name: getattr(self, f.name) for f in attrs.fields(Verdict) if f.name not in _LISTS},
            "held": self.held,
            "cycles": dict(self.cycles),
            "notes": list(self.notes),
            "claims": [claim.as_json() for claim in self.claims],
            "changes": [attrs.asdict(change) for change in self.changes],
        }


_LISTS = ("claims", "changes", "notes", "cycles")


def verdict_from_json(data: Mapping[str, Any]) -> Verdict:
    """The verdict that :meth:`Verdict.as_json` described; raises KeyError, TypeError or ValueError if it did not."""
    plain = {k: v for k, v in data.items() if k not in (*_LISTS, "held")}
    claims = tuple(Claim(**{**claim, "lines": tuple(claim.get("lines", ()))}) for claim in data["claims"])
    changes = tuple(Change(**change) for change in data["changes"])
    return Verdict(**plain, claims=claims, changes=changes, notes=tuple(data["notes"]), cycles={**data["cycles"]})


@attrs.frozen
class Options:
    """What a regression is asked for. ``limit``: cycles a run; ``seconds``: of one call of the reference."""

    limit: int = 10_000_000
    seconds: float = 60.0
    reference: bool = True
    interrupts: bool = False
    headroom: bool = False
    coverage: bool = False
    mutants: int = 0
