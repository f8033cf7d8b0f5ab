"""The pytest plugin: ``pytest programs/`` has a test for each claim about each kernel, on each core it names.

    legal                     it assembles, and no path breaks a rule
    case NAME                 right and legal on a case
    golden NAME               still what was recorded
    budget                    no case takes more cycles than allowed

It comes with the package. In tests of one's own, the fixture ``vliwsim_kernel`` loads kernels, and a run can be
compared with what is expected: ``assert run == {"y": expected}``.
"""

from __future__ import annotations

import fnmatch
import os
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

if TYPE_CHECKING:
    from vliwsim.kernel.loaded import LoadedKernel
    from vliwsim.regression.claims import Claim
    from vliwsim.regression.judge import Judge


def pytest_addoption(parser: pytest.Parser) -> None:
    """Options of the command line and of the configuration file."""
    group = parser.getgroup("vliwsim", "kernels (.vliw)")
    group.addoption("--interrupts", action="store_true", help="also interrupt every kernel wherever that can be done")
    group.addoption("--no-kernels", action="store_true", help="collect no .vliw files")
    parser.addini("vliwsim_time_limit", "seconds that one call of a reference.py may take", default="60")
    parser.addini("vliwsim_cycle_limit", "cycles after which a run is given up", default="10000000")
    parser.addini("vliwsim_skip", ".vliw files not to collect, as patterns from the root folder", "args", default=[])


def pytest_collect_file(file_path: Path, parent: pytest.Collector) -> Source | None:
    """A collector for a kernel's source."""
    if file_path.suffix != ".vliw" or parent.config.getoption("--no-kernels"):
        return None
    root = parent.config.rootpath
    name = file_path.relative_to(root).as_posix() if file_path.is_relative_to(root) else file_path.as_posix()
    if any(fnmatch.fnmatch(name, pattern) for pattern in parent.config.getini("vliwsim_skip")):
        return None
    return Source.from_parent(parent, path=file_path)


class Source(pytest.File):
    """One source; collects the claims about it on every core it names."""

    def collect(self) -> Iterator[pytest.Item]:
        from vliwsim.regression.claims import Options
        from vliwsim.regression.judge import Judge
        from vliwsim.regression.sources import cores_named

        config = self.config
        options = Options(
            limit=_number(config, "vliwsim_cycle_limit", int),
            seconds=_number(config, "vliwsim_time_limit", float),
            interrupts=config.getoption("--interrupts"),
        )
        shown = os.path.relpath(self.path)
        cores = cores_named(shown)
        for core in cores:
            where = f" on {Path(core).stem}" if core and len(cores) > 1 else ""
            yield from self._claims(Judge(shown, core, options), where)

    def _claims(self, judge: Judge, where: str) -> Iterator[pytest.Item]:
        """An item a claim; which there are is known without running any."""
        from vliwsim.problems import VliwsimError

        def item(title: str, make: Callable[[], Claim]) -> pytest.Item:
            return Claimed.from_parent(self, name=f"{title}{where}", make=make)

        yield item("legal", judge.legal)
        try:
            kernel = judge.kernel
        except VliwsimError:
            return  # the claim above says it
        broken = judge.loaded()
        if broken is not None:
            yield item("reference", lambda: broken)
        try:
            cases = judge.cases
        except VliwsimError as error:
            said = _refused("cases", error)
            yield item("cases", lambda: said)
            cases = []
        for case in cases:
            yield item(f"case {case.name}", lambda case=case: judge.case(case))  # type: ignore[misc]
        try:
            golden = judge.golden
        except VliwsimError:
            yield item("golden", lambda: next(judge.goldens()))
            golden = None
        for recorded in golden.cases if golden else ():
            yield item(f"golden {recorded.name}", lambda recorded=recorded: judge.golden_case(recorded))  # type: ignore[misc]
        if kernel.budget is not None:
            yield item("budget", judge.budget)
        if judge.options.interrupts:
            yield item("interrupts", judge.interrupts)


def _refused(kind: str, error: Exception) -> Claim:
    from vliwsim.regression.claims import Claim

    return Claim(kind, kind, False, str(error).splitlines()[0], str(error))


def _number(config: pytest.Config, name: str, kind: Callable[[str], Any]) -> Any:
    text = config.getini(name)
    try:
        number = kind(text)
    except ValueError:
        number = 0
    if number <= 0:
        raise pytest.UsageError(f"{name} = {text}: a number above 0 is allowed")
    return number


class ClaimBroken(Exception):
    """A claim that does not hold."""

    def __init__(self, claim: Claim) -> None:
        super().__init__(claim.says)
        self.claim = claim


class Claimed(pytest.Item):
    """One claim as a test."""

    def __init__(self, *, make: Callable[[], Claim], **more: Any) -> None:
        super().__init__(**more)
        self.make = make
        self.line: int | None = None

    def runtest(self) -> None:
        claim = self.make()
        self.line = claim.lines[0] - 1 if claim.lines else None
        if claim.held is None:
            pytest.skip(claim.says)
        if not claim.held:
            raise ClaimBroken(claim)

    def repr_failure(self, excinfo: pytest.ExceptionInfo[BaseException], style: Any = None) -> Any:
        """What does not hold, where it came from, and a command that goes there; no traceback."""
        if isinstance(excinfo.value, ClaimBroken):
            claim = excinfo.value.claim
            return f"{claim.title}: {claim.says}\n{claim.detail}".rstrip()
        return super().repr_failure(excinfo, style)

    def reportinfo(self) -> tuple[Path, int | None, str]:
        return self.path, self.line, f"{self.path.stem}: {self.name}"


@pytest.fixture
def vliwsim_kernel(request: pytest.FixtureRequest) -> Callable[..., LoadedKernel]:
    """Loads a kernel: ``vliwsim_kernel("filter.vliw", core="lone4", changes={"latency.load": 5})``.

    A path is looked for beside the test file, then from the root folder, then among the shipped kernels.
    """
    from vliwsim.kernel.loaded import load_kernel

    folders = [request.path.parent, request.config.rootpath]

    def load(path: str | os.PathLike[str], core: Any = None, changes: Any = None) -> LoadedKernel:
        found = next((folder / path for folder in folders if (folder / path).exists()), path)
        return load_kernel(os.path.relpath(found) if isinstance(found, Path) else str(found), core, changes)

    return load


def pytest_assertrepr_compare(config: pytest.Config, op: str, left: object, right: object) -> list[str] | None:
    """What ``assert run == expected`` says when it does not hold."""
    from sys import modules

    runner = modules.get("vliwsim.kernel.runner")  # nobody can have a run before that is imported
    if runner is None or op != "==" or not any(isinstance(side, runner.KernelRun) for side in (left, right)):
        return None
    from vliwsim.kernel.equality import mismatches
    from vliwsim.kernel.runner import KernelRun

    run, expected = (left, right) if isinstance(left, KernelRun) else (right, left)
    assert isinstance(run, KernelRun)
    if isinstance(expected, KernelRun):
        return [f"two runs: {run!r}, {expected!r}", "compare one with the outputs of the other: one == other.outputs"]
    return [f"{run.title}: not what is expected", *mismatches(run, expected), *_origin(run, expected)]


def _origin(run: Any, expected: Any) -> list[str]:
    """Where the first differing element came from."""
    import numpy as np

    from vliwsim.kernel.goldens import first_difference
    from vliwsim.regression.origin import LONGEST, History, debug_line, origin_of_output

    if run.reason != "halt":
        return [str(problem) for problem in run.problems]
    if not hasattr(expected, "keys"):
        expected = dict.fromkeys(list(run.outputs)[:1], expected)
    for name, got in run.outputs.items():
        wanted = np.asarray(expected.get(name, got))
        if run.cycles > LONGEST or np.shape(got) != wanted.shape or not first_difference(got, wanted):
            continue
        wrong = np.flatnonzero(np.atleast_1d(np.asarray(got) != wanted))
        index = int(wrong[0]) if np.ndim(got) and wrong.size else None
        lines = str(origin_of_output(History(run), name, index)).splitlines()
        return [*lines, *([debug_line(run.kernel, run.case)] if run.case != "given" else [])]
    return []
