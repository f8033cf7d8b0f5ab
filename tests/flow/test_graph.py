"""The graph of contexts: lazily and whole, in normal form, and no way back into a drained loop."""

from __future__ import annotations

from random import Random

import pytest

from tests.check.test_shipped import SOURCES
from tests.differential.generator import trial
from tests.differential.real import core_of, program_of
from vliwsim.check.inputs import inputs_of
from vliwsim.description.corefile import load_core
from vliwsim.flow.context import normal
from vliwsim.flow.graph import Graph
from vliwsim.kernel.loading import assemble_source
from vliwsim.program.assembler import assemble


def walked(name: str) -> Graph:
    kernel = assemble_source(name)
    graph = Graph(kernel.program, inputs_of(kernel).facts)
    assert graph.walk()
    return graph


@pytest.mark.parametrize("name", [source.stem for source in SOURCES])
def test_lazily_it_is_the_same_graph(name: str) -> None:
    kernel = assemble_source(name)
    whole, lazy = walked(name), Graph(kernel.program, inputs_of(kernel).facts)
    r, ahead, seen = Random(1), [0], set[int]()
    while ahead:
        index = ahead.pop(r.randrange(len(ahead)))
        if index not in seen:
            seen.add(index)
            ahead += [s for s in lazy.successors(index) if s is not None]
    assert set(lazy.contexts) == set(whole.contexts)
    assert walked(name).contexts == whole.contexts


def test_contexts_are_in_normal_form() -> None:
    for name in ("energy", "peak", "crest", "calibrate"):
        for context in walked(name).contexts:
            again = normal(
                context.at,
                context.within,
                context.flights,
                context.turns,
                context.busy,
                context.behind,
                context.values,
                context.knowledge,
                context.waited,
            )
            assert again == context


def test_a_step_does_not_depend_on_how_a_context_was_reached() -> None:
    graph = walked("energy")
    for index, context in enumerate(graph.contexts):
        assert graph.stepper.step(context) == graph.beats[index]


def test_a_drained_epilogue_does_not_enter_its_loop_again() -> None:
    """Eight ways out of the loop, none back: from `finish` nothing leads to another bundle."""
    graph = walked("energy")
    finish = [i for i, c in enumerate(graph.contexts) if c.at == 8]
    assert finish
    for index in finish:
        assert graph.successors(index) == (None,)
    paths = [graph.path(index) for index in finish]
    assert all(path[0] == 0 for path in paths)
    for path in paths:
        assert all(path[k + 1] in graph.successors(path[k]) for k in range(len(path) - 1))


def test_facts_of_inputs_leave_out_ways() -> None:
    """With g20 known not to be zero, energy takes its loop at least once."""
    kernel = assemble_source("energy")
    number = kernel.core.register_numbers["g20"]
    sizes = []
    for facts in ((), ((number, True),), ((number, False),)):
        graph = Graph(kernel.program, facts)
        assert graph.walk()
        sizes.append(len(graph.contexts))
    assert sizes[1] < sizes[0]
    assert sizes[2] < sizes[1]


def test_a_cap_is_kept_and_the_crowd_found() -> None:
    kernel = assemble_source("lowpass")
    graph = Graph(kernel.program)
    assert not graph.walk(50)
    assert len(graph.contexts) <= 60
    assert 0 <= graph.crowded_bundle() < len(kernel.program.bundles)


def test_a_generated_program_blows_up_honestly() -> None:
    """Whatever the program, a walk ends: with all contexts or at the cap."""
    for seed in range(150):
        made = trial(Random(seed))
        graph = Graph(program_of(core_of(made.core), made.program))
        complete = graph.walk(300)
        assert complete == (len(graph.contexts) <= 300 and all(beat is not None for beat in graph.beats))


BRANCHES = """kernel fan
core pair7
given a : i32 in g16
given b : i32 in g17
given c : i32 in g18
returns y : i32 in g2
start:
@0 li g2, 0
@1 jump {0} if g16
@2 jump {1} if not g16
@5 idle
one:
@0 add g2, g2, 1
@1 halt
two:
@0 add g2, g2, 2
@1 halt
"""


def test_opposite_guards_of_two_branches() -> None:
    """One of two branches with opposite guards is taken: the code behind them is on no path."""
    kernel = assemble("fan.vliw", load_core("pair7"), text=BRANCHES.format("one", "two"))
    graph = Graph(kernel.program)
    assert graph.walk()
    assert kernel.map.bundle_at[3][0] == "start"
    reached = {kernel.map.bundle_at[context.at] for context in graph.contexts}
    assert ("one", 0) in reached
    assert ("two", 0) in reached
    ends = [context for context in graph.contexts if kernel.map.bundle_at[context.at] == ("two", 0)]
    assert len(ends) == 1


@pytest.mark.parametrize("seed", [*range(120), 15898])
def test_a_fork_leads_somewhere_else(seed: int) -> None:
    """Each side knows more than was known before, so that what comes behind it is looked at."""
    made = trial(Random(seed))
    graph = Graph(program_of(core_of(made.core), made.program))
    graph.walk(600)
    for context, beat in zip(graph.contexts, graph.beats, strict=True):
        if beat is not None and beat.did == "fork":
            assert beat.successors
            assert context not in beat.successors
