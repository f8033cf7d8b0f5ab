"""Hand-built cores and operations for the tests of the encoding, and random programs on them."""

from __future__ import annotations

from hypothesis import strategies as st

from vliwsim.description.core import Cluster, Core, Latency, Slot, Words
from vliwsim.description.operations import Access, Kind, Operand, Operation, OperationSet, Role
from vliwsim.program.code import Address, Guard, Immediate, Instruction, Label, Mode, Place, Register, indirect
from vliwsim.program.encoding.decode import named_twice
from vliwsim.program.encoding.layout import constant_limits, may_be_immediate, takes_immediate

R, S, IO, ST, AD, TG, C = (
    Role.RESULT,
    Role.SOURCE,
    Role.INOUT,
    Role.STICKY,
    Role.ADDRESS,
    Role.TARGET,
    Role.CONSTANT,
)


def operation(name: str, code: int, kind: Kind, *operands: Operand, access: Access | None = None) -> Operation:
    classes = {Kind.LOAD: "load", Kind.STORE: "store", Kind.BRANCH: "control", Kind.HALT: "control"}
    inputs = tuple(o.name for o in operands if o.role in (S, IO, C))
    outputs = tuple(o.name for o in operands if o.role in (R, IO, ST))
    return Operation(
        name, code, classes.get(kind, "arithmetic"), operands, kind, access, inputs, outputs, "", "", (), "", "", None
    )  # type: ignore[arg-type]


def o(name: str, role: Role, type_: str = "i32", half: bool = False, pair: bool = False) -> Operand:
    return Operand(name, role, type_, half, pair)


_ALL = (
    operation("add", 1, Kind.COMPUTE, o("d", R), o("a", S), o("b", S)),
    operation("mul.half", 65, Kind.COMPUTE, o("d", R), o("a", S, "i16", True), o("b", S, "i16", True)),
    operation("add.sat", 66, Kind.COMPUTE, o("d", R), o("sticky", ST), o("a", S), o("b", S)),
    operation("mac", 67, Kind.COMPUTE, o("d", IO, "i64", pair=True), o("a", S), o("b", S)),
    operation("take", 68, Kind.COMPUTE, o("d", R), o("a", S), o("n", C)),
    operation("field", 71, Kind.COMPUTE, o("d", R), o("a", S), o("n", C, "u5"), o("m", C, "i7")),
    operation("wide", 72, Kind.COMPUTE, o("d", R), o("n", C, "u20")),
    operation("fadd", 69, Kind.COMPUTE, o("d", R, "f32"), o("a", S, "f32"), o("b", S, "f32")),
    operation("swap", 70, Kind.COMPUTE, o("d", R), o("e", R), o("a", S)),
    operation("lw", 130, Kind.LOAD, o("d", R), o("at", AD), access=Access("i32", 4, False)),
    operation("ld", 131, Kind.LOAD, o("d", R, "i64", pair=True), o("at", AD), access=Access("i64", 8, False)),
    operation("sw", 132, Kind.STORE, o("a", S), o("at", AD), access=Access("i32", 4, True)),
    operation("jump", 200, Kind.BRANCH, o("to", TG)),
    operation("call", 201, Kind.BRANCH, o("d", R), o("to", TG)),
    operation("count", 202, Kind.BRANCH, o("r", IO), o("to", TG)),
    operation("beq", 203, Kind.BRANCH, o("a", S), o("b", S), o("to", TG)),
    operation("halt", 1023, Kind.HALT),
)
OPERATIONS = OperationSet({x.name: x for x in _ALL}, {x.code: x for x in _ALL}, "0" * 64)
BY_NAME = OPERATIONS.by_name


def core(
    bits: int = 64, group: int = 8, straddle: bool = True, registers: tuple[int, ...] = (24, 24), slots: int = 4
) -> Core:
    clusters = tuple(Cluster("ghjk"[k], n, 10, 6) for k, n in enumerate(registers))
    names = tuple(f"{'ghjk'[k % len(clusters)]}.u{k}" for k in range(slots))
    return Core(
        "sample",
        "",
        clusters,
        tuple(Slot(n, ("arithmetic",)) for n in names),
        Latency(),
        words=Words(bits, group, straddle),
    )


PLAIN = core()
CORES = (
    PLAIN,
    core(56, 4, False),
    core(48, 16, True, (8, 7), 2),
    core(48, 6, False, (8,), 1),
    core(128, 8, False, (16, 16, 16, 16), 16),
)


def add(d: int, a: int | None, b: int, slot: int = 0, guard: Guard | None = None) -> Instruction:
    """``add d, a, b`` with registers d, a and immediate b; a None: immediate b stands as a."""
    places = (Register(d), Register(a), Immediate(b)) if a is not None else (Register(d), Immediate(b), Register(0))
    return Instruction(BY_NAME["add"], slot, places, guard)


def jump(label: str, slot: int = 0) -> Instruction:
    return Instruction(BY_NAME["jump"], slot, (Label(label),))


HALT = Instruction(BY_NAME["halt"], 0, ())

_raw = st.one_of(
    st.integers(0, 40), st.integers(0, 2**32 - 1), st.integers(1, 2**20).map(lambda k: 2**32 - k), st.just(2**31)
)


@st.composite
def instructions(draw: st.DrawFn, on: Core, labels: list[str], of: OperationSet) -> Instruction:
    """Any instruction a word can say, legal or not."""
    registers = st.integers(0, len(on.register_names) - 1)
    chosen = draw(st.sampled_from(list(of.by_name.values())))
    places: list[Place] = []
    free = not any(takes_immediate(operand) for operand in chosen.operands)
    for operand in chosen.operands:
        immediate = may_be_immediate(operand) and free and draw(st.booleans())
        if operand.role is C:
            low, high = constant_limits(operand)
            near = [v for v in (low, low + 1, 0, 1, 40, high - 1, high) if low <= v <= high]
            places.append(Immediate(draw(st.one_of(st.sampled_from(near), st.integers(low, high))) % 2**32))
        elif operand.role is AD:
            mode = draw(st.sampled_from(list(Mode)))
            ring = 2 ** draw(st.integers(1, 31)) if mode is Mode.AFTER and draw(st.booleans()) else 0
            step = Immediate(draw(_raw)) if immediate else Register(draw(registers))
            places.append(Address(draw(registers), mode, step, ring))
        elif immediate and operand.role is TG:
            places.append(Label(draw(st.sampled_from(labels))))
        elif immediate:
            places.append(Immediate(draw(_raw) & (0xFFFF if operand.half else 2**32 - 1)))
        elif operand.pair:
            starts = [on.register_numbers[f"{c.name}{k}"] for c in on.clusters for k in range(0, c.registers - 1, 2)]
            places.append(Register(draw(st.sampled_from(starts))))
        else:
            places.append(Register(draw(registers), draw(st.integers(0, 1)) if operand.half else None))
        free = free and not immediate
    guard = Guard(draw(registers), draw(st.booleans())) if draw(st.booleans()) else None
    found = Instruction(chosen, draw(st.integers(0, len(on.slots) - 1)), tuple(places), guard)
    if indirect(found) is not None and draw(st.booleans()):
        named = draw(st.lists(st.sampled_from(labels), min_size=1, unique=True))
        found = found._replace(targets=tuple(Label(name) for name in named))
    return found if named_twice(chosen, found.places) is None else Instruction(of.by_name["halt"], 0, ())


@st.composite
def programs(
    draw: st.DrawFn, on: Core, of: OperationSet = OPERATIONS
) -> tuple[list[list[Instruction] | int], dict[str, int]]:
    """Drafts and labels; where bundles may not straddle they are short enough for any extension words."""
    count = draw(st.integers(1, 12))
    labels = {f"l{k}": draw(st.integers(0, count - 1)) for k in range(3)}
    most = max(1, min(len(on.slots) + 1, on.words.group // 2))
    bundles = st.lists(instructions(on, list(labels), of), min_size=1, max_size=most)
    drafts = draw(st.lists(st.one_of(bundles, st.integers(1, 60)), min_size=count, max_size=count))
    return drafts, labels
