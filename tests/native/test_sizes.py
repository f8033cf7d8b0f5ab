"""Hostile sizes: memories of gigabytes, arrays of nothing, more contexts than there may be, immediates of all bits."""

from __future__ import annotations

import resource
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from vliwsim.kernel.loaded import LoadedKernel, load_kernel
from vliwsim.kernel.runner import KernelRun, run_kernel
from vliwsim.machine.memory import DEFINED, UNDEFINED, Memory, Region
from vliwsim.machine.stepper import Machine
from vliwsim.native.batch import Batch
from vliwsim.native.engine import Native

GIB = 1 << 30


@pytest.fixture(scope="module", autouse=True)
def own_folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.mktemp("cache")))
        yield


def kernel(tmp_path: Path, text: str, **changes: object) -> LoadedKernel:
    path = tmp_path / "size.vliw"
    path.write_text("kernel size\ncore pair7\n" + text)
    return load_kernel(str(path), changes={k.replace("_", "."): v for k, v in changes.items()} or None)


def seen(run: KernelRun) -> tuple[object, ...]:
    outputs = {name: np.asarray(value).tolist() for name, value in run.outputs.items()}
    account = run.account
    names = [p.name for p in run.diagnostics]
    return run.reason, outputs, account.cycles, dict(account.stalls), account.drain, account.sections, names


def alike(one: LoadedKernel, **inputs: Any) -> KernelRun:
    """Every engine says the same; the stepper's run."""
    wanted = run_kernel(one.kernel, inputs, engine="step", reference=None)
    assert seen(run_kernel(one.kernel, inputs, engine="native", reference=None)) == seen(wanted)
    many = one.run_many([inputs, inputs])
    assert many.cycles.tolist() == 2 * [wanted.cycles]
    for name, value in wanted.outputs.items():
        np.testing.assert_array_equal(many.outputs[name][1], value)
    return wanted


FAR = """
given   x : i32[4] at g1 align 0x40000000
scratch w : i32[4] at g2 align 0x40000000
returns y : i32[4] at g3 align 0x40000000
start:
@0 lw g5, [g1 + 12]
@4 sw g5, [g2]
@5 lw g6, [g2]
@9 add g6, g6, 1
@10 sw g6, [g3]
@11 sw g6, [g3 + 4]
@12 sw g6, [g3 + 8]
@13 sw g6, [g3 + 12]
   halt
"""


def test_four_gibibytes_of_which_few_are_touched(tmp_path: Path) -> None:
    """Arrays at 1, 2 and 3 GiB, so that addresses have their highest bit."""
    before = most_memory()
    far = kernel(tmp_path, FAR, memory_size=4 * GIB)
    run = alike(far, x=[1, 2, 3, 41])
    assert run.outputs["y"].tolist() == [42] * 4  # type: ignore[union-attr]
    assert [area.start for area in run.setup.areas] == [GIB, 2 * GIB, 3 * GIB]
    assert far.run_frames({"x": np.arange(80).reshape(20, 4)}, engine="native").outputs["y"][-1] == 80
    assert most_memory() - before < GIB // 2


def most_memory() -> int:
    """The greatest number of bytes this process ever had at once."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)


def test_snapshots_hold_what_is_owned() -> None:
    machine = Machine(load_kernel("energy", changes={"memory.size": 4 * GIB}).kernel.program)
    state = machine.start({}, [(3 * GIB, b"\x07\x08")], [Region("x", 3 * GIB, 16)])
    saved = state.save()
    assert saved["memory"] == ((3 * GIB, b"\x07\x08" + bytes(14), bytes([DEFINED] * 2 + [UNDEFINED] * 14)),)
    state.memory.store(3 * GIB, 4, 0x01020304)
    state.restore(saved)
    assert state.memory.read(3 * GIB, 3) == (b"\x07\x08\0", b"\0\0\1")


@pytest.mark.parametrize("order", ["little", "big"])
@pytest.mark.parametrize("size", [4096, 1 << 28])
def test_large_memories_do_as_small_ones(order: str, size: int) -> None:
    core = load_kernel("energy", changes={"memory.size": size, "memory.endianness": order}).core
    memory = Memory(core.memory, [Region("x", 64, 100, 8)])
    memory.define(64, bytes(range(1, 9)))
    memory.store(72, 4, 0x11223344)
    assert memory.load(72, 4) == 0x11223344
    assert memory.load(64, 2) == (0x0201 if order == "little" else 0x0102)
    assert repr(memory.load(74, 4)) != repr(memory.load(72, 4))  # half of it is undefined
    assert [memory.writable(64 + 100 - k, 4) for k in (4, 3)] == [True, False]
    assert [memory.readable(64 + 108 - k, 4) for k in (4, 3)] == [True, False]


def test_a_large_array_to_its_last_byte(tmp_path: Path) -> None:
    """256 MiB of memory, half of it one array."""
    text = FAR.replace(" align 0x40000000", "").replace("w : i32[4]", "w : i32[n]").replace("[g2]", "[g2 + g7]")
    text = "given end : i32 = 4 * n - 4 in g7\n" + text.lstrip()
    large = kernel(tmp_path, text, memory_size=1 << 28)
    assert alike(large, x=[0, 0, 0, 7], n=1 << 25).outputs["y"].tolist() == [8] * 4  # type: ignore[union-attr]
    beyond = kernel(tmp_path, text.replace("4 * n - 4", "4 * n"), memory_size=1 << 28)
    assert alike(beyond, x=[0, 0, 0, 7], n=1 << 25).problems[0].name == "out-of-array"


def test_memory_that_there_is_no_room_for(monkeypatch: pytest.MonkeyPatch) -> None:
    import mmap

    def none(*_: object, **__: object) -> None:
        raise OSError(12, "Cannot allocate memory")

    monkeypatch.setattr(mmap, "mmap", none)
    with pytest.raises(MemoryError):
        Memory(load_kernel("energy", changes={"memory.size": GIB}).core.memory)


NOTHING = """
given   x : i16[n] at g1
changes s : i16[n] at g4
given   k : i32    in g2
returns y : i32[n] at g3
returns z : i32    in g2
start:
@0 add g2, g2, 1
   halt
"""


def test_arrays_of_nothing(tmp_path: Path) -> None:
    nothing = kernel(tmp_path, NOTHING)
    run = alike(nothing, x=[], s=[], k=4)
    assert run.outputs["z"] == 5
    assert np.shape(run.outputs["y"]) == np.shape(run.outputs["s"]) == (0,)
    many = nothing.run_many({"x": np.zeros((3, 0)), "s": np.zeros((3, 0)), "k": np.arange(3)})
    assert many.outputs["z"].tolist() == [1, 2, 3]  # type: ignore[union-attr]
    assert np.shape(many.outputs["y"]) == (3, 0)
    rows = nothing.run_frames({"x": np.zeros((5, 0)), "k": "frame"}, s=[], engine="native")
    assert rows.outputs["z"].tolist() == [1, 2, 3, 4, 5]
    touched = kernel(tmp_path, NOTHING.replace("add g2, g2, 1", "lh g2, [g1]"))
    assert alike(touched, x=[], s=[], k=4).problems[0].name == "out-of-array"


IMMEDIATES = """
given   x : i32 in g1
returns a : i32 in g2
returns b : i32 in g3
returns c : i32 in g4
returns d : u32 in g5
returns e : i32 in g6
start:
@0 li  g2, 0x80000000
@1 li  g3, 0x7FFFFFFF
@2 add g4, g1, -2147483648
@3 add g5, g1, 0xFFFFFFFF
@4 mul g6, g1, 0x7FFFFFFF
@5 xor g2, g2, 0xFFFFFFFF
@6 sub g3, g3, -2147483648
@7 halt
"""


@pytest.mark.parametrize("x", [0, 1, -1, 2**31 - 1, -(2**31)])
def test_immediates_of_all_bits(tmp_path: Path, x: int) -> None:
    run = alike(kernel(tmp_path, IMMEDIATES), x=x)

    def low(value: int) -> int:
        return (value + 2**31) % 2**32 - 2**31

    wanted = {"a": 2**31 - 1, "b": -1, "c": low(x - 2**31), "d": (x - 1) % 2**32, "e": low(x * (2**31 - 1))}
    assert run.outputs == wanted


@pytest.mark.parametrize("name", ["energy", "peak", "calibrate"])
@pytest.mark.parametrize("most", [1, 5, 17])
def test_more_contexts_than_there_may_be(name: str, most: int) -> None:
    """The ways beyond lead back to the stepper, and nothing is lost."""
    one = load_kernel(name)
    cases = list(one.cases().values())[:6]
    wanted = [run_kernel(one.kernel, case, engine="step", reference=None) for case in cases]
    given = set(wanted[0].setup.registers)
    one.__dict__["batch"] = Batch(Machine(one.kernel.program), given, most)
    many = one.run_many(cases)
    assert many.cycles.tolist() == [run.cycles for run in wanted]
    assert many.account.cycles == sum(run.cycles for run in wanted)
    for run, case in zip(wanted, cases, strict=True):
        machine = Machine(one.kernel.program)
        regions = [Region(a.name, a.start, a.bytes, a.over) for a in run.setup.areas]
        state = machine.start(dict(run.setup.registers), run.setup.memory, regions)
        outcome = Native(machine, most=most, patience=10).run(state)
        assert (outcome.reason, outcome.cycles, dict(outcome.stalls)) == ("halt", run.cycles, dict(run.stalls)), case
