"""Slot assignment against exhaustive search, and what is said when there is none."""

from __future__ import annotations

from itertools import permutations

import attrs
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from vliwsim.description.core import Cluster, Core, Latency, Link, Slot
from vliwsim.description.operations import Kind, Operand, Operation, Role
from vliwsim.program.assembly.operands import Ready
from vliwsim.program.assembly.slots import NoSlots, SlotChooser, link_load
from vliwsim.program.code import Register
from vliwsim.program.effects import touched
from vliwsim.program.source.pieces import Piece
from vliwsim.program.source.tree import Call

from .sources import instructions, kernel, lines, shipped

CLASSES = ("arithmetic", "multiply", "store")
CALL = Call(Piece("op", 1, 1), ())


def operation(name: str, operation_class: str, *operands: Operand) -> Operation:
    return Operation(name, 1, operation_class, operands, Kind.COMPUTE, None, (), (), "", "", (), "", "", None)  # type: ignore[arg-type]


D, A, B = Operand("d", Role.RESULT, "i32"), Operand("a", Role.SOURCE, "i32"), Operand("b", Role.SOURCE, "i32")
OPERATIONS = {
    **{name: operation(name, name, D, A, B) for name in ("arithmetic", "multiply")},
    "store": operation("store", "store", A, B),
}


def ready(name: str, *registers: int, pin: int | None = None) -> Ready:
    op, places = OPERATIONS[name], tuple(Register(number) for number in registers)
    return Ready(op, places, None, pin, CALL, *touched(op, places))


@st.composite
def cores(draw: st.DrawFn) -> Core:
    """Up to three clusters of four registers, up to six slots, some links."""
    names = "ghk"[: draw(st.integers(1, 3))]
    slots = tuple(
        Slot(
            f"{draw(st.sampled_from(names))}.u{k}",
            tuple(draw(st.sets(st.sampled_from(CLASSES), min_size=1))),
            tuple(sorted(draw(st.sets(st.sampled_from("ab"))))),
        )
        for k in range(draw(st.integers(1, 6)))
    )
    links = tuple(
        Link(a, b, draw(st.integers(1, 2)), draw(st.booleans()))
        for a in names
        for b in names
        if a != b and draw(st.booleans())
    )
    return Core("c", "", tuple(Cluster(name, 4, 9, 9) for name in names), slots, Latency(), links)


@st.composite
def bundles(draw: st.DrawFn, core: Core) -> list[Ready]:
    top = len(core.register_names) - 1
    number = st.integers(0, top)
    found = []
    for _ in range(draw(st.integers(1, 5))):
        op = OPERATIONS[draw(st.sampled_from(CLASSES))]
        pin = draw(st.one_of(st.none(), st.none(), st.none(), st.integers(0, len(core.slots) - 1)))
        found.append(ready(op.name, *[draw(number) for _ in op.operands], pin=pin))
    pins = [r.pin for r in found if r.pin is not None]
    assume(len(pins) == len(set(pins)))
    return found


def carried(core: Core, bundle: list[Ready], slots: tuple[int, ...] | list[int]) -> bool:
    load = link_load(core, list(zip(bundle, slots)))
    return all(len(found) <= core.link_table[pair].operands for pair, found in load.items())


@settings(max_examples=400, deadline=None)
@given(data=st.data())
def test_the_choice_is_as_good_as_exhaustive_search(data: st.DataObject) -> None:
    core = data.draw(cores())
    bundle = data.draw(bundles(core))
    chooser = SlotChooser(core)
    free = [k for k, r in enumerate(bundle) if r.pin is None]
    pins = {r.pin for r in bundle}
    possible = []
    for slots in permutations([k for k in range(len(core.slots)) if k not in pins], len(free)):
        costs = [chooser.cost(bundle[k], slot) for k, slot in zip(free, slots)]
        if all(cost is not None for cost in costs):
            whole = dict(zip(free, slots))
            possible.append((sum(costs), [whole.get(k, r.pin) for k, r in enumerate(bundle)]))  # type: ignore[arg-type]
    try:
        chosen = chooser.choose(bundle)
    except NoSlots as none:
        assert not possible
        for crowd in none.crowds:
            fitting = {slot for k in crowd.operations for _, slot in chooser.fitting(bundle[k])}
            assert fitting - pins == set(crowd.slots)
            assert len(crowd.operations) > len(crowd.slots)
        return
    assert chosen in [slots for _, slots in possible]
    assert chosen == SlotChooser(core).choose(bundle)
    if any(carried(core, bundle, slots) for _, slots in possible):
        assert carried(core, bundle, chosen)
    cheapest = [slots for cost, slots in possible if cost == min(possible)[0]]
    if all(carried(core, bundle, slots) for slots in cheapest):
        assert chosen in cheapest


def test_a_busy_unit_is_avoided() -> None:
    slots = (Slot("g.one", ("multiply",)), Slot("g.two", ("multiply",)))
    chooser = SlotChooser(Core("c", "", (Cluster("g", 8, 9, 9),), slots, Latency()))
    once = ready("multiply", 1, 2, 3)
    assert chooser.choose([once]) == [0]
    assert chooser.choose([once], frozenset({0})) == [1]
    assert chooser.choose([once, once], frozenset({0})) in ([0, 1], [1, 0])
    assert chooser.choose([once], frozenset({0, 1})) == [0]


def test_units_busy_in_a_section_take_turns() -> None:
    float3 = shipped("float3")
    calc = float3.slots[0]
    core = attrs.evolve(float3, slots=(*float3.slots, attrs.evolve(calc, name="g.more")))
    built = kernel("@0 fdiv.s g1, g2, g3\n@1 fdiv.s g4, g5, g6\n@12 fdiv.s g7, g8, g9\n@20 halt", core)
    assert [core.slots[i.slot].name for i in instructions(built)][:3] == ["g.calc", "g.more", "g.calc"]


@pytest.mark.parametrize(
    ("text", "slots"),
    [
        # The greedy pass is enough.
        ("add g1, g2, g3", ["g.sum"]),
        ("add g1, g2, g3 ; add g4, g2, g3 ; add g5, g2, g3 ; add g6, g2, g3", ["g.sum", "g.mul", "g.mem", "g.flow"]),
        ("lw g1, [g2] ; add g4, g2, g3 ; mul g5, g2, g3", ["g.sum", "g.mul", "g.mem"]),
        ("add h1, h2, h3 ; add g1, g2, g3", ["g.sum", "h.sum"]),
        # Operations without a result may stand in either cluster: the one with fewer crossings.
        ("sw g1, [g2]", ["g.mem"]),
        ("sw g1, [h2]", ["h.mem"]),
        ("beq h1, 0, start", []),
        # A pin pushes the others aside.
        ("add g1, g2, g3 on g.flow ; sll g4, g2, g3", ["g.sum", "g.flow"]),
        ("add g1, g2, g3 on g.sum ; sll g4, g2, g3", ["g.sum", "g.flow"]),
    ],
)
def test_slots_of_pair7(text: str, slots: list[str]) -> None:
    if not slots:
        with pytest.raises(Exception, match="no-slot"):
            kernel(f"@0 {text}\n@9 halt")
        return
    built = kernel(f"@0 {text}\n@9 halt")
    names = [built.core.slots[i.slot].name for i in built.program.bundles[0].instructions]
    assert names == slots


def test_matching_where_greedy_fails() -> None:
    """Both may stand in one; the first to choose must leave it to the other, which has no other place."""
    slots = (
        Slot("g.x", ("arithmetic", "multiply")),
        Slot("g.y", ("arithmetic", "store")),
        Slot("g.z", ("store", "multiply")),
    )
    core = Core("c", "", (Cluster("g", 8, 9, 9),), slots, Latency())
    bundle = [ready("store", 1, 2), ready("multiply", 1, 2, 3), ready("arithmetic", 1, 2, 3)]
    chosen = SlotChooser(core).choose(bundle)
    assert chosen in ([1, 2, 0], [2, 0, 1])


def test_a_link_makes_the_search_look_further() -> None:
    """Each store is cheapest at home or away alike; together only one may cross."""
    slots = (Slot("g.m", ("store",), ("a", "b")), Slot("h.m", ("store",), ("a", "b")))
    clusters = (Cluster("g", 4, 9, 9), Cluster("h", 4, 9, 9))
    links = (Link("g", "h", 1), Link("h", "g", 2))
    core = Core("c", "", clusters, slots, Latency(), links)
    bundle = [ready("store", 0, 4), ready("store", 0, 1)]
    assert SlotChooser(core).choose(bundle) == [1, 0]
    both = [ready("store", 4, 5), ready("store", 0, 5)]
    chosen = SlotChooser(core).choose(both)
    assert carried(core, both, chosen)


def test_the_same_slots_whatever_the_order_of_lines() -> None:
    one = kernel("@0 lw g1, [g2] ; add g3, g4, g5 ; mul g6, g7, g8\n@1 halt")
    other = kernel("@1 halt\n@0 mul g6, g7, g8 ; lw g1, [g2]\n@0 add g3, g4, g5")
    assert lines(one) == lines(other)
