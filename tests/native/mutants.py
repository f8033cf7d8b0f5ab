"""Faults planted in the translator, one small change of its text each, and what applies them.

    python -m tests.native.mutants [NAME…]

looks for the first program, of those that are written down and of the first 5,000 seeds, that shows each fault. Changes
that only give more back to the stepper are not here: they change no result.
"""

from __future__ import annotations

import importlib
import sys
import tomllib
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import lru_cache
from multiprocessing import get_context
from pathlib import Path
from types import FunctionType, ModuleType
from typing import Any, NamedTuple

from . import campaign, together

PROGRAMS = 5_000
"""Seeds from 0 on among which every fault must show: those of the test suite."""


class Mutant(NamedTuple):
    """In ``module`` of vliwsim.native, ``old``, which stands there once, becomes ``new``, of as many lines.

    ``shown_by``: a seed of :mod:`.campaign` whose program shows it.
    """

    name: str
    module: str
    old: str
    new: str
    shown_by: int = 0


TABLE = Path(__file__).with_suffix(".toml")
MUTANTS = {row["name"]: Mutant(**row) for row in tomllib.loads(TABLE.read_text(encoding="utf-8"))["fault"]}


@contextmanager
def planted(mutant: Mutant) -> Iterator[None]:
    """With the fault, in place of the functions that it changes, wherever they are known."""
    module = importlib.import_module(f"vliwsim.native.{mutant.module}")
    assert module.__file__
    source = Path(module.__file__).read_text(encoding="utf-8")
    if source.count(mutant.old) != 1 or mutant.old.count("\n") != mutant.new.count("\n"):
        raise LookupError(f"{mutant.name}: {mutant.old!r} stands {source.count(mutant.old)} times in {mutant.module}")
    code = compile(source.replace(mutant.old, mutant.new), module.__file__, "exec")
    changed = ModuleType(module.__name__)
    changed.__file__ = module.__file__
    exec(code, changed.__dict__)
    undo = list(_exchanged(module, changed))
    if not undo:
        raise LookupError(f"{mutant.name}: nothing is changed by it")
    try:
        yield
    finally:
        for place, name, old in undo:
            setattr(place, name, old)


def _exchanged(module: ModuleType, changed: ModuleType) -> Iterator[tuple[Any, str, Any]]:
    """Put the changed functions in place; what there was before."""
    native = [m for name, m in sys.modules.items() if name.startswith("vliwsim.native.")]
    for name, value in list(vars(module).items()):
        new = vars(changed).get(name)
        if getattr(value, "__module__", None) != module.__name__:
            continue
        if isinstance(value, FunctionType) and value.__code__ != new.__code__:
            for place in native:
                if vars(place).get(name) is value:
                    yield place, name, value
                    setattr(place, name, new)
        if isinstance(value, type):
            for inner, old in list(vars(value).items()):
                other = vars(new).get(inner)
                one, two = getattr(old, "__func__", old), getattr(other, "__func__", other)
                if isinstance(one, FunctionType) and one.__code__ != two.__code__:
                    yield value, inner, old
                    setattr(value, inner, other)


def keep() -> None:
    """From now on code, and what model and stepper say, is made once: the faults leave most of it as it is."""
    together.KEPT = {}
    campaign.prepared = lru_cache(None)(campaign.prepared)


def shown(name: str, seeds: range) -> tuple[int, str] | None:
    """The first seed whose program shows a fault, and what differs; None where none does."""
    with planted(MUTANTS[name]):
        return min(campaign.run(seeds).found, default=None)


class Searcher:
    """Looks in a process of its own: wrong machine code may do anything. A new one when it has died."""

    def __init__(self) -> None:
        self.pool = self._pool()

    @staticmethod
    def _pool() -> ProcessPoolExecutor:
        return ProcessPoolExecutor(1, get_context("spawn"), keep)

    def shown(self, name: str, seeds: range) -> tuple[int, str] | None:
        """As :func:`shown`; if the process dies of it, the first that shows a fault and lives, else the first."""
        try:
            return self.pool.submit(shown, name, seeds).result()
        except BrokenProcessPool:
            self.pool = self._pool()
        died = seeds[0], "dies"
        if len(seeds) > 1:
            each = (self.shown(name, range(seed, seed + 1)) for seed in seeds)
            return next((found for found in each if found is not None and found[1] != "dies"), died)
        return died

    def search(self, name: str, before: int = PROGRAMS) -> tuple[int, str] | None:
        """As :func:`shown`, among the pinned programs and all seeds before this one."""
        found = self.shown(name, campaign.PINNED)
        if found is not None:
            return found
        first, count = 0, 40
        while first < before:
            found = self.shown(name, range(first, min(first + count, before)))
            if found is not None:
                return found
            first, count = first + count, min(2 * count, 320)
        return None


def main() -> int:
    missed, searcher = 0, Searcher()
    for name in sys.argv[1:] or MUTANTS:
        found = searcher.search(name)
        missed += found is None
        print(f"{name}: {f'seed {found[0]}, {found[1]}' if found else 'not seen'}"[:200], flush=True)
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
