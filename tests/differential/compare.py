"""Holding engines to the model: one trial, every engine, the complete outcome."""

from __future__ import annotations

from dataclasses import fields, replace

from . import model, real
from .generator import Trial
from .plain import Outcome

ENGINES = {
    "hot loop": dict(),
    "definition": dict(careful=True),
    "cycle by cycle": dict(log=True),
    "snapshots": dict(log=True, snapshots=True),
    "native": dict(native=True),
    "native, undefined bytes too": dict(native=True, following=True),
}
"""Ways to run the package's machine: keyword arguments of :func:`.real.run`."""


def plainly(outcome: Outcome) -> Outcome:
    """An outcome with its warnings as first beats of (bundle, register), in order."""
    first: dict[tuple[int, int], int] = {}
    for beat, bundle, register in outcome.warnings:
        first.setdefault((bundle, register), beat)
    return replace(outcome, warnings=tuple(sorted((beat, *site) for site, beat in first.items())))


def differences(trial: Trial, *engines: str) -> list[str]:
    """What differs from the model, engine by engine; empty when all agree."""
    logged = any("log" in ENGINES[name] for name in engines)
    run = {"interrupt_at": trial.interrupt_at, "limit": trial.limit}
    wanted = plainly(model.run(trial.core, trial.program, trial.registers, trial.regions, log=logged, **run))
    found = []
    for name in engines:
        more = ENGINES[name]
        if "native" in more and wanted.stop != "limit":
            run["limit"] = 1 << 30  # near a limit the fast engine leaves all to the stepper
        got = plainly(real.run(trial.core, trial.program, trial.registers, trial.regions, **run, **more))
        if "log" not in more or wanted.stop == "limit":
            got = replace(got, log=wanted.log)
        found += [f"{name}: {line}" for line in between(wanted, got)]
    return found


def between(wanted: Outcome, got: Outcome) -> list[str]:
    """What differs between two outcomes, both with their warnings as :func:`plainly` has them, field by field."""
    found = []
    for field in fields(Outcome):
        one, other = getattr(wanted, field.name), getattr(got, field.name)
        if one != other:
            found.append(f"{field.name}: model {one!r}, engine {other!r}")
    return found
