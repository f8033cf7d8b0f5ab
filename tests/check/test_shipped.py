"""The shipped kernels and some large programs: decided completely; `tools/bench check` says how fast."""

from __future__ import annotations

from pathlib import Path

import pytest

from vliwsim.check.judge import check_kernel
from vliwsim.check.verdict import NEEDS_INPUT, PROVED, UNDECIDED
from vliwsim.description.corefile import load_core
from vliwsim.kernel.loading import assemble_source
from vliwsim.program.assembler import assemble

ROOT = Path(__file__).resolve().parents[2]
SOURCES = sorted((ROOT / "programs").glob("*/*.vliw"))
MEMORY = {"undefined-used", "out-of-array", "misaligned", "store-twice", "bank-conflict"}
PAIRS = [(source, core) for source in SOURCES for core in assemble(source).cores_named]


@pytest.mark.parametrize(("source", "core"), PAIRS, ids=lambda part: getattr(part, "stem", part))
def test_every_shipped_kernel_is_decided(source: Path, core: str) -> None:
    kernel = assemble(source, load_core(core))
    verdict = check_kernel(kernel)
    assert verdict.complete
    assert not verdict.violated
    assert not [j for j in verdict.judgements.values() if j.outcome == UNDECIDED]
    assert {j.rule for j in verdict.judgements.values() if j.outcome == NEEDS_INPUT} <= MEMORY
    if source.stem != "peak":  # which computes an address from data
        assert verdict.outcome("misaligned") == PROVED


def test_tagged_kernels_mean_every_read_before_a_landing() -> None:
    for name in ("energy", "weighted_sum", "peak", "window_scale"):
        verdict = check_kernel(assemble_source(name))
        assert verdict.tagged
        assert verdict.early
        assert all(read.meant for read in verdict.early)
        assert verdict.outcome("wrong-item") == PROVED


def test_a_straight_program_without_loops_is_proved_inside_its_arrays() -> None:
    assert check_kernel(assemble_source("straight")).outcome("out-of-array") == PROVED


STRAIGHT = """kernel long
core pair7
given x : i32[n] at g1
returns y : i32 in g2
needs n == 1000
start:
@0 li g2, 0
repeat 999 as i
@i lw g{4 + i % 4}, [g1 + 4 * i] ; add h2, h3, h4
end
@1002 add g2, g4, g5 ; halt
"""


def test_a_thousand_straight_bundles() -> None:
    kernel = assemble("long.vliw", text=STRAIGHT.replace("add h2, h3, h4", "li h2, i"))
    assert len(kernel.program.bundles) >= 1000
    verdict = check_kernel(kernel)
    assert verdict.ok
    assert verdict.outcome("out-of-array") == PROVED


DEEP = """kernel deep
core pair7
given x     : i16[n]  at g10  over 96
given trips : i32 = n in g20
returns total : i32 in g11
needs n >= 1
start:
repeat 7 as k
@k lh g2, [g10 then +2] if g20
   count g20, loop
end
@7 lh g2, [g10 then +2] if g20
   count g20, loop
   li g11, 0
loop:
@0 lh g2, [g10 then +2] if g20
   count g20, loop
   mul g4, g2, g2
   add g11, g11, g4
finish:
@0 halt
"""


def test_twelve_stages_and_eight_branches_in_flight() -> None:
    """A loop of one bundle: loads of 8 beats, products of 4, branches of 8."""
    core = load_core("pair7").evolve({"latency.load": 8, "latency.multiply": 4, "branch.latency": 8})
    kernel = assemble("deep.vliw", core, text=DEEP)
    verdict = check_kernel(kernel)
    assert verdict.complete
    print(f"{verdict.contexts} contexts")
    assert verdict.contexts < 200
    assert verdict.interrupts is not None
    assert verdict.interrupts.longest is None


def test_beyond_the_cap_it_says_where() -> None:
    kernel = assemble_source("lowpass")
    verdict = check_kernel(kernel, cap=20)
    assert not verdict.complete
    assert verdict.blown_up is not None
    assert verdict.interrupts is None
    assert verdict.undecided
    assert all(j.outcome in (UNDECIDED, PROVED) for j in verdict.judgements.values())
    assert all(j.because for j in verdict.judgements.values())
