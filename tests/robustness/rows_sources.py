"""Malformed sources: what does not assemble, and what assembles and breaks a rule when it runs."""

from __future__ import annotations

from tests.kernel.sources import SUM
from tests.robustness.workshop import Content, Row, a_folder, a_pipe, link_to
from vliwsim.program.source.complaints import MOST

START = "start:\n"
MANY = ["unknown-operation"] * MOST + ["more-problems"]
ASSEMBLE = "assemble probe.vliw -o probe.image"
RUN = "run probe.vliw"
RETURNS = "returns y : i32 in g3\n"


def source(body: str, core: str = "pair7") -> dict[str, Content]:
    """A file probe.vliw with this body behind a good header."""
    return {"probe.vliw": f"kernel probe\ncore {core}\n{body}"}


def code(body: str, header: str = "", core: str = "pair7") -> dict[str, Content]:
    """The same with a header, a label, ``body`` and a late halt."""
    return source(f"{header}{START}{body}@90 halt\n", core)


def head(header: str) -> dict[str, Content]:
    """A source with these header lines and no more than it needs."""
    return code("@0 idle\n", header)


def assembled(title: str, name: str | list[str], files: dict[str, Content], **more: object) -> Row:
    """A source that ``assemble`` refuses with status 1."""
    names = [name] if isinstance(name, str) else name
    return Row(title, ASSEMBLE, names, 1, files, **more)  # type: ignore[arg-type]


def ran(title: str, name: str, files: dict[str, Content], options: str = "", status: int = 1, **more: object) -> Row:
    """A source that assembles, and that ``run`` finds fault with."""
    return Row(title, f"{RUN} {options}", [name] if name else [], status, files, **more)  # type: ignore[arg-type]


def unreadable(title: str, name: str, content: Content, command: str = ASSEMBLE, **more: object) -> Row:
    """A source file that is no source text at all."""
    return Row(title, command, [name], 2, {"probe.vliw": content}, **more)  # type: ignore[arg-type]


FILES = [
    assembled("empty", ["no-kernel", "no-core", "no-code"], {"probe.vliw": ""}, remedy="kernel probe"),
    assembled("only a comment", ["no-kernel", "no-core", "no-code"], {"probe.vliw": "# nothing\n"}),
    unreadable("random bytes", "not-text", bytes(range(256))),
    unreadable("sixteen-bit text", "not-text", SUM.encode("utf-16")),
    unreadable("cut inside a character", "not-text", SUM.encode() + b"# \xc3"),
    unreadable("another format altogether", "not-text", b"\x93NUMPY\x01\x00v\x00"),
    unreadable("a folder named like a source", "which-source", a_folder),
    unreadable("a pipe", "unreadable", a_pipe, process=True),
    unreadable("a link to itself", "no-such-file", link_to("probe.vliw")),
    unreadable("a link to nowhere", "no-such-file", link_to("nowhere.vliw")),
    unreadable("a source too big", "unreadable", SUM + "#" * 9_000_000),
    Row("a device without end", "assemble /dev/zero", ["unreadable"], process=True),
    Row("a folder of two sources", "run both", ["which-source"], 2, {"both/a.vliw": SUM, "both/b.vliw": SUM}),
    Row("a file used as a folder", "assemble total/total.vliw/probe.vliw", ["no-such-file"]),
    assembled("a zero byte", "bad-expression", code("@0 add g1, g2, g3 \0\n"), says="\N{REPLACEMENT CHARACTER}"),
    assembled("a terminal's commands", "bad-statement", code("@0 \x1b[2J\x1b]0,x\x07 g1\n")),
    assembled("a very long line", "too-long", code("@0 add g1, g2, " + "1+" * 20_000 + "1\n")),
    assembled("too many lines", "too-long", code("@0 plus\n" * 200_000)),
    assembled("a hundred thousand mistakes", MANY, code("@0 plus\n" * 100_000)),
]

HEADERS = [
    assembled("no core", "no-core", {"probe.vliw": "kernel probe\nstart:\n@0 halt\n"}),
    assembled("a core nobody knows", "unknown-core", source("start:\n@0 halt\n", "pair8"), remedy="pair7"),
    assembled("two kernels", "twice", head("kernel other\n")),
    assembled("a nameless kernel", ["incomplete", "no-kernel"], {"probe.vliw": "kernel\ncore pair7\nx:\n@0 halt\n"}),
    assembled("a word no header has", "unknown-header-word", head("givn x : i16[n] at g1\n"), remedy="given"),
    assembled("a type that is none", "unknown-type", head("given x : i12[4] at g1\n")),
    assembled("an array in a register", "bad-clause", head("given x : i16[4] in g1\n"), remedy="at"),
    assembled("one register, two inputs", "register-taken", head("given x : i16[4] at g1\ngiven k : i32 in g1\n")),
    assembled("a register this core lacks", "unknown-register", head("given k : i32 in g77\n"), remedy="g7"),
    assembled("one name, two inputs", "name-taken", head("given k : i32 in g1\ngiven k : i32 in g2\n")),
    assembled("needs something unknown", "unknown-name", head("given x : i16[n] at g1\nneeds m > 1\n")),
    assembled("needs half an expression", "bad-expression", head("given x : i16[n] at g1\nneeds n >\n")),
    assembled("a let by zero", "no-value", head("let k = 1 // 0\n")),
    assembled("a let of a million digits", "number-too-big", head("let k = 9 ** 9 ** 9\n")),
    assembled("an expression three hundred deep", "too-deep", head(f"let k = {'(' * 300}1{')' * 300}\n")),
    assembled("code in an expression", "unknown-function", head("let k = __import__('os')\n")),
    assembled("an attribute in an expression", "bad-expression", head("let k = (1).real\n")),
    assembled("a table at an absolute path", "bad-file", head('table t : i16[4] from "/etc/hostname" at g1\n')),
    assembled("a table out of its folder", "bad-file", head('table t : i16[4] from "../t.npy" at g1\n')),
    assembled("lets in a circle", "unknown-name", head("let a = b\nlet b = a\n")),
]

CODE = [
    assembled("an operation that is none", "unknown-operation", code("@0 addd g1, g2, g3\n"), remedy="add"),
    assembled("an operand too few", "operand-count", code("@0 add g1, g2\n")),
    assembled("a register too high", "unknown-register", code("@0 add g24, g2, g3\n")),
    assembled("an odd pair", "odd-pair", code("@0 ld g3, [g2]\n"), remedy="g2"),
    assembled("an immediate too big", "immediate-range", code("@0 add g1, g2, 4294967296\n")),
    assembled("two immediates", "two-immediates", code("@0 add g1, 2, 3\n"), remedy="register"),
    assembled("an address with a product", "bad-address", code("@0 lw g1, [g2 * 4]\n")),
    assembled("a ring of no power of two", "bad-ring", code("@0 lw g1, [g2 then +4 in ring 48]\n"), remedy="64"),
    assembled("a label nowhere", "unknown-label", code("@0 jump away\n")),
    assembled("a label twice", "label-twice", code("@0 idle\nstart:\n")),
    assembled("a named target nowhere", "unknown-label", code("@0 jump g3 to stat\n"), remedy="start"),
    assembled("a named target that is a register", "unknown-label", code("@0 jump g3 to g4\n")),
    assembled("a target named twice", "twice", code("@0 jump g3 to start, start\n")),
    assembled("to twice", "twice", code("@0 jump g3 to start to start\n")),
    assembled("to and nothing", "incomplete", code("@0 jump g3 to\n")),
    assembled("a comma too many behind to", "incomplete", code("@0 jump g3 to start,\n")),
    assembled("targets of a branch to a label", "no-indirect-branch", code("@0 jump start to start\n")),
    assembled("targets of what is no branch", "no-indirect-branch", code("@0 add g1, g2, g3 to start\n")),
    assembled("a label called to", "bad-name", code("@0 idle\nto:\n")),
    assembled("a label as half a number", "unknown-name", code("@0 mul.half g1, g2.lo, start\n")),
    assembled("len of a label", "unknown-name", code("@0 idle\n", "given k : i32 = len(start) in g9\n")),
    assembled("a stamp before zero", "bad-stamp", code("@-1 idle\n")),
    assembled("a stamp of ages", "bad-stamp", code("@99999999999999999999 idle\n")),
    assembled("a repeat without end", "repeat-open", source("start:\n@0 halt\nrepeat 3 as i\n@1 idle\n"), remedy="end"),
    assembled("a repeat of a billion", "too-long", code("repeat 1000000000 as i\n@0 idle\nend\n"), remedy="loop"),
    assembled("repeats that multiply", "too-long", code("repeat 9999\n" * 3 + "@0 idle\n" + "end\n" * 3)),
    assembled("no halt", "no-halt", source("start:\n@0 li g1, 3\n"), remedy="halt"),
    assembled("one slot twice", "no-slot", code("@0 lw g1, [g8] ; lw g2, [g9]\n"), remedy="another beat"),
    assembled("a pinned slot twice", "slot-taken", code("@0 add g1, g2, 3 on g.sum ; add g4, g5, 6 on g.sum\n")),
    assembled("a slot of another class", "slot-class", code("@0 mul g1, g2, g3 on g.mem\n"), remedy="on g.mul"),
    assembled("a slot that is none", "unknown-slot", code("@0 add g1, g2, g3 on g.sun\n")),
    assembled("a guard that may not guard", "guard-register", code("@0 add g1, g2, g3 if g3\n")),
    assembled("a result in another cluster", "no-slot", code("@0 lw h7, [g9]\n")),
    assembled("one result named twice", "names-twice", code("@0 lw g2, [g2 then +4]\n")),
    assembled(
        "three mistakes in the header, all said",
        ["unknown-core", "unknown-header-word", "unknown-type"],
        {"probe.vliw": "kernel probe\ncore pair8\ngiven x : i12[4] at g1\nfoo\nstart:\n@0 halt\n"},
    ),
    assembled(
        "five mistakes in the code, all said",
        ["unknown-operation", "unknown-name", "immediate-range", "unknown-label", "odd-pair"],
        code("@0 plus g1, g2, g3\n@1 add g1, g2, g99\n@2 add g1, g2, 1 << 40\n@3 jump off\n@4 ld g5, [g2]\n"),
    ),
]

X = "given x : i32[4] at g10\n"
STORES = "@0 li g1, 3 ; li h1, 2 ; mv h10, g10\n@1 sw g1, [g10] ; sb h1, [h10]\n"
GIVE = "--give x=1,2,3,4"

RUNNING = [
    ran("two results land together", "lands-twice", code("@0 lw g2, [g10] ; li g1, 1\n@3 li g2, 1\n", X)),
    ran("a guard nobody wrote", "undefined-used", code("@0 add g1, g2, g3 if g20\n")),
    ran("an address nobody wrote", "undefined-used", code("@0 lw g1, [g2]\n")),
    ran("behind the array", "out-of-array", code("@0 lw g1, [g10 + 16]\n", X), GIVE),
    ran("between two words", "misaligned", code("@0 lw g1, [g10 + 2]\n", X), GIVE),
    ran("two stores to one byte", "store-twice", code(STORES, "changes x : i32[4] at g10\n"), GIVE),
    ran("off the end", "ran-off-the-end", source("start:\n@0 jump last\n@4 halt\nlast:\n@0 idle\n")),
    ran("halt with a branch on its way", "branch-past-halt", source("start:\n@0 jump start\n@1 halt\n")),
    ran("never halts", "cycle-limit", source("start:\n@0 jump start\n@4 halt\n"), "--limit 500", remedy="--limit"),
    ran("returns what nobody wrote", "undefined-used", code("@0 idle\n", RETURNS)),
    ran("over its budget", "", head("budget 3\n"), says="88 cycles over budget"),
    ran("a budget that is no number", "budget-value", head("budget 3 > 2\n"), status=2),
    ran("an alignment of three", "align-value", head("given x : i32[4] at g10 align 3\n"), GIVE, 2),
    ran("a bank that is not there", "bank-value", head("given x : i32[4] at g10 bank 99\n"), GIVE, 2),
    ran("over less than nothing", "over-value", head("given x : i32[4] at g10 over -1\n"), GIVE, 2),
    ran("needs that nothing meets", "no-case", head("given x : i32[n] at g10\nneeds n < 0\n"), status=2),
    ran("needs by zero", "no-value", head("given x : i32[n] at g10\nneeds n // (n - n) > 1\n"), "--give n=3", 2),
    ran("more memory than there is", "memory-too-small", head("scratch w : i32[9999999] at g10\n"), status=2),
    ran("a table beside nothing", "table-file", head('table t : i16[4] from "t.npy" at g1\n'), status=2),
    ran("a table by zero", "no-value", head("table t : i16[4] = 1 // i at g1\n"), status=2),
    ran("a table out of range", "value-range", head("table t : i16[4] = 20000 * i at g1\n"), status=2),
    ran(
        "a tolerance below zero",
        "within-value",
        {
            **code("@0 li g3, 1\n", "returns y : i32 in g3 within -1 lsb\n"),
            "reference.py": "def probe():\n    return 1\n",
        },
        status=2,
    ),
]

ROWS = [*FILES, *HEADERS, *CODE, *RUNNING]
