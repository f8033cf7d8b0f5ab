"""The shipped kernels by the fast engine: the same outputs, account and diagnostics as by the stepper."""

from __future__ import annotations

from itertools import islice
from pathlib import Path

import numpy as np
import pytest

from vliwsim.description.corefile import load_core
from vliwsim.kernel.cases import cases_of
from vliwsim.kernel.reference import load_reference
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.program.assembler import assemble

ROOT = Path(__file__).resolve().parents[2]
SOURCES = sorted((ROOT / "programs").glob("*/*.vliw"))
PAIRS = [(source, core) for source in SOURCES for core in assemble(source).cores_named]
CASES = 4


def shown(run: KernelRun) -> tuple[object, ...]:
    outputs = {name: (np.asarray(value).dtype.str, np.asarray(value).tobytes()) for name, value in run.outputs.items()}
    return run.reason, run.account, outputs, [repr(problem) for problem in run.diagnostics]


@pytest.mark.parametrize(("source", "core"), PAIRS, ids=lambda part: getattr(part, "stem", part))
def test_machine_code_runs_the_shipped_kernels(source: Path, core: str, long: bool) -> None:
    kernel = assemble(source, load_core(core))
    reference = load_reference(kernel)
    cases = cases_of(kernel, reference)
    for case in cases if long else islice(cases, CASES):
        fast, stepped = (run_kernel(kernel, case.inputs, reference=reference, engine=e) for e in ("native", "step"))
        assert shown(fast) == shown(stepped), case.name
        assert not any(fast.differences.values()), case.name
