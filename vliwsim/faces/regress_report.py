"""A regression as text: a line a kernel, what does not hold, what changed since the goldens, and the sum of it all."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from vliwsim.regression.claims import Verdict
from vliwsim.regression.regress import Result


def line(verdict: Verdict, width: int) -> str:
    """One kernel: what holds and what does not."""
    bad = [claim for claim in verdict.claims if claim.held is False]
    said = [f"{len(bad)} of {len(verdict.claims)} claims do not hold"] if bad else ["holds"]
    said.append(f"{verdict.count('case')} cases")
    if goldens := verdict.count("golden"):
        said.append(f"{goldens} golden{'' if goldens == 1 else 's'}")
    if verdict.code_bytes is not None:
        said.append(f"{verdict.code_bytes} bytes of code")
    return f"  {'✗' if bad else '·'} {verdict.title:<{width}}  {', '.join(said)}"


def report(result: Result, longest: int | None = 3) -> str:
    """The whole report, no trailing newline. ``longest``: failures shown of one kernel, None for all of them."""
    verdicts = result.verdicts
    width = max((len(v.title) for v in verdicts), default=0)
    parts = ["\n".join(line(verdict, width) for verdict in verdicts)]
    parts += [text for verdict in verdicts for text in failures(verdict, longest)]
    parts += [text for verdict in verdicts for text in measures(verdict)]
    if notes := [f"  note     {v.title}: {note}" for v in verdicts for note in v.notes]:
        parts.append("\n".join(notes))
    if changed := changes(verdicts):
        parts.append("\n".join(changed))
    parts.append(conclusion(result))
    return "\n\n".join(part for part in parts if part)


def failures(verdict: Verdict, longest: int | None = None) -> Iterator[str]:
    """What does not hold, a block a claim."""
    bad = verdict.broken
    for claim in bad[:longest]:
        yield f"{verdict.title}, {claim.title}: {claim.says}\n{claim.detail}".rstrip()
    if longest is not None and len(bad) > longest:
        names = ", ".join(claim.title for claim in bad[longest : longest + 8])
        more = " …" if len(bad) > longest + 8 else ""
        yield f"{verdict.title}: {len(bad) - longest} more do not hold (--all): {names}{more}"


def changes(verdicts: Sequence[Verdict]) -> list[str]:
    """What changed since the goldens, in cycles and bytes."""
    lines = []
    for verdict in verdicts:
        texts = []
        for change in verdict.changes:
            percent = 100 * (change.after - change.before) / change.before if change.before else 0
            texts.append(f"{change.case} {change.before} → {change.after} cycles ({percent:+.1f} %)")
        if verdict.golden_bytes is not None and verdict.golden_bytes != verdict.code_bytes:
            texts.append(f"code {verdict.golden_bytes} → {verdict.code_bytes} bytes")
        if texts:
            why = {"core": "another core", "source": "another source", "tool": "another vliwsim"}
            because = ", ".join(dict.fromkeys(why.get(c.why, c.why) for c in verdict.changes))
            shown = "; ".join(texts[:4]) + (f"; and {len(texts) - 4} more" if len(texts) > 4 else "")
            lines.append(f"  {verdict.title}: {shown}" + (f"  [{because}]" if because else ""))
    return ["Since the goldens:", *lines] if lines else []


def conclusion(result: Result) -> str:
    """``9 kernels, 217 claims: all hold (7 unchanged).``"""
    kernels = f"{len(result.verdicts)} kernel{'' if len(result.verdicts) == 1 else 's'}"
    judged = f"{result.claims} claim{'' if result.claims == 1 else 's'}: " + (
        f"{result.failed} do not hold" if result.failed else "all hold"
    )
    kept = f" ({result.kept} unchanged since they were last judged)" if result.kept else ""
    return f"{kernels}, {judged}{kept}."


def measures(verdict: Verdict) -> Iterator[str]:
    """What was measured beside the claims."""
    if not verdict.measures:
        return
    from vliwsim.faces.measure_report import blocks

    for block in blocks(verdict.measures):
        yield f"{verdict.title}, {block}"
