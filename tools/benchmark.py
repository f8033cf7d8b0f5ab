"""The benchmark: ratios of one run, never a verdict. Machines are noisy: quote the medians.

tools/bench            everything
tools/bench stepper    one part: stepper, start, assemble, check, growth, shell, native
"""

from __future__ import annotations

import platform
import statistics
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
ROOT = HERE.parent
WORD = 0xFFFFFFFF
ROUNDS = 7


def interleaved(*actions: Callable[[], float], rounds: int = ROUNDS) -> list[list[float]]:
    """Seconds of each action over ``rounds``, in turn, after one round that does not count."""
    for action in actions:
        action()
    taken: list[list[float]] = [[] for _ in actions]
    for _ in range(rounds):
        for action, seconds in zip(actions, taken, strict=True):
            seconds.append(action())
    return taken


def line(what: str, figure: str, more: str = "") -> None:
    print(f"  {what:<46}{figure:>12}   {more}")


# ------------------------------------------------------------------------------- the stepper and its bare baseline

ADD, LOAD, COUNT, HALT = range(4)


def bare_interpreter(bundles: list[list[tuple]], registers: list[int], memory: bytearray) -> tuple[int, list[int]]:
    """A table interpreter with latencies and delayed branches that checks nothing: (bundles issued, registers).

    No ports, slots, guards, links, undefined values, alignment, arrays, freezes or drain.
    """
    pending: list[list[tuple[int, int]]] = [[] for _ in range(16)]
    targets: dict[int, int] = {}
    beat = at = 0
    while True:
        landing = pending[beat & 15]
        for register, value in landing:
            registers[register] = value
        landing.clear()
        for kind, function, d, a, b, latency in bundles[at]:
            if kind == ADD:
                pending[(beat + latency) & 15].append((d, function(registers[a], registers[b])))
            elif kind == LOAD:
                address = registers[a]
                pending[(beat + latency) & 15].append((d, int.from_bytes(memory[address : address + 4], "little")))
                pending[(beat + 1) & 15].append((a, address & ~b | (address + 4) & b))
            elif kind == COUNT:
                if registers[d]:
                    pending[(beat + 1) & 15].append((d, registers[d] - 1))
                    targets[beat + latency] = a
            else:
                return beat + 1, registers
        beat += 1
        at = targets.pop(beat, at + 1) if targets else at + 1


def bare_program() -> list[list[tuple]]:
    """The loop of bench_loop.vliw as the baseline's tables; registers g0… are 0…31, h0… 32…63, constants above."""

    def plus(a: int, b: int) -> int:
        return (a + b) & WORD

    def times(a: int, b: int) -> int:
        return (a * b) & WORD

    def unlike(a: int, b: int) -> int:
        return a ^ b

    count = (COUNT, None, 20, 11, 0, 6)
    start = [[(ADD, plus, 3, 64, 65, 1)], [(ADD, plus, 35, 64, 66, 1)], [], [], []] + [[count] for _ in range(6)]
    loop = [
        (LOAD, None, 2, 10, 4095, 5), (LOAD, None, 34, 42, 4095, 5), (ADD, times, 4, 2, 3, 2),
        (ADD, times, 36, 34, 35, 2), (ADD, plus, 6, 6, 4, 1), (ADD, plus, 38, 38, 36, 1),
        (ADD, unlike, 40, 40, 34, 1), count,
    ]  # fmt: skip
    return [*start, loop, [(HALT, None, 0, 0, 0, 0)]]


def stepper(passes: int = 60_000) -> None:
    from vliwsim.description.corefile import load_core
    from vliwsim.machine.memory import Region
    from vliwsim.machine.stepper import Machine
    from vliwsim.program.assembler import assemble

    kernel = assemble(HERE / "bench_loop.vliw", load_core(str(HERE / "bench8.toml")))
    machine = Machine(kernel.program)
    data = np.random.default_rng(1).integers(0, 2**32, 2048, dtype=np.uint32).astype("<u4").tobytes()
    numbers = kernel.core.register_numbers
    given = {numbers["g10"]: 0, numbers["h10"]: 4100, numbers["g20"]: passes}
    results = []

    def ours(careful: bool = False) -> float:
        one = Machine(kernel.program, careful=True) if careful else machine
        state = one.start(given, [(0, data)], [Region("x", 0, 8192)])
        started = time.perf_counter()
        outcome = one.run(state)
        seconds = time.perf_counter() - started
        assert outcome.reason == "halt", outcome
        results.append((outcome.bundles, [outcome.registers[numbers[n]] for n in ("g6", "h6", "h8")]))
        return seconds / outcome.bundles

    def bare() -> float:
        registers = [0] * 64 + [0, 3, 5]
        registers[10], registers[42], registers[20] = 0, 4100, passes
        memory = bytearray(data)
        started = time.perf_counter()
        bundles, registers = bare_interpreter(bare_program(), registers, memory)
        seconds = time.perf_counter() - started
        results.append((bundles, [registers[k] for k in (6, 38, 40)]))
        return seconds / bundles

    mine, theirs = interleaved(ours, bare)
    assert all(r == results[0] for r in results), "the baseline and the stepper disagree"
    ratio = statistics.median(b / o for o, b in zip(mine, theirs, strict=True))
    line("stepper, speed against a bare unchecked one", f"{ratio:.2f} x", "8 operations a bundle; asked: 0.5 x")
    line("  a bundle", f"{statistics.median(mine) * 1e6:.2f} us", f"bare: {statistics.median(theirs) * 1e6:.2f} us")
    slow = interleaved(lambda: ours(careful=True), rounds=1)[0][0]
    line("  the hot loop against the definition", f"{slow / statistics.median(mine):.1f} x")


# ---------------------------------------------------------------------------------------------------------- cold start


def start() -> None:
    def timed(*command: str) -> Callable[[], float]:
        def run() -> float:
            started = time.perf_counter()
            subprocess.run(command, check=True, stdout=subprocess.DEVNULL)
            return time.perf_counter() - started

        return run

    vliwsim = str(Path(sys.executable).parent / "vliwsim")
    ours = timed(vliwsim, "run", str(ROOT / "programs/energy/energy.vliw"))
    numpy = timed(sys.executable, "-c", "import numpy")
    mine, theirs = interleaved(ours, numpy, rounds=11)
    above = statistics.median(a - b for a, b in zip(mine, theirs, strict=True))
    line("`run` of energy, cold, above `import numpy`", f"{above:.2f} s", "asked: at most 0.3 s")
    line("  in all", f"{statistics.median(mine):.2f} s", f"import numpy: {statistics.median(theirs):.2f} s")


# ---------------------------------------------------------------------------------------------------------- assembling


def ten_thousand_lines() -> str:
    head = "kernel long\ncore pair7\ngiven x : i32[64] at g10\nreturns y : i32 in g11\n\nstart:\n"
    body = []
    for k in range(2498):
        body.append(f"@{k}  add g{k % 5 + 1}, g{k % 7 + 1}, {k % 100}")
        body.append(f"    lw h{k % 5 + 1}, [h{k % 6 + 8} + {k % 16 * 4}] if g{16 + k % 8}")
        body.append(f"    mul g{k % 3 + 8}, g{k % 4 + 1}, g{k % 5 + 1}")
        body.append(f"    xor h{k % 4 + 12}, h{k % 4 + 2}, h{k % 3 + 4}")
    return head + "\n".join(body) + "\n@2498 halt\n"


def assembling() -> None:
    from vliwsim.program.assembler import assemble

    text = ten_thousand_lines()
    count = text.count("\n")

    def ours() -> float:
        started = time.perf_counter()
        assemble("long.vliw", text=text)
        return time.perf_counter() - started

    seconds = statistics.median(interleaved(ours, rounds=3)[0])
    line(f"assembling {count:,} lines", f"{seconds:.2f} s", "asked: at most 2 s")


# --------------------------------------------------------------------------------------------------------------- check

STRAIGHT = """kernel long
core pair7
given x : i32[n] at g1
returns y : i32 in g2
needs n == 1000
start:
@0 li g2, 0
repeat 999 as i
@i lw g{4 + i % 4}, [g1 + 4 * i] ; li h2, i
end
@1002 add g2, g4, g5 ; halt
"""


def checking() -> None:
    from vliwsim.check.judge import check_kernel
    from vliwsim.description.corefile import load_core
    from vliwsim.program.assembler import assemble

    def seconds(kernel: object) -> float:
        def ours() -> float:
            started = time.perf_counter()
            check_kernel(kernel)
            return time.perf_counter() - started

        return statistics.median(interleaved(ours, rounds=3)[0])

    taken = {}
    for path in sorted((ROOT / "programs").glob("*/*.vliw")):
        for core in assemble(path).cores_named:
            taken[f"{path.stem} on {core}"] = seconds(assemble(path, load_core(core)))
    slowest = max(taken, key=lambda name: taken[name])
    line(f"check, slowest of {len(taken)} shipped", f"{taken[slowest]:.2f} s", f"{slowest}; asked: at most 0.5 s")
    straight = assemble("long.vliw", text=STRAIGHT)
    line(f"check, {len(straight.program.bundles)} straight bundles", f"{seconds(straight):.2f} s", "asked: at most 1 s")


# -------------------------------------------------------------------------------------------------------------- growth

GROW = """
import resource, sys, time
from pathlib import Path
from vliwsim.description.corefile import load_core
from vliwsim.machine.memory import Region
from vliwsim.machine.stepper import Machine
from vliwsim.program.assembler import assemble
tools, passes = Path(sys.argv[1]), int(sys.argv[2])
kernel = assemble(tools / "bench_loop.vliw", load_core(str(tools / "bench8.toml")))
numbers = kernel.core.register_numbers
machine = Machine(kernel.program)
given = {numbers["g10"]: 0, numbers["h10"]: 4100, numbers["g20"]: passes}
state = machine.start(given, [(0, bytes(8192))], [Region("x", 0, 8192)])
started = time.perf_counter()
outcome = machine.run(state)
seconds = time.perf_counter() - started
print(outcome.cycles, seconds, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


def growth() -> None:
    for passes in (10**3, 10**4, 10**5, 10**6):
        command = [sys.executable, "-c", GROW, str(HERE), str(passes)]
        cycles, seconds, peak = subprocess.run(command, check=True, capture_output=True, text=True).stdout.split()
        rate = float(seconds) / int(cycles) * 1e6
        line(f"{int(cycles):>9,} cycles", f"{rate:.2f} us", f"a cycle; peak memory {int(peak) / 1024:.0f} MiB")


# --------------------------------------------------------------------------------------------------------- the shell

SHELL = """
import random, resource, sys, time
from vliwsim.kernel.binding import bind
from vliwsim.kernel.loading import assemble_source
from vliwsim.shell.session import Session
cycles, moves = int(sys.argv[2]), int(sys.argv[3])
kernel = assemble_source(sys.argv[1] + "/bench_shell.vliw")
session = Session(bind(kernel, {"trips": cycles}))
started = time.perf_counter()
session.to_end()
ran = time.perf_counter() - started
def timed(cycles):
    started = time.process_time(), time.perf_counter()
    session.move(cycles)
    session.moment()
    return time.process_time() - started[0], time.perf_counter() - started[1]
choose = random.Random(1)
near, back = [(0.0, 0.0)], [(0.0, 0.0)]
for _ in range(moves):
    session.go(choose.randrange(1000, cycles))
    for _ in range(10):
        near.append(timed(choose.randrange(-1000, 1001)))
        back.append(timed(-1))
slowest = [max(taken[k] for taken in moves) for moves in (near, back) for k in (0, 1)]
print(session.history.last, ran, *slowest, session.recorded.kept_bytes(),
      resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


def shell() -> None:
    def measured(cycles: int, moves: int) -> list[float]:
        command = [sys.executable, "-c", SHELL, str(HERE), str(cycles), str(moves)]
        return [float(f) for f in subprocess.run(command, check=True, capture_output=True, text=True).stdout.split()]

    cycles, ran, near, near_by_clock, back, back_by_clock, kept, peak = measured(10**6, 30)
    assert cycles == 10**6 + 8, "the benchmark's own cycles changed"
    line(f"shell, to the end of {cycles:,.0f} cycles", f"{ran:.1f} s", f"{ran / cycles * 1e6:.1f} us a cycle")
    said = "of the processor, {:.0f} by the clock; asked: at most {} ms"
    line("  a move within 1,000 cycles, slowest of 300", f"{near * 1e3:.0f} ms", said.format(near_by_clock * 1e3, 100))
    line("  one cycle back, slowest of 300", f"{back * 1e3:.0f} ms", said.format(back_by_clock * 1e3, 20))
    line("  peak memory", f"{peak / 1024:.0f} MiB", f"{kept / 2**20:.1f} MiB of snapshots")
    cycles, ran, *_, kept, peak = measured(10**7, 1)
    figure = f"{peak / 1024:.0f} MiB"
    line(f"  peak memory after {cycles:,.0f} cycles", figure, f"{kept / 2**20:.1f} MiB of snapshots; asked: 200 MB")


# ------------------------------------------------------------------------------------------------- the fast engine

LOOPS = {
    "one_bundle": (HERE / "bench_loop.vliw", str(HERE / "bench8.toml"), 20_000_000, 1),
    "recurrence": (HERE / "native/recurrence.vliw", None, 4_000_000, 8),
    "bytewise": (HERE / "native/bytewise.vliw", None, 2_000_000, 25),
    "divider": (HERE / "native/divider.vliw", None, 3_000_000, 14),
    "conflicts": (HERE / "native/conflicts.vliw", None, 10_000_000, 2),
}
"""Source, core, passes, and beats a pass; the functions of tools/native/loops.c have these names."""


def by_hand(folder: str) -> object:
    """The loops written in C, compiled by the system's compiler; None where there is none."""
    import ctypes
    import shutil

    compiler = shutil.which("cc")
    if compiler is None:
        return None
    library = Path(folder) / "loops.so"
    source = HERE / "native/loops.c"
    subprocess.run([compiler, "-O2", "-march=native", "-shared", "-fPIC", "-o", library, source], check=True)
    return ctypes.CDLL(str(library))


def native() -> None:
    import tempfile

    with tempfile.TemporaryDirectory() as folder:
        library = by_hand(folder)
        ratios = [native_loop(name, library) for name in LOOPS]
    if library is not None:
        line("native against C written by hand, median", f"{statistics.median(ratios):.2f} x", "asked: 0.8 x")
    first_translation()
    many_cases()


def native_loop(name: str, library: object) -> float:
    """One loop by the fast engine, by C and by the stepper; speed against C."""
    import ctypes

    from vliwsim.description.corefile import load_core
    from vliwsim.machine.memory import Region
    from vliwsim.machine.stepper import Machine
    from vliwsim.native.engine import Native
    from vliwsim.program.assembler import assemble

    path, core, passes, beats = LOOPS[name]
    kernel = assemble(path, load_core(core) if core else None)
    machine, numbers = Machine(kernel.program), kernel.core.register_numbers
    data = np.random.default_rng(1).integers(0, 2**30, 2048, dtype=np.uint32).astype("<u4").tobytes()
    if name == "divider":
        data = np.random.default_rng(1).uniform(1, 2, 2048).astype(">f4").tobytes()
    places = {"g10": 0, "g20": passes, "g3": 0x3FC00000}
    places |= {"h10": 4100 if name == "one_bundle" else 1028} if "h10" in numbers else {"g11": 1024 + 16}
    given = {numbers[n]: v for n, v in places.items()}
    fast = Native(machine)
    fast.begin(given)
    finals: dict[str, object] = {}
    returned = [item.register for item in kernel.items if item.kind == "returns"]

    def start(trips: int) -> object:
        return machine.start({**given, numbers["g20"]: trips}, [(0, data)], [Region("x", 0, 8192)])

    def ours() -> float:
        state = start(passes)
        started = time.perf_counter()
        outcome = fast.run(state)
        seconds = time.perf_counter() - started
        assert outcome.reason == "halt", outcome.hazard
        finals["native"] = [outcome.registers[r] for r in returned], outcome.stalls["bank"]
        return seconds

    def theirs() -> float:
        registers = (ctypes.c_uint32 * 64)()
        for number, value in given.items():
            registers[number] = value
        memory = ctypes.create_string_buffer(data, len(data))
        function = getattr(library, name)
        function.restype = ctypes.c_uint64
        started = time.perf_counter()
        stalls = function(memory, registers)
        seconds = time.perf_counter() - started
        finals["C"] = [registers[r] for r in returned], stalls
        return seconds

    def stepped() -> float:
        some = passes // 500
        state = start(some)
        started = time.perf_counter()
        machine.run(state)
        return (time.perf_counter() - started) * passes / some

    actions = [ours, stepped] if library is None else [ours, stepped, theirs]
    taken = interleaved(*actions)
    rate = passes * beats / statistics.median(taken[0]) / 1e6
    slow = statistics.median(s / o for o, s in zip(taken[0], taken[1], strict=True))
    if library is None:
        line(f"native, {name}", f"{rate:.0f} M/s", f"beats; {slow:.0f} x the stepper")
        return 0.0
    assert finals["native"] == finals["C"], (name, finals)
    ratio = statistics.median(c / o for o, c in zip(taken[0], taken[2], strict=True))
    line(f"native, {name}, against C by hand", f"{ratio:.2f} x", f"{rate:.0f} M beats/s; {slow:.0f} x the stepper")
    return ratio


def first_translation() -> None:
    """Processor seconds until machine code runs first, for better code, and with that kept from before."""
    import os
    import tempfile

    from vliwsim.machine.stepper import Machine
    from vliwsim.native import cache, compiler
    from vliwsim.native.engine import Native
    from vliwsim.program.assembler import assemble

    compiler.target_machine(2)
    for name in ("energy", "lowpass", "checksum"):
        path = next((ROOT / "programs" / name).glob("*.vliw"))
        kernel = assemble(path)
        given = [item.register for item in kernel.items if item.kind != "returns" and item.register is not None]
        seconds = {}
        with tempfile.TemporaryDirectory() as folder:
            os.environ["XDG_CACHE_HOME"] = folder
            for when, quick in (("first", True), ("better", False), ("kept", True)):
                machine = Machine(kernel.program)
                cache.code_of.cache_clear()
                started = time.process_time()
                Native(machine, quick=quick).begin(given)
                seconds[when] = time.process_time() - started
        more = f"processor time; better code {seconds['better']:.2f} s, kept {seconds['kept']:.3f} s"
        line(f"first translation of {name}", f"{seconds['first']:.2f} s", more)


def many_cases(count: int = 100_000) -> None:
    from vliwsim.kernel.loaded import load_kernel

    energy = load_kernel("energy")
    x = np.random.default_rng(2).integers(-3000, 3000, (count, 64)).astype(np.int16)
    energy.run_many({"x": x[:100]})
    rates, wanted = [], (x.astype(np.int64) ** 2).sum(axis=1)

    def ours() -> float:
        started = time.perf_counter()
        many = energy.run_many({"x": x})
        seconds = time.perf_counter() - started
        assert many.ok
        assert (many.outputs["total"] == wanted).all()
        return seconds

    def numpy() -> float:
        started = time.perf_counter()
        (x.astype(np.int64) ** 2).sum(axis=1)
        return time.perf_counter() - started

    mine, theirs = interleaved(ours, numpy)
    rates = count / statistics.median(mine)
    slower = statistics.median(m / t for m, t in zip(mine, theirs, strict=True))
    line("cases of energy, n = 64", f"{rates:,.0f}/s", f"asked: 200,000/s; NumPy's reference alone {slower:.0f} x")


PARTS = {
    "stepper": stepper, "start": start, "assemble": assembling, "check": checking, "growth": growth, "shell": shell,
    "native": native,
}  # fmt: skip


def main() -> int:
    wanted = sys.argv[1:] or list(PARTS)
    unknown = [name for name in wanted if name not in PARTS]
    if unknown:
        print(f"found {', '.join(unknown)}; allowed: {', '.join(PARTS)}", file=sys.stderr)
        return 2
    print(f"{platform.machine()}, {platform.system()}, Python {platform.python_version()}, NumPy {np.__version__}")
    for name in wanted:
        PARTS[name]()
    return 0


if __name__ == "__main__":
    sys.exit(main())
