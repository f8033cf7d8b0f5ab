"""The fuzzer's inputs: files of every kind and command lines, mutated, each made from its number alone."""

from __future__ import annotations

import functools
import io
import shlex
import zipfile
from collections.abc import Callable
from pathlib import Path
from random import Random

import attrs
import numpy as np

from tests.kernel.sources import DOUBLE, REFERENCES, SUM
from tests.robustness import mutate
from tests.robustness.rows_cores import SMALL
from tests.robustness.rows_operations import CORE, PEAK
from tests.robustness.workshop import npy
from vliwsim.description.places import isa_folder, programs_folder
from vliwsim.kernel.goldens import record, to_bytes
from vliwsim.kernel.loading import assemble_source
from vliwsim.kernel.reference import Reference
from vliwsim.kernel.runner import run_kernel

CYCLES = 2000
"""Cycles that the programs run at most."""
TOML = mutate.GENTLE_TOML
SEED = "vibration"


@attrs.frozen
class Mutant:
    """``files`` by name, and the command that is run beside them."""

    kind: str
    files: dict[str, bytes]
    arguments: list[str]


@functools.cache
def sources() -> list[str]:
    """Every shipped kernel, and two small ones."""
    return [path.read_text(encoding="utf-8") for path in sorted(programs_folder().rglob("*.vliw"))] + [SUM, DOUBLE]


@functools.cache
def cores() -> list[str]:
    shipped = sorted((isa_folder() / "cores").glob("*.toml"))
    delta = (
        'base = "pair7"\nremove = ["slot.h.sum", "link.g.h"]\n[latency]\nload = 5\n[latency.operations]\nmul.half = 2\n'
    )
    return [path.read_text(encoding="utf-8") for path in shipped] + [SMALL, delta]


@functools.cache
def operations() -> list[str]:
    """Every shipped operation as a text of its own."""
    tables = [PEAK]
    for path in sorted((isa_folder() / "operations").glob("*.toml")):
        family: list[str] = []
        for line in path.read_text(encoding="utf-8").splitlines(keepends=True):
            if line.startswith("["):
                family.append("")
            if family:
                family[-1] += line
        tables += family
    return tables


@functools.cache
def images() -> list[bytes]:
    """The shipped kernels, assembled."""
    paths = sorted(programs_folder().rglob("*.vliw"))
    return [assemble_source(str(path)).image for path in paths]


@functools.cache
def arrays() -> list[bytes]:
    plain = [np.arange(8).astype(kind) for kind in ("i1", "<i2", ">i2", "<i4", "<u4", "<i8", "<f4", "<f8", "?", "c8")]
    shaped = [
        np.zeros((2, 3)),
        np.int16(3),
        np.zeros(0),
        np.array(["ab"]),
        np.zeros(2, "i2,f4"),
        np.array([np.nan, np.inf]),
    ]
    return [npy(array) for array in (*plain, *shaped)] + [npy([{}], allow_pickle=True)]


@functools.cache
def everything() -> list[str]:
    """Texts of all kinds, whose tokens get into one another."""
    return [*sources(), *cores(), *operations()]


def _encoded(text: str, random: Random) -> bytes:
    """The text as a file, now and then not in UTF-8."""
    if random.random() < 0.03:
        text = text.replace("\n", "\r\n")
    if random.random() < 0.02:
        return mutate.data(text.encode("utf-8", "surrogatepass"), random, images())
    return text.encode("utf-16" if random.random() < 0.005 else "utf-8", "surrogatepass")


def a_source(random: Random) -> Mutant:
    text = mutate.text(random.choice(sources()), random, everything())
    limit = ["--no-reference", "--limit", str(CYCLES)]
    commands = [
        ["run", "x.vliw", *limit],
        ["run", "x.vliw", *limit, "--json"],
        ["run", "x.vliw", *limit, "--give", f"n={random.choice((0, 1, 2, 4, 7, 8, 64))}", "--save", "total=out.npy"],
        ["run", "x.vliw", "--no-reference", "--limit", "100", "--trace", "--notes"],
        ["run", "x.vliw", *limit, "--interrupt-at", str(random.randrange(60))],
        ["run", "x.vliw", "--no-reference", "--cases"],
        ["run", "x.vliw", *limit, "--core", random.choice(("lone2", "lone4", "pair7", "ring16", "float3"))],
        ["assemble", "x.vliw", "-o", "out.image"],
        ["assemble", "x.vliw", "-o", "out.image"],
        ["check", "x.vliw", "--cap", "400", "--sarif", "out.sarif"],
        ["check", "x.vliw", "--cap", "400", "--json"],
    ]
    return Mutant("source", {"x.vliw": _encoded(text, random)}, random.choice(commands))


def a_core(random: Random) -> Mutant:
    files = {
        "x.toml": _encoded(
            mutate.text(random.choice(cores()), random, [*cores(), random.choice(everything())], TOML), random
        )
    }
    if random.random() < 0.2:
        files["small.toml"] = _encoded(mutate.text(SMALL, random, cores(), TOML), random)
        files["x.toml"] = b'base = "small.toml"\n' + (files["x.toml"] if random.random() < 0.3 else b"")
    files["x.vliw"] = random.choice(sources()).encode()
    commands = [
        ["cores", "x.toml"],
        ["cores", "x.toml", "--set", random.choice(SETTINGS)],
        ["layout", "--core", "x.toml"],
        ["ops", "--core", "x.toml"],
        ["run", "x.vliw", "--core", "x.toml", "--no-reference", "--limit", str(CYCLES)],
        ["assemble", "x.vliw", "--core", "x.toml", "-o", "out.image"],
    ]
    return Mutant("core", files, random.choice(commands))


def a_table(random: Random) -> Mutant:
    """A few operations, in a file that a core names."""
    text = 'class = "arithmetic"\n' + "\n".join(random.sample(operations(), random.randint(1, 4)))
    text = mutate.text(text, random, [*operations(), random.choice(everything())], TOML)
    core = CORE if random.random() < 0.2 else CORE.replace('"integer", "memory", ', "")  # few names are taken there
    files = {"mine.toml": _encoded(text, random), "core.toml": core.encode(), "x.vliw": SUM.encode()}
    commands = [
        ["ops", "--core", "core.toml"],
        ["ops", random.choice(("peak.fade", "add", "mul.q15.rnd")), "--core", "core.toml"],
        ["layout", "--core", "core.toml"],
        ["assemble", "x.vliw", "--core", "core.toml"],
    ]
    return Mutant("operations", files, random.choice(commands))


def an_image(random: Random) -> Mutant:
    image = mutate.image(random.choice(images()), random, images())
    options = [[], [], ["-o", "out.vliw"], ["--core", random.choice(("lone4", "pair7", "ring16"))]]
    return Mutant("image", {"x.image": image}, ["disassemble", "x.image", *random.choice(options)])


TABLE = """\
kernel probe
core pair7
table t : {}[8] from "x.npy" at g1
returns y : i32 in g2
start:
@0 lw g2, [g1]
@9 halt
"""


def an_array(random: Random) -> Mutant:
    array = mutate.array(random.choice(arrays()), random, arrays())
    files = {"x.npy": array, "x.vliw": SUM.encode()}
    if random.random() < 0.4:
        files["x.vliw"] = TABLE.format(random.choice(("i8", "i16", "i32", "q15", "f32"))).encode()
        return Mutant("table", files, ["run", "x.vliw", "--limit", str(CYCLES)])
    if random.random() < 0.5:
        files["x.vliw"] = SUM.replace("i16[n]", random.choice(("q15[n]", "f32[n]", "u8[n]", "i32[2 * n]"))).encode()
    return Mutant("array", files, ["run", "x.vliw", "--give", "x=x.npy", "--limit", str(CYCLES)])


SCRIPT = """\
ahead 3
here
flight g4
at loop@2 pass 2
at cycle 9
back 2
seek landed g4
seek back stalled
alarm stalled
alarms
silence 1
tell g4 + 1 as q15
tell x[0:2], g10
why g4
uses g10
judge
suppose g4 = 7
ahead
forget
draw x[0:3]
at end
at wrong sum
leave
"""


def a_script(random: Random) -> Mutant:
    """Commands of the shell, on a run that is short."""
    lines = SCRIPT.splitlines(keepends=True)
    script = mutate.text("".join(random.sample(lines, random.randint(1, 6))), random, [SCRIPT, SUM])
    files = {"x.vliw": SUM.encode(), "play.txt": _encoded(script, random)}
    return Mutant("script", files, ["debug", "x.vliw", "--give", "x=3,4,5", "--play", "play.txt"])


@functools.cache
def goldens() -> list[tuple[dict[str, bytes], int]]:
    """Members of golden files of SUM, of both formats, and how they are packed."""
    kernel = assemble_source(str(Path("x.vliw")))  # the working folder has it
    reference = Reference(Path("reference.py"), lambda x: int(x.astype(int).sum()), None, "")
    inputs = {f"n-{n}": {"x": np.arange(n, dtype=np.int16)} for n in (1, 5)}
    runs = [run_kernel(kernel, given, case=name, reference=reference) for name, given in inputs.items()]
    with zipfile.ZipFile(io.BytesIO(to_bytes(record(runs, "2026-01-02", "tool", "")))) as archive:
        new = {name: archive.read(name) for name in archive.namelist()}
    old = {"given.x.npy": npy(np.arange(3, dtype=np.int16)), "returns.sum.npy": npy(3), "cycles.npy": npy(17)}
    return [(new, zipfile.ZIP_STORED), (new, zipfile.ZIP_DEFLATED), (old, zipfile.ZIP_DEFLATED)]


def a_golden(random: Random) -> Mutant:
    """A golden file beside its kernel, with members damaged or as a whole."""
    Path("x.vliw").write_text(SUM)
    members, packed = random.choice(goldens())
    members = dict(members)
    if random.random() < 0.6:
        name = random.choice(sorted(members))
        if name.endswith(".npy"):
            members[name] = mutate.array(members[name], random, arrays())
        else:
            members[name] = mutate.text(members[name].decode(), random, ["{}", SUM]).encode("utf-8", "surrogatepass")
        if random.random() < 0.2:
            members[random.choice(("../x", "/x", "9/given/x.npy", "0/given/y.npy", name + "x"))] = members.pop(name)
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", packed) as archive:
        for name, content in members.items():
            archive.writestr(zipfile.ZipInfo(name), content, packed)
    whole = stream.getvalue()
    if random.random() < 0.5:
        whole = mutate.data(whole, random, [whole])
    files = {"x.vliw": SUM.encode(), "reference.py": REFERENCES["total"].encode(), "golden/x.pair7.npz": whole}
    options = random.choice(([], ["--show"]))
    return Mutant("golden", files, ["golden", "x.vliw", "--case", "smallest", "--date", "2026-01-02", *options])


SETTINGS = (
    "latency.load=5",
    "issue.rule=interlocked",
    "memory.size=64",
    'remove=["slot.g.flow"]',
    "words.bits=32",
    "x=",
)
LINES = (
    "run x.vliw --give n=5 --limit 500 --no-reference",
    "run x.vliw --give x=1,2,-3 --save sum=out.npy --limit 500",
    "run x.vliw --give x=x.npy --interrupt-at 7 --json --limit 500",
    "run x.vliw --case smallest --trace --limit 50",
    "run x.vliw --cases",
    "run x.vliw --core lone4 --set latency.load=3 --set guards.registers=all --limit 500",
    'run x.vliw --set issue={rule="interlocked"} --set memory.banks=3 --limit 500',
    "assemble x.vliw -o out.image --set words.bits=128",
    "cores pair7 --set cluster.g.registers=30 --set link.g.h.operands=2",
    "layout add --core lone2 --set words.group=1",
    "ops mul.half --core pair7 --set latency.multiply=9",
)


def a_line(random: Random) -> Mutant:
    """A command line, mutated word by word."""
    words = shlex.split(random.choice(LINES), posix=False)
    for _ in range(random.choice((1, 1, 2, 3))):
        at = random.randrange(1, len(words))
        kind = random.randrange(4)
        if kind == 0:
            words[at] = mutate.text(words[at], random, [*LINES, *SETTINGS])
        elif kind == 1:
            words[at:at] = random.choice(LINES).split()[random.randrange(1, 4) :][:2]
        elif kind == 2 and len(words) > 2:
            del words[at]
        else:
            words[at] = words[at].split("=")[0] + "=" + mutate.text(words[at].split("=")[-1], random, list(SETTINGS))
    files = {"x.vliw": SUM.encode(), "x.npy": npy(np.arange(4, dtype=np.int16))}
    return Mutant("line", files, [word[:9000] for word in words])


MAKERS: tuple[Callable[[Random], Mutant], ...] = (
    *(a_source,) * 7, *(a_core,) * 4, *(a_table,) * 4, *(an_image,) * 3, *(an_array,) * 2, *(a_line,) * 2,
    a_script, a_golden,
)  # fmt: skip


def mutant(number: int, seed: str = SEED) -> Mutant:
    """The mutant of this number, always the same."""
    random = Random(f"{seed} {number}")
    return random.choice(MAKERS)(random)
