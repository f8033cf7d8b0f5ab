"""Malformed core files, deltas and changes to cores."""

from __future__ import annotations

from tests.robustness.workshop import Content, Row, a_folder, a_pipe, link_to

SMALL = """\
name       = "small"
summary    = "one register file, two slots"
operations = ["integer", "memory", "control"]

[cluster.g]
registers   = 16
read_ports  = 5
write_ports = 2

[slot.g.work]
classes = ["arithmetic", "shift", "control"]

[slot.g.mem]
classes = ["load", "store", "arithmetic"]

[latency]
load = 3
"""
"""The small core of isa/README.md."""

DELTA = 'base = "pair7"\n'
CORES = "cores small.toml"


def refused(title: str, names: str | list[str], content: Content, command: str = CORES, **more: object) -> Row:
    """A file small.toml that is no core."""
    listed = [names] if isinstance(names, str) else names
    files = {"small.toml": content, **more.pop("files", {})}  # type: ignore[dict-item]
    return Row(title, command, listed, 2, files, **more)  # type: ignore[arg-type]


def but(old: str, new: str) -> str:
    """The small core with one thing replaced."""
    assert SMALL.count(old) == 1
    return SMALL.replace(old, new)


def change(title: str, name: str, *changes: str, core: str = "pair7", **more: object) -> Row:
    """A ``--set`` that is refused."""
    options = " ".join(f"--set '{each}'" for each in changes)
    return Row(title, f"cores {core} {options}", [name] if name else [], 2, **more)  # type: ignore[arg-type]


FILES = [
    refused("an empty core", ["missing-key", "missing-key", "missing-key"], ""),
    refused("no TOML", "not-toml", "kernel energy\ncore pair7\n"),
    refused("half a core", "not-toml", SMALL[:200]),
    refused("bytes that are no text", "not-toml", SMALL.encode() + b"\xff\xfe"),
    refused("sixteen-bit text", "not-toml", SMALL.encode("utf-16")),
    refused("zero bytes", "not-toml", bytes(64)),
    refused("a key twice", "not-toml", but("load = 3", "load = 3\nload = 4")),
    refused("a table twice", "not-toml", SMALL + "[latency]\n"),
    refused("ten thousand levels", "not-toml", f"name = {'[' * 10_000}{']' * 10_000}\n"),
    refused("a number of ten thousand digits", "not-toml", but("load = 3", "load = " + "9" * 10_000)),
    refused("a core too big", "file-too-big", SMALL + "#" * 2_000_000),
    refused("a folder named like a core", "file-unreadable", a_folder),
    refused("a pipe", "file-unreadable", a_pipe, process=True),
    refused("a link to itself", "file-unreadable", link_to("small.toml")),
    refused("a core that is an image", "not-toml", b"vliwsim image 1\n{}\n"),
    Row("no such file", "cores none.toml", ["file-missing"]),
    Row("no such core", "cores pair8", ["unknown-core"], remedy="pair7"),
    Row("a device without end", "cores /dev/zero --set latency.load=3", ["unknown-core"]),
    Row("a core out of the shipped folder", "cores ../cores/pair7", ["unknown-core"]),
]

KEYS = [
    refused(
        "a key misspelt", ["unknown-key", "missing-key"], but("registers   =", "registres   ="), remedy="registers"
    ),
    refused("a table nobody has", "unknown-key", SMALL + "[cache]\nsize = 4\n"),
    refused("a terminal's command for a key", ["bad-name", "unknown-class"], SMALL + '"\\u001b[2J\\u00a0" = 1\n'),
    refused("no operations", "missing-key", but('operations = ["integer", "memory", "control"]\n', "")),
    refused("text for a number", "wrong-type", but("load = 3", 'load = "3"')),
    refused("a float for a number", "wrong-type", but("load = 3", "load = 3.0")),
    refused("a truth for a number", "wrong-type", but("load = 3", "load = true")),
    refused("a date for a number", "wrong-type", but("load = 3", "load = 1979-05-27")),
    refused("a table for a number", "wrong-type", but("load = 3", "load = { beats = 3 }")),
    refused("no registers", "out-of-range", but("registers   = 16", "registers   = 0")),
    refused("a billion registers", "out-of-range", but("registers   = 16", "registers   = 1000000000")),
    refused("no write port", "out-of-range", but("write_ports = 2", "write_ports = 0")),
    refused("a latency of nothing", "out-of-range", but("load = 3", "load = 0")),
    refused("a latency before time", "out-of-range", but("load = 3", "load = -1")),
    refused("a latency of a class nobody has", "unknown-class", but("load = 3", "laod = 3"), remedy="load"),
    refused("a latency of no operation", "unknown-operation", SMALL + '[latency.operations]\n"mul.hlaf" = 2\n'),
    refused("a slot in no cluster", "unknown-cluster", SMALL + '[slot.k.more]\nclasses = ["load"]\n'),
    refused("a class nobody has", "unknown-class", but('"load", "store"', '"load", "stoer"'), remedy="store"),
    refused("nothing that halts", "never-halts", but(', "control"]\n\n[slot', "]\n\n[slot")),
    refused("a cluster of two letters", "bad-name", SMALL + "[cluster.gg]\nregisters=1\nread_ports=1\nwrite_ports=1\n"),
    refused("a name with a path", "bad-name", but('"small"', '"../small"')),
    refused("an endianness of its own", "unknown-word", SMALL + '[memory]\nendianness = "middle"\n'),
    refused("memory of less than nothing", "out-of-range", SMALL + "[memory]\nsize = -4\n"),
    refused("memory without end", "out-of-range", SMALL + "[memory]\nsize = 0x1_0000_0000_0000\n"),
    refused("banks of three bytes", "out-of-range", SMALL + "[memory]\nbanks = 2\nbank_width = 3\n"),
    refused("a wait outside memory", "outside-memory", SMALL + "[memory.wait.far]\nstart=99999\nbytes=4\ncycles=1\n"),
    refused(
        "waits that overlap",
        "overlap",
        SMALL + "[memory.wait.a]\nstart=0\nbytes=8\ncycles=1\n[memory.wait.b]\nstart=4\nbytes=8\ncycles=1\n",
    ),
    refused("words of seven bits", "out-of-range", SMALL + "[words]\nbits = 7\n"),
    refused("words too narrow for it", "words-too-narrow", SMALL + "[words]\nbits = 32\n", "layout --core small.toml"),
    refused("a guard beyond the registers", "unknown-register", SMALL + '[guards]\nregisters = ["g99"]\n'),
    refused("guards counted down", "bad-name", SMALL + '[guards]\nregisters = ["g9..g3"]\n'),
    refused("a link to nowhere", "unknown-cluster", SMALL + "[link.g.k]\noperands = 1\n"),
    refused("a link from a cluster to itself", "bad-name", SMALL + "[link.g.g]\noperands = 1\n"),
    refused("a branch in no time", "out-of-range", SMALL + "[branch]\nlatency = 0\n"),
    refused("an issue rule of its own", "unknown-word", SMALL + '[issue]\nrule = "sometimes"\n'),
    refused("a zero register beyond the registers", "unknown-register", 'zero_registers = ["g99"]\n' + SMALL),
    refused("operations nobody has", "unknown-operations", but('"memory"', '"memroy"'), remedy="memory"),
    refused("operations out of the folder", "outside-folder", but('"memory"', '"../ops.toml"')),
    refused("operations at an absolute path", "outside-folder", but('"memory"', '"/etc/ops.toml"')),
    refused("operations not there", "unknown-file", but('"memory"', '"ops.toml"')),
    refused(
        "six mistakes, all said",
        ["out-of-range", "out-of-range", "unknown-class", "unknown-key", "unknown-word", "wrong-type"],
        but("load = 3", "laod = 3\nstore = 0").replace("registers   = 16", "registers = 0\ncolour = 1")
        + '[issue]\nrule = "sometimes"\n[branch]\nlatency = "four"\n',
    ),
]

DELTAS = [
    refused("a delta on nothing", "unknown-core", 'base = "pair8"\n', remedy="pair7"),
    refused("a delta on itself", "base-cycle", 'base = "small.toml"\n'),
    refused("deltas in a circle", "base-cycle", 'base = "b.toml"\n', files={"b.toml": 'base = "small.toml"\n'}),
    refused("a delta out of the folder", "outside-folder", 'base = "../pair7.toml"\n'),
    refused(
        "a delta by a link out of the folder",
        "outside-folder",
        'base = "in.toml"\n',
        files={"in.toml": link_to("/etc/hostname")},
    ),
    refused("a delta on a missing file", "unknown-file", 'base = "b.toml"\n'),
    refused("a delta on a damaged file", "not-toml", 'base = "b.toml"\n', files={"b.toml": "[["}),
    refused("a base that is a number", "wrong-type", "base = 7\n"),
    refused(
        "to remove what is not there", "nothing-to-remove", DELTA + 'remove = ["slot.g.sun"]\n', remedy="slot.g.sum"
    ),
    refused("to remove everything", "never-halts", DELTA + 'remove = ["slot.g.flow"]\n'),
    refused(
        "to remove a cluster in use", ["unknown-cluster"] * 5 + ["unknown-register"], DELTA + 'remove = ["cluster.h"]\n'
    ),
]

CHANGES = [
    change("no value", "bad-change", "latency.load"),
    change("no key", "bad-change", "=5"),
    change("an empty value", "bad-change", "latency.load="),
    change("a key nobody has", "unknown-class", "latency.lod=5", remedy="load"),
    change("a value out of range", "out-of-range", "latency.load=0"),
    change("a value of another type", "wrong-type", "latency.load=[1, 2]"),
    change("not a number", "wrong-type", "latency.load=nan"),
    change("a huge number", "out-of-range", "latency.load=99999999999999999999999"),
    change("more TOML behind it", "bad-change", "latency.load=5\n[slot.g.more]\nclasses = 3"),
    change("half a string", "bad-change", 'issue.rule="exposed'),
    change("a key of dots", "bad-change", "..=5"),
    change("a number as a table", "wrong-type", "latency=5"),
    change("a register too few for the guards", "unknown-register", "cluster.g.registers=8"),
    Row("a change of no core", "cores --set latency.load=5", ["bad-option"], remedy="cores pair7"),
    Row("a core file that is missing, for a run", "run energy --core none.toml", ["file-missing"]),
    Row("a folder as core, for a run", "run energy --core total", ["unknown-core"]),
    Row("a change, for a run", "run energy --set latency.load=300", ["out-of-range"]),
    Row("a change, for an image", "assemble energy -o e.image --set words.bits=31", ["out-of-range"]),
]

ROWS = [*FILES, *KEYS, *DELTAS, *CHANGES]
