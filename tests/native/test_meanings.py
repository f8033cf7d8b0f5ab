"""Every shipped operation as machine code against the exact evaluator: random and extreme bits, undefined bytes."""

from __future__ import annotations

import ctypes
from collections.abc import Iterator
from itertools import product
from random import Random

from vliwsim.description.operations import Operation, Role
from vliwsim.description.tables import load_operations
from vliwsim.description.values import Undefined, parts, value_of
from vliwsim.native import compiler, meanings

FAMILIES = ("integer", "fixed", "packed", "bits", "memory", "control", "float")
CORNERS = (
    0, 1, 2, 3, 31, 32, 33, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 0x8000, 0x7FFF7FFF, 0x80008000,
    0x7F800000, 0xFF800000, 0x7FC00000, 0x7F800001, 0x3F800000, 0xBF800000,
    0x80000001, 0x4B000001, 0x4F000000, 0xCF000000,
)  # fmt: skip
C_TYPES = {1: ctypes.c_uint8, 8: ctypes.c_uint8, 16: ctypes.c_uint16, 32: ctypes.c_uint32, 64: ctypes.c_uint64}

Form = tuple[Operation, tuple[int | None, ...], bool]


def forms() -> Iterator[Form]:
    """Every operation with each choice of halves, plain and following undefined bytes."""
    for operation in load_operations(FAMILIES).by_name.values():
        halves = [
            (None, 0, 1) if any(o.half for o in operation.operands if o.name == name) else (None,)
            for name in operation.inputs
        ]
        for chosen in product(*halves):
            for following in (False, True):
                if operation.outputs:
                    yield operation, chosen, following


def through_memory(form: Form, name: str) -> str:
    """The text of a function that stores the results at its first argument."""
    operation, halves, following = form
    kind = meanings.result_type(operation, following)
    text = meanings.function(operation, halves, name, following, external=True)
    head, _, rest = text.partition(f"define {kind} @{name}(")
    assert not head
    body, _, last = rest.rpartition("  ret ")
    comma = "" if body.startswith(")") else ", "
    return f"define void @{name}(ptr %made{comma}{body}  store {last.split(chr(10))[0]}, ptr %made\n  ret void\n}}\n"


def given(r: Random, form: Form) -> tuple[list[int], list[int]]:
    """Bits and undefined bytes for each input; undefined bytes have bits 0."""
    operation, halves, following = form
    bits, masks = [], []
    for name, half, width in zip(operation.inputs, halves, meanings.widths(operation)[0], strict=True):
        value = r.choice((r.getrandbits(width), r.choice(CORNERS) | r.choice(CORNERS) << 32, r.randrange(40)))
        value &= (1 << width) - 1
        operand = next((o for o in operation.operands if o.name == name), None)
        fixed = name == "link" or (operand is not None and (operand.half and half is None))
        if operand and operand.role is Role.CONSTANT:
            value, fixed = value & (1 << int(operand.type[1:])) - 1, True
        if operand and operand.half and half is None:
            value &= 0xFFFF
        mask = r.getrandbits(width // 8) if following and not fixed and r.random() < 0.4 else 0
        bits.append(parts(value_of(value, mask, width // 8), width // 8)[0])
        masks.append(mask)
    return bits, masks


def wrong(code: compiler.Code, form: Form, name: str, r: Random, times: int) -> Iterator[str]:
    operation, halves, following = form
    widths, made = meanings.widths(operation)
    fields = [(f"bits{k}", C_TYPES[w]) for k, w in enumerate(made)]
    fields += [(f"mask{k}", ctypes.c_uint8) for k in range(len(made))] if following else []
    results = type("Results", (ctypes.Structure,), {"_fields_": fields})()
    arguments = [C_TYPES[w] for w in widths] + ([ctypes.c_uint8] * len(widths) if following else [])
    call = ctypes.CFUNCTYPE(None, ctypes.c_void_p, *arguments)(code.address(name))
    for _ in range(times):
        bits, masks = given(r, form)
        values = [value_of(b, m, w // 8) for b, m, w in zip(bits, masks, widths, strict=True)]
        wanted = operation.evaluate(values, halves)
        call(ctypes.addressof(results), *bits, *(masks if following else ()))
        for k, (want, width) in enumerate(zip(wanted, made, strict=True)):
            got, missing = getattr(results, f"bits{k}"), getattr(results, f"mask{k}") if following else 0
            if isinstance(want, Undefined):
                right = bool(missing) if width == 1 else (got, missing) == (want.bits, want.unknown)
            else:
                right = (got, missing) == (want, 0)
            if not right:
                yield f"{operation.name} {halves} of {bits} {masks}: {want!r}, not {got:#x} {missing:#b}"


def test_every_operation_as_machine_code(long: bool) -> None:
    made = {f"form{k}": form for k, form in enumerate(forms())}
    text = "".join(through_memory(form, name) for name, form in made.items())
    code = compiler.Code(compiler.compile_text(text, 1))
    r = Random(4)
    found = [w for name, form in made.items() for w in wrong(code, form, name, r, 2000 if long else 40)]
    assert not found, found[:10]
    assert len(made) > 1000
