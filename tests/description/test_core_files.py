"""Bad core files: every mistake has a name, a key path and a line, and all come at once."""

from __future__ import annotations

import os
import pickle
import time
from pathlib import Path

import pytest

from vliwsim.description.corefile import load_core
from vliwsim.description.toml_places import LARGEST
from vliwsim.problems import CoreError, Problem

GOOD = """\
name       = "small"
summary    = "a core to spoil"
operations = ["integer", "memory", "control"]
zero_registers = ["g0"]
[cluster.g]
registers   = 16
read_ports  = 6
write_ports = 3
[cluster.h]
registers   = 8
read_ports  = 4
write_ports = 2
[slot.g.sum]
classes  = ["arithmetic", "shift"]
crossing = ["b"]
[slot.g.mem]
classes  = ["load", "store", "divide"]
busy     = { divide = 8 }
[slot.h.flow]
classes  = ["control"]
[latency]
otherwise = 1
load      = 4
[latency.operations]
lw = 3
[link.h.g]
operands = 2
shared   = true
fresh    = "stall"
[guards]
registers = ["g8..g15", "h0"]
[branch]
latency       = 3
overlap       = false
taken_penalty = 1
[issue]
rule  = "exposed"
early = "warn"
[memory]
size       = 4096
endianness = "big"
banks      = 3
bank_width = 8
broadcast  = true
conflict   = "reject"
misaligned = "split"
[memory.wait.slow]
start  = 1024
bytes  = 512
cycles = 2
[memory.wait.slower]
start  = 2048
bytes  = 2048
cycles = 5
[words]
bits            = 64
group           = 4
straddle        = false
straddle_freeze = 1
[interrupt]
service = 10
"""

# (text of GOOD, what stands there instead, name of the problem, its key path)
SPOILED = [
    ('"small"', '"Small Core"', "bad-name", "name"),
    ('"small"', "5", "wrong-type", "name"),
    ('"a core to spoil"', '"a\\nb"', "out-of-range", "summary"),
    ("summary ", "sumary ", "unknown-key", "sumary"),
    ("operations = [", "operation = [", "unknown-key", "operation"),
    ("operations = [", "operation = [", "missing-key", "operations"),
    ('["integer", "memory", "control"]', '"integer"', "wrong-type", "operations"),
    ('["integer", "memory", "control"]', "[]", "out-of-range", "operations"),
    ('"memory"', '"memroy"', "unknown-operations", "operations[1]"),
    ('"memory"', '"integer"', "repeated", "operations[1]"),
    ('"memory"', "7", "wrong-type", "operations[1]"),
    ('"memory"', '"absent.toml"', "unknown-file", "operations[1]"),
    ('"memory"', '"../elsewhere.toml"', "outside-folder", "operations[1]"),
    ('"memory"', '"/etc/passwd.toml"', "outside-folder", "operations[1]"),
    ('["g0"]', '["g16"]', "unknown-register", "zero_registers[0]"),
    ('["g0"]', '["g0..g3"]', "bad-name", "zero_registers[0]"),
    ('["g0"]', "0", "wrong-type", "zero_registers"),
    ("[cluster.g]", "[cluster.ga]", "bad-name", "cluster.ga"),
    ("[cluster.g]", "[cluster.G]", "bad-name", "cluster.G"),
    ("registers   = 16", "registers   = 0", "out-of-range", "cluster.g.registers"),
    ("registers   = 16", "registers   = 1025", "out-of-range", "cluster.g.registers"),
    ("registers   = 16", "registers   = 16.0", "wrong-type", "cluster.g.registers"),
    ("registers   = 16", "registers   = true", "wrong-type", "cluster.g.registers"),
    ("registers   = 16", 'registers   = "16"', "wrong-type", "cluster.g.registers"),
    ("registers   = 16", "", "missing-key", "cluster.g.registers"),
    ("registers   = 16", "registers   = 0x" + "f" * 6000, "out-of-range", "cluster.g.registers"),
    ("registers   = 16", "registers   = 1979-05-27", "wrong-type", "cluster.g.registers"),
    ("read_ports  = 6", "read_ports  = -1", "out-of-range", "cluster.g.read_ports"),
    ("read_ports  = 6", "reed_ports  = 6", "unknown-key", "cluster.g.reed_ports"),
    ("write_ports = 3", "write_ports = 0", "out-of-range", "cluster.g.write_ports"),
    ("write_ports = 3", 'write_ports = 3\nname = "g"', "unknown-key", "cluster.g.name"),
    ("[slot.g.sum]", "[slot.k.sum]", "unknown-cluster", "slot.k.sum"),
    ("[slot.g.sum]", "[slot.g.Sum]", "bad-name", "slot.g.Sum"),
    ("[slot.g.sum]", "[slot.g]", "wrong-type", "slot.g.classes"),
    ('["arithmetic", "shift"]', '["arithmetic", "shuft"]', "unknown-class", "slot.g.sum.classes[1]"),
    ('["arithmetic", "shift"]', '["shift", "shift"]', "repeated", "slot.g.sum.classes[1]"),
    ('["arithmetic", "shift"]', "[]", "out-of-range", "slot.g.sum.classes"),
    ('["arithmetic", "shift"]', '"shift"', "wrong-type", "slot.g.sum.classes"),
    ('["arithmetic", "shift"]', "[[1]]", "wrong-type", "slot.g.sum.classes[0]"),
    ('classes  = ["arithmetic", "shift"]', "", "missing-key", "slot.g.sum.classes"),
    ('crossing = ["b"]', 'crossing = ["B"]', "bad-name", "slot.g.sum.crossing[0]"),
    ('crossing = ["b"]', 'crossing = "b"', "wrong-type", "slot.g.sum.crossing"),
    ('crossing = ["b"]', 'crosing = ["b"]', "unknown-key", "slot.g.sum.crosing"),
    ("divide = 8", "divide = 0", "out-of-range", "slot.g.mem.busy.divide"),
    ("divide = 8", "divide = 256", "out-of-range", "slot.g.mem.busy.divide"),
    ("divide = 8", "shift = 8", "unknown-operation", "slot.g.mem.busy.shift"),
    ("divide = 8", "dvi = 8", "unknown-operation", "slot.g.mem.busy.dvi"),
    ("{ divide = 8 }", "8", "wrong-type", "slot.g.mem.busy"),
    ('["control"]', '["multiply"]', "never-halts", "slot"),
    ("load      = 4", "load      = 0", "out-of-range", "latency.load"),
    ("load      = 4", "load      = 256", "out-of-range", "latency.load"),
    ("load      = 4", "laod      = 4", "unknown-class", "latency.laod"),
    ("load      = 4", "branch    = 4", "unknown-class", "latency.branch"),
    ("otherwise = 1", "otherwise = 1.5", "wrong-type", "latency.otherwise"),
    ("lw = 3", "lww = 3", "unknown-operation", "latency.operations.lww"),
    ("lw = 3", "mul.haf = 3", "unknown-operation", 'latency.operations.mul.haf'),
    ("lw = 3", "lw = false", "wrong-type", "latency.operations.lw"),
    ("[link.h.g]", "[link.h.h]", "bad-name", "link.h.h"),
    ("[link.h.g]", "[link.h.q]", "unknown-cluster", "link.h.q"),
    ("[link.h.g]", "[link.h]", "wrong-type", "link.h.operands"),
    ("operands = 2", "operands = 0", "out-of-range", "link.h.g.operands"),
    ("operands = 2", "", "missing-key", "link.h.g.operands"),
    ("shared   = true", "shared   = 1", "wrong-type", "link.h.g.shared"),
    ('fresh    = "stall"', 'fresh    = "stal"', "unknown-word", "link.h.g.fresh"),
    ('"g8..g15"', '"g8..g16"', "unknown-register", "guards.registers[0]"),
    ('"g8..g15"', '"g15..g8"', "bad-name", "guards.registers[0]"),
    ('"g8..g15"', '"g8..h1"', "bad-name", "guards.registers[0]"),
    ('"g8..g15"', '"g8-g15"', "bad-name", "guards.registers[0]"),
    ('"g8..g15"', '"x3"', "unknown-register", "guards.registers[0]"),
    ('"g8..g15"', "8", "wrong-type", "guards.registers[0]"),
    ('["g8..g15", "h0"]', '"some"', "wrong-type", "guards.registers"),
    ("[guards]", "[guards]\nregister = 1", "unknown-key", "guards.register"),
    ("latency       = 3", "latency       = 0", "out-of-range", "branch.latency"),
    ("latency       = 3", "latency       = 65", "out-of-range", "branch.latency"),
    ("overlap       = false", 'overlap       = "no"', "wrong-type", "branch.overlap"),
    ("taken_penalty = 1", "taken_penalty = -1", "out-of-range", "branch.taken_penalty"),
    ('"exposed"', '"expose"', "unknown-word", "issue.rule"),
    ('"warn"', '"Warn"', "unknown-word", "issue.early"),
    ("size       = 4096", "size       = 4294967297", "out-of-range", "memory.size"),
    ("size       = 4096", "waits      = 3", "unknown-key", "memory.waits"),  # a field of the class, and no key
    ("size       = 4096", "size       = 2048", "outside-memory", "memory.wait.slower"),
    ('"big"', '"middle"', "unknown-word", "memory.endianness"),
    ("banks      = 3", "banks      = 0", "out-of-range", "memory.banks"),
    ("bank_width = 8", "bank_width = 12", "out-of-range", "memory.bank_width"),
    ("broadcast  = true", "broadcast  = 1", "wrong-type", "memory.broadcast"),
    ('"reject"', '"refuse"', "unknown-word", "memory.conflict"),
    ('"split"', '"spilt"', "unknown-word", "memory.misaligned"),
    ("bytes  = 512", "bytes  = 1025", "overlap", "memory.wait.slower"),
    ("bytes  = 2048", "bytes  = 2049", "outside-memory", "memory.wait.slower"),
    ("[memory.wait.slow]", "[memory.wait.Slow]", "bad-name", "memory.wait.Slow"),
    ("[memory.wait.slow]", "[memory.wait]", "wrong-type", "memory.wait.start"),
    ("cycles = 5", "cycle = 5", "missing-key", "memory.wait.slower.cycles"),
    ("bits            = 64", "bits            = 60", "out-of-range", "words.bits"),
    ("bits            = 64", "bits            = 24", "out-of-range", "words.bits"),
    ("group           = 4", "group           = 0", "out-of-range", "words.group"),
    ("straddle        = false", "straddle        = 0", "wrong-type", "words.straddle"),
    ("straddle_freeze = 1", "straddle_freeze = 2000", "out-of-range", "words.straddle_freeze"),
    ("service = 10", "service = -10", "out-of-range", "interrupt.service"),
    ("[interrupt]", "[interupt]", "unknown-key", "interupt"),
    ("[interrupt]\nservice = 10", "[[interrupt]]", "wrong-type", "interrupt"),
    ('name       = "small"', 'base = "pair6"', "unknown-core", "base"),
    ('name       = "small"', "base = 7", "wrong-type", "base"),
    ('name       = "small"', 'base = "core.toml"', "base-cycle", "base"),
    ('name       = "small"', 'base = "../core.toml"', "outside-folder", "base"),
    ('name       = "small"', 'remove = ["latency.load"]', "nothing-to-remove", "remove[0]"),
    ('name       = "small"', 'remove = "latency.load"', "wrong-type", "remove"),
    ('name       = "small"', 'remove = ["a b"]', "bad-name", "remove[0]"),
]  # fmt: skip


def complaints(path: Path) -> tuple[Problem, ...]:
    with pytest.raises(CoreError) as caught:
        load_core(str(path))
    return caught.value.problems


@pytest.fixture
def file(tmp_path: Path) -> Path:
    return tmp_path / "core.toml"


def test_the_file_to_spoil_is_good(file: Path) -> None:
    file.write_text(GOOD)
    assert load_core(str(file)).summary == "a core to spoil"


@pytest.mark.parametrize(("there", "instead", "name", "key"), SPOILED)
def test_one_mistake(file: Path, there: str, instead: str, name: str, key: str) -> None:
    assert there in GOOD
    text = GOOD.replace(there, instead, 1)
    file.write_text(text)
    problems = complaints(file)
    found = [problem for problem in problems if (problem.name, problem.key) == (name, key)]
    assert found, [(problem.name, problem.key) for problem in problems]
    (problem,) = found
    assert problem.found
    assert problem.allowed
    assert problem.place is not None
    assert problem.place.file == str(file)
    assert len(str(problem)) < 1500
    # the line named is one that the change touched, or where something is missing or two parts clash, one that stays
    touched = [k for k, (old, new) in enumerate(zip(GOOD.split("\n"), text.split("\n")), 1) if old != new]
    if name not in ("missing-key", "outside-memory", "overlap", "never-halts", "wrong-type") and touched:
        assert problem.place.line >= touched[0]
        assert problem.place.line <= touched[0] + instead.count("\n")


def test_all_mistakes_at_once_in_the_order_of_their_lines(file: Path) -> None:
    text = (
        GOOD.replace("registers   = 16", "registers   = 0").replace('"g8..g15"', '"g8_g15"').replace("lw = 3", "lx = 3")
    )
    text = (
        text.replace('"exposed"', "1")
        .replace('fresh    = "stall"', "frech = 1")
        .replace("group           = 4", "grp = 3")
    )
    text = text.replace("divide = 8", "divde = 8, divide = 0").replace('"shift"', '"shift", "shfit"')
    file.write_text(text)
    assert [(problem.name, problem.key, problem.place.line) for problem in complaints(file) if problem.place] == [
        ("out-of-range", "cluster.g.registers", 6),
        ("unknown-class", "slot.g.sum.classes[2]", 14),
        ("unknown-operation", "slot.g.mem.busy.divde", 18),
        ("out-of-range", "slot.g.mem.busy.divide", 18),
        ("unknown-operation", "latency.operations.lx", 25),
        ("unknown-key", "link.h.g.frech", 29),
        ("bad-name", "guards.registers[0]", 31),
        ("wrong-type", "issue.rule", 37),
        ("unknown-key", "words.grp", 57),
    ]


@pytest.mark.parametrize(
    ("there", "instead", "remedy"),
    [
        ("summary ", "sumary ", "summary"),
        ('"memory"', '"memroy"', "memory"),
        ('["arithmetic", "shift"]', '["arithmetic", "shuft"]', "shift"),
        ("lw = 3", "lww = 3", "lw"),
        ("load      = 4", "branch    = 4", "branch.latency"),
        ('"exposed"', '"expose"', "exposed"),
        ("registers   = 16", 'registers   = "16"', "16, without quotes"),
        ("bank_width = 8", "bank_width = 12", "8"),
        ('name       = "small"', 'base = "pair6"', "pair7"),
    ],
)
def test_what_to_try(file: Path, there: str, instead: str, remedy: str) -> None:
    file.write_text(GOOD.replace(there, instead, 1))
    assert complaints(file)[0].remedy == remedy


def test_how_a_problem_reads(file: Path) -> None:
    file.write_text(GOOD.replace("load      = 4", "laod      = 4"))
    assert str(complaints(file)[0]) == (
        f"{file}:23:1  latency.laod  unknown-class  (error)\n"
        "    laod      = 4\n"
        "    ^\n"
        '  found    "laod"\n'
        "  allowed  arithmetic, shift, multiply, divide, load, store, control, float, float_divide, update, otherwise, "
        "operations\n"
        "  try      load"
    )


def test_too_many_registers(file: Path) -> None:
    clusters = "".join(f"[cluster.{name}]\nregisters = 1024\nread_ports = 4\nwrite_ports = 2\n" for name in "jkmno")
    file.write_text(GOOD + clusters)
    assert [(problem.name, problem.key) for problem in complaints(file)] == [("out-of-range", "cluster")]


def test_a_mistake_in_a_base_is_reported_in_the_base(tmp_path: Path) -> None:
    (tmp_path / "low.toml").write_text(GOOD.replace("load      = 4", "load      = 0"))
    (tmp_path / "high.toml").write_text('base = "low.toml"\n[latency]\nstore = 0\n')
    problems = complaints(tmp_path / "high.toml")
    assert [(Path(p.place.file).name, p.place.line, p.key) for p in problems if p.place] == [
        ("low.toml", 23, "latency.load"),
        ("high.toml", 3, "latency.store"),
    ]


def test_a_base_cycle_over_two_files(tmp_path: Path) -> None:
    (tmp_path / "one.toml").write_text('base = "two.toml"\n')
    (tmp_path / "two.toml").write_text('base = "one.toml"\n')
    assert [problem.name for problem in complaints(tmp_path / "one.toml")] == ["base-cycle"]


def test_a_chain_of_bases_has_an_end(tmp_path: Path) -> None:
    for k in range(40):
        (tmp_path / f"c{k}.toml").write_text(f'base = "c{k + 1}.toml"\n')
    (tmp_path / "c40.toml").write_text(GOOD)
    assert [problem.name for problem in complaints(tmp_path / "c0.toml")] == ["base-cycle"]
    assert load_core(str(tmp_path / "c30.toml")).name == "c30"


def test_a_symbolic_link_does_not_lead_out(tmp_path: Path) -> None:
    (tmp_path / "secret.toml").write_text("[x]\ndoes = 'd = a'\n")
    inner = tmp_path / "inner"
    inner.mkdir()
    (inner / "mine.toml").symlink_to(tmp_path / "secret.toml")
    (inner / "core.toml").write_text(GOOD.replace('"memory"', '"memory", "mine.toml"'))
    assert [problem.name for problem in complaints(inner / "core.toml")] == ["outside-folder"]


def test_a_user_s_operation_file_allows_new_classes(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text("[blend.fast]\nclass = 'blend'\ndoes = 'd = a'\n")
    text = GOOD.replace('"memory"', '"memory", "mine.toml"').replace('"shift"]', '"shift", "blend"]')
    (tmp_path / "core.toml").write_text(text.replace("lw = 3", "lw = 3\nblend.fast = 2"))
    core = load_core(str(tmp_path / "core.toml"))
    assert core.operations[2] == str((tmp_path / "mine.toml").resolve())
    assert core.slots[0].classes == ("arithmetic", "shift", "blend")
    assert core.latency.of("blend.fast", "blend") == 2


HOSTILE = {
    "empty": b"",
    "binary": bytes(range(256)) * 4,
    "not UTF-8": b'name = "\xff"\n',
    "half UTF-16": "name = 1".encode("utf-16"),
    "nul": b'name = "a\x00b"',
    "not TOML": b"this is no core\n",
    "unclosed": b'name = "',
    "twice": b"[memory]\nsize = 4096\n[memory]\n",
    "deep arrays": b"name = " + b"[" * 100_000,
    "deep balanced arrays": b"name = " + b"[" * 50_000 + b"]" * 50_000,
    "deep inline tables": b"name = " + b"{a=" * 50_000 + b"1" + b"}" * 50_000,
    "deep keys": b"a." * 200_000 + b"b = 1",
    "deep quoted keys": b'"a".' * 100_000 + b"b = 1",
    "deep headers": b"[" + b"a." * 100_000 + b"b]",
    "many digits": b"[cluster.g]\nregisters = " + b"9" * 100_000,
    "many hex digits": b"[cluster.g]\nregisters = 0x" + b"f" * 100_000,
    "many keys": b"".join(b"k%d = 1\n" % k for k in range(50_000)),
    "many clusters": b"".join(b"[cluster.c%d]\n" % k for k in range(20_000)),
    "many slots": b"".join(b"[slot.g.s%d]\n" % k for k in range(20_000)),
    "many busy": b"[slot.g.m]\nclasses=['control']\n[slot.g.m.busy]\n"
    + b"".join(b"k%d = 0\n" % k for k in range(20_000)),
    "many latencies": b"[latency]\n" + b"".join(b"k%d = 0\n" % k for k in range(20_000)),
    "many guards": b"[guards]\nregisters = [" + b'"g0..g1023",' * 20_000 + b"]",
    "many links": b"".join(b"[link.g.s%d]\n" % k for k in range(20_000)),
    "many regions": b"".join(b"[memory.wait.s%d]\nstart=0\nbytes=9\ncycles=1\n" % k for k in range(10_000)),
    "many removals": b"base = 'pair7'\nremove = [" + b"'slot.g.x'," * 20_000 + b"]",
    "one long line": b"#" * 900_000 + b"\nname = 5",
    "one long name": b"k" * 900_000 + b" = 5",
    "too big": b"#" * (LARGEST + 1),
}


@pytest.mark.parametrize("content", HOSTILE.values(), ids=HOSTILE)
def test_hostile_files(file: Path, content: bytes) -> None:
    file.write_bytes(content)
    began = time.process_time()
    problems = complaints(file)
    assert 1 <= len(problems) <= 1100
    assert all(problem.place and problem.place.file == str(file) for problem in problems)
    assert sum(len(str(problem)) for problem in problems) < 500_000
    assert time.process_time() - began < 20  # against hanging, no benchmark


def test_paths_that_are_no_files(tmp_path: Path) -> None:
    (tmp_path / "folder.toml").mkdir()
    (tmp_path / "loop.toml").symlink_to(tmp_path / "loop.toml")
    os.mkfifo(tmp_path / "pipe.toml")
    assert complaints(tmp_path / "folder.toml")[0].name == "file-unreadable"
    assert complaints(tmp_path / "pipe.toml")[0].name == "file-unreadable"
    assert complaints(tmp_path / "loop.toml")[0].name in ("file-missing", "file-unreadable")
    assert complaints(tmp_path / "absent.toml")[0].name == "file-missing"
    assert complaints(Path("a\0b.toml"))[0].name == "file-unreadable"
    assert complaints(Path("x" * 5000 + ".toml"))[0].name in ("file-missing", "file-unreadable")


@pytest.mark.parametrize("name", ["pair6", "", "../cores/pair7", "pair7.tml", "/etc/passwd"])
def test_unknown_names(name: str) -> None:
    with pytest.raises(CoreError) as caught:
        load_core(name)
    assert [problem.name for problem in caught.value.problems] == ["unknown-core"]
    assert "pair7" in caught.value.problems[0].allowed


def test_the_error_survives_pickling(file: Path) -> None:
    file.write_text(GOOD.replace("registers   = 16", "registers   = 0"))
    with pytest.raises(CoreError) as caught:
        load_core(str(file))
    assert pickle.loads(pickle.dumps(caught.value)).problems == caught.value.problems
