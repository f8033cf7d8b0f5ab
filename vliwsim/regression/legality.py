"""The one place where regression meets the static checks."""

from __future__ import annotations

from vliwsim.program.kernel import Kernel
from vliwsim.regression.claims import Claim
from vliwsim.regression.explain import named_lines, unread_text


def legality(kernel: Kernel) -> Claim:
    """The claim that no path of the assembled ``kernel`` breaks a rule for certain.

    What only data decides is looked for in every case.
    """
    from vliwsim.check.judge import check_kernel
    from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED
    from vliwsim.check.words import Words

    verdict = check_kernel(kernel, interrupts=False)
    problems = Words(kernel, verdict).violations()
    if problems:
        first = problems[0]
        more = f" (and {len(problems) - 1} more)" if len(problems) > 1 else ""
        unused, unread = unread_text(kernel)
        text = "\n".join([*(str(p) for p in problems[:8]), *([unused] if unused else [])])
        lines = tuple(dict.fromkeys([*named_lines(problems), *unread]))
        return Claim("legal", "legal", False, f"{first.name}: {first.found}{more}", text, lines)
    outcomes = [judgement.outcome for judgement in verdict.judgements.values()]
    counts = [(outcomes.count(outcome), outcome) for outcome in (PROVED, NEEDS_INPUT, UNDECIDED)]
    says = ", ".join(f"{count} {outcome}" for count, outcome in counts if count)
    return Claim("legal", "legal", True, f"rules: {says}")


def unsafe_bundles(kernel: Kernel) -> frozenset[int] | None:
    """Indices of the bundles that the checks call unsafe for interrupts; None where they cannot say."""
    from vliwsim.check.interrupts import UNSAFE
    from vliwsim.check.judge import check_kernel

    found = check_kernel(kernel).interrupts
    return None if found is None else frozenset(k for k, word in found.bundles.items() if word == UNSAFE)
