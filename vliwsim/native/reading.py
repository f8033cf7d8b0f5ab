"""Guards and operands are read."""

from __future__ import annotations

from vliwsim.native.contexts import Flight
from vliwsim.native.variables import Variables


class Reading(Variables):
    """Step 3 of a beat; equals :mod:`vliwsim.machine.reading`."""

    fresh_stall: str | None
    """Whether a fresh operand freezes the beat."""

    def guards(self) -> list[str | None]:
        for part in self.parts:
            guard = part.instruction.guard
            if guard and not self.core.interlocked:
                unknown = self.undefined(self.held(guard.register))
                if unknown is not None:
                    self.doubt(unknown)
        return [self.guard(part) for part in self.parts]

    def judge_fresh(self) -> None:
        stalls: list[str] = []
        for _, register, link in self.step.prepared.fresh:
            for flight in self.step.due:
                if self.walker.register(flight) != register:
                    continue
                if link.fresh == "reject":
                    self.doubt(self.on(flight))
                else:
                    stalls.append(self.on(flight))
        self.fresh_stall = None if self.core.interlocked else self.either(stalls)

    def judge_early(self, guards: list[str | None]) -> None:
        early = self.core.issue.early
        if self.core.interlocked or early == "old":
            return
        out: dict[int, list[Flight]] = {}
        for flight in self.step.staying:
            out.setdefault(self.walker.register(flight), []).append(flight)
        for k, part in enumerate(self.parts):
            named: dict[int, str | None] = {}
            for access in part.effects.reads:
                named[access.register] = guards[k]
            if part.instruction.guard:
                named[part.instruction.guard.register] = None
            for register, on in named.items():
                if register in out:
                    test = self.either([self.on(f) for f in out[register]])
                    unmade = self.invert(self.noted("early-read", k, register)) if early == "warn" else None
                    self.doubt(on, test, unmade)
