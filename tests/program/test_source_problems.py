"""Malformed sources and what is said of them: every line that should be complained about says so in a comment.

``#~ name:column`` expects that problem on its line (several may follow each other, ``#~^`` means the line above);
nothing else may be found. The comment's own text is no part of what the parser sees.
"""

from __future__ import annotations

import re

import pytest

from vliwsim.description.core import Core
from vliwsim.problems import SourceError

from .sources import kernel, shipped, source

_EXPECTED = re.compile(r"#~(\^*)((?:\s+[a-z-]+:\d+)+)\s*$")

HALTS = "@90 halt\n"


def check(text: str, core: str | Core = "pair7") -> SourceError | None:
    """Assemble ``text`` and compare the problems found with those its comments expect; the error, if any."""
    whole = source(text, core if isinstance(core, str) else core.name)
    expected = set()
    for number, line in enumerate(whole.splitlines(), 1):
        if match := _EXPECTED.search(line):
            for entry in match[2].split():
                name, column = entry.split(":")
                expected.add((number - len(match[1]), int(column), name))
    error = refused(text, core)
    problems = error.problems if error else ()
    found = [(p.place.line, p.place.column, p.name) for p in problems if p.place]
    assert sorted(found) == sorted(expected)
    assert found == sorted(found)
    for problem in problems:
        assert problem.found
        assert problem.place
        assert problem.excerpt == whole.splitlines()[problem.place.line - 1]
    return error


def refused(text: str, core: str | Core) -> SourceError | None:
    """What assembling ``text`` raises."""
    try:
        kernel(text, core)
    except SourceError as error:
        return error
    return None


CODE = [
    # stamps
    "add g1, g2, g3 #~ no-stamp:1\n",
    "@-1 add g1, g2, g3 #~ bad-stamp:2\n",
    "@20000000 idle #~ bad-stamp:2\n",
    "@0.5 add g1, g2, g3 #~ not-an-integer:2\n",
    "@7/2 add g1, g2, g3 #~ not-an-integer:2\n",
    "@ add g1, g2, g3 #~ bad-stamp:1\n",
    "@1+ add g1, g2, g3 #~ unknown-name:5 unknown-operation:9\n",
    "@ 1 add g1, g2, g3 #~ bad-stamp:1 bad-statement:3\n",
    "@lode add g1, g2, g3 #~ unknown-name:2\n",
    "@load + mutliply add g1, g2, g3 #~ unknown-name:9\n",
    "@latency(mull) add g1, g2, g3 #~ unknown-name:2\n",
    "@(1 add g1, g2, g3 #~ unbalanced:2\n",
    "@1//0 add g1, g2, g3 #~ no-value:2\n",
    "@2**400 add g1, g2, g3 #~ number-too-big:2\n",
    "@load.x add g1, g2, g3 #~ bad-statement:6\n",
    # operations
    "@0 ad g1, g2, g3 #~ unknown-operation:4\n",
    "@0 add g1, g2 #~ operand-count:4\n",
    "@0 add g1, g2, g3, g4 #~ operand-count:4\n",
    "@0 add g1, , g3 #~ operand-missing:12\n",
    "@0 add g1, g2, #~ operand-missing:15\n",
    "@0 halt g1 #~ operand-count:4\n",
    "@0 = 3 #~ bad-statement:4\n",
    "@0 x = 3 #~ unknown-operation:4\n",
    "@0 add g1 g2, g3, g4 #~ bad-operand:8\n",
    # registers
    "@0 add g24, g2, g3 #~ unknown-register:8\n",
    "@0 add k1, g2, g3 #~ unknown-register:8\n",
    "@0 add g1, g99, g3 #~ unknown-name:12\n",
    "@0 add 4, g2, g3 #~ bad-operand:8\n",
    "@0 add g1, g2, front #~ unknown-name:16\n",
    "@0 add g1, g2.lo, g3 #~ half-of-whole:12\n",
    "@0 mul.half g1, g2, g3.hi #~ no-half:17\n",
    "@0 mul.half g1, g2.mid, g3.hi #~ unknown-name:17\n",
    "@0 ld g1, [g2] #~ odd-pair:7\n",
    "@0 ld h23, [h2] #~ odd-pair:7\n",
    "@0 sd g3, [g2] #~ odd-pair:7\n",
    "@0 add g{30}, g2, g3 #~ unknown-register:8\n",
    "@0 add g{k}, g2, g3 #~ unknown-name:10\n",
    # immediates
    "@0 add g1, 4294967296, g2 #~ immediate-range:12\n",
    "@0 add g1, g2, -2147483649 #~ immediate-range:16\n",
    "@0 add g1, g2, 1.5 #~ not-an-integer:16\n",
    "@0 add g1, g2, 3 / 2 #~ not-an-integer:16\n",
    "@0 mul.half g1, 65536, g3.hi #~ immediate-range:17\n",
    "@0 mul.half g1, -32769, g3.hi #~ immediate-range:17\n",
    "@0 add g1, 1, 2 #~ two-immediates:15\n",
    "@0 fieldu g1, g2, 3, 32 #~ immediate-range:22\n",
    "@0 fieldu g1, g2, g3, 1 #~ constant-only:19\n",
    "@0 sw 1, [g2 + 4] #~ two-immediates:10\n",
    "@0 beq g1, 0, start #~ two-immediates:15\n",
    "@0 add g1, g2, 1 + #~ bad-expression:18\n",
    "@0 add g1, g2, 0x #~ bad-expression:16\n",
    "@0 add g1, g2, 007 #~ bad-expression:16\n",
    '@0 add g1, g2, "a" #~ bad-expression:16\n',
    "@0 add g1, g2, f(3) #~ unknown-function:16\n",
    "@0 add g1, g2, addr(x) #~ unknown-name:16\n",
    "@0 add g1, g2, (1 if 2) #~ bad-expression:17\n",
    "@0 add g1, g2, [g3] #~ bad-operand:16\n",
    # addresses
    "@0 lw g1, g2 #~ bad-operand:11\n",
    "@0 lw g1, [] #~ bad-address:11\n",
    "@0 lw g1, [8] #~ bad-address:11\n",
    "@0 lw g1, [g2 + 4 #~ unbalanced:11\n",
    "@0 lw g1, g2] #~ unbalanced:13\n",
    "@0 lw g1, [g2 * 4] #~ bad-address:11\n",
    "@0 lw g1, [g2 - g3] #~ bad-address:15\n",
    "@0 lw g1, [g2 + q] #~ unknown-name:17\n",
    "@0 lw g1, [g2 + 4294967296] #~ immediate-range:15\n",
    "@0 lw g1, [g2 then 4] #~ bad-address:11\n",
    "@0 lw g1, [4 then g2] #~ bad-address:11\n",
    "@0 lw g1, [g2 then] #~ bad-address:11\n",
    "@0 lw g1, [+4 then] #~ bad-address:11\n",
    "@0 lw g1, [+4 then h99] #~ unknown-register:20\n",
    "@0 lw g1, [g2 then +4 in ring 48] #~ bad-ring:31\n",
    "@0 lw g1, [g2 then +4 in ring 1] #~ bad-ring:31\n",
    "@0 lw g1, [g2 + 4 in ring 64] #~ bad-address:11\n",
    "@0 lw g1, [g2 then +4 in ring] #~ bad-expression:30\n",
    "@0 lw g2, [g2 then +4] #~ names-twice:4\n",
    "@0 ld g2, [g3 then +8] #~ names-twice:4\n",
    # guards and pins
    "@0 add g1, g2, g3 if #~ unknown-register:21\n",
    "@0 add g1, g2, g3 if not #~ unknown-register:25\n",
    "@0 add g1, g2, g3 if g3 #~ guard-register:22\n",
    "@0 add g1, g2, g3 if x #~ unknown-register:22\n",
    "@0 add g1, g2, g3 if g20 if g21 #~ twice:26\n",
    "@0 add g1, g2, g3 on g.sun #~ unknown-slot:22\n",
    "@0 add g1, g2, g3 on g.mul on g.sum #~ twice:28\n",
    # labels and targets
    "@0 jump nowhere #~ unknown-label:9\n",
    "@0 jump 16 #~ unknown-label:9\n",
    "@0 mul.half g1, g2.lo, start #~ unknown-name:24\n",
    "@0 idle\nstart: #~ label-twice:1\n",
    "@0 idle\ng3: #~ name-taken:1\n",
    "@0 idle\nrepeat: #~ bad-name:1\n",
    # repeat, end, idle
    "repeat x as i #~ unknown-name:8\n@0 idle\nend\n",
    "repeat -1 as i #~ bad-repeat:8\n@0 idle\nend\n",
    "repeat 1.5 as i #~ not-an-integer:8\n@0 idle\nend\n",
    "repeat 3 as #~ bad-repeat:1\n@0 idle\nend\n",
    "repeat as i #~ bad-expression:8\n@0 idle\nend\n",
    "repeat 3 as load #~ name-taken:13\n@0 idle\nend\n",
    "@0 idle\nend #~ end-alone:1\n",
    "repeat 1 as i #~ repeat-open:1\n@0 idle\n",
    "repeat 1000000 as i #~ too-long:8\n@0 idle\nend\n",
    "repeat 2 as i\nlet k = 3 #~ in-repeat:1\n@0 idle\nend\n",
    "repeat 2 as i\ninner: #~ in-repeat:1\n@0 idle\nend\n",
    "repeat 0 as i\n@i ad g1, g2, g3 #~ unknown-operation:4\nend\n",
    "@0 idle 3 #~ left-over:8\n",
    "@0 idle\nlet k = 3 + #~ bad-expression:11\n",
    "@0 add g1, g2, k #~ unknown-name:16\nlet k = 3\n",
    "@0 idle\nlet load = 3 #~ name-taken:5\n",
    "@0 idle\nlet k = 1\nlet k = 2 #~ name-taken:5\n",
    "@0 idle\nlet k #~ bad-let:1\n",
    "@0 idle\nname x = g77 #~ unknown-register:10\n",
    "@0 idle\nname h2 = g7 #~ name-taken:6\n",
    "@0 idle\nneeds n > 3 #~ late-header:1 unknown-name:7\n",
]


@pytest.mark.parametrize("text", CODE)
def test_code(text: str) -> None:
    check(text + HALTS)


HEADERS = [
    "kernel a\ncore pair7\nkernel b #~ twice:1\n",
    "kernel 3a #~ bad-name:8\ncore pair7\n",
    "kernel #~ incomplete:1 no-kernel:1\ncore pair7\n",
    "kernel a #~ no-core:1\n",
    "kernel a\ncore pair7, pair7 #~ twice:13\n",
    "kernel a\ncore pair7, #~ bad-name:12\n",
    "kernel a\ncore pair7\ngivne x : i16[n] at g1 #~ unknown-header-word:1\n",
    "kernel a\ncore pair7\nadd g1, g2, g3 #~ unknown-header-word:1\n",
    "kernel a\ncore pair7\n@0 add g1, g2, g3 #~ no-label:1\n",
    "kernel a\ncore pair7\ngiven x i16[n] at g1 #~ bad-item:1\n",
    "kernel a\ncore pair7\ngiven : i16[n] at g1 #~ bad-item:1\n",
    "kernel a\ncore pair7\ngiven x : i17[n] at g1 #~ unknown-type:11\n",
    "kernel a\ncore pair7\ngiven x : i16[n at g1 #~ unbalanced:14\n",
    "kernel a\ncore pair7\ngiven x : i16[n] #~ no-register:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g77 #~ unknown-register:21\n",
    "kernel a\ncore pair7\ngiven x : i16[n] in g7 #~ bad-clause:7\n",
    "kernel a\ncore pair7\ngiven x : i16 at g7 #~ bad-clause:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7 in g8 #~ bad-clause:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7 at g8 #~ twice:24\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at #~ incomplete:18 no-register:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] near g7 #~ left-over:18 no-register:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7 within 1 lsb #~ bad-clause:24\n",
    "kernel a\ncore pair7\ngiven x : i16 in g7 over 4 #~ bad-clause:26\n",
    "kernel a\ncore pair7\ngiven x : i16[n] = 3 at g7 #~ bad-clause:20\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\ngiven x : i16[n] at g8 #~ name-taken:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\ngiven y : i16[n] at g7 #~ register-taken:7\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\ngiven y : i16 in g7 #~ register-taken:7\n",
    "kernel a\ncore pair7\nreturns x : i16 in g7\nreturns y : i16 in g7 #~ register-taken:9\n",
    "kernel a\ncore pair7\ngiven load : i16[n] at g7 #~ name-taken:7\n",
    "kernel a\ncore pair7\ngiven g3 : i16[n] at g7 #~ name-taken:7\n",
    "kernel a\ncore pair7\ngiven len : i16[n] at g7 #~ name-taken:7\n",
    "kernel a\ncore pair7\ntable t : q15[4] at g7 #~ bad-item:7\n",
    "kernel a\ncore pair7\ntable t : q15 = 3 at g7 #~ no-size:11\n",
    'kernel a\ncore pair7\ntable t : q15[4] = i from "t.npy" #~ bad-item:7\n',
    'kernel a\ncore pair7\ntable t : q15[4] from "../t.npy" #~ bad-file:23\n',
    'kernel a\ncore pair7\ntable t : q15[4] from "/etc/t.npy" #~ bad-file:23\n',
    "kernel a\ncore pair7\ntable t : q15[4] from t.txt #~ bad-file:23\n",
    "kernel a\ncore pair7\nscratch t : i32[4] in g3 #~ bad-clause:20\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nreturns y : i16[m] at g8 #~ unknown-name:17\n",
    "kernel a\ncore pair7\ngiven x : i16[n +] at g7 #~ bad-expression:17\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nneeds n % 4 == 0 and k > 1 #~ unknown-name:22\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nneeds n % 4 = 0 #~ bad-expression:13\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nbudget n + addr(y) #~ unknown-name:17\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nbudget n + latency(adz) #~ unknown-name:20\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nbudget n\nbudget n #~ twice:1\n",
    "kernel a\ncore pair7\ngiven x : i16[n] at g7\nneeds #~ incomplete:1\n",
    "kernel a\ncore pair7\ngiven a : i32 = b + 1 in g3 #~ unknown-name:17\ngiven b : i32 = 3 in g4\n",
    "kernel a\ncore pair7\nlet k = n // 2 #~ unknown-name:9\ngiven x : i16[n] at g7\n",
    "kernel a\ncore pair7\nlet pi = 3 #~ name-taken:5\n",
    "kernel a\ncore pair7\nname x = y #~ unknown-register:10\nname y = g3\n",
]


@pytest.mark.parametrize("text", HEADERS)
def test_header(text: str) -> None:
    check(text + "start:\n" + HALTS)


ILLEGAL = [
    ("@0 add g1, g2, g3 on g.mul ; sub g4, g5, g6 on g.mul #~ slot-taken:30\n", "on g.sum"),
    ("@0 lw g1, [g2] on g.mul #~ slot-class:4\n", "on g.mem"),
    ("@0 add g1, g2, g3 on h.sum #~ links:4\n", "on g.sum"),
    ("@0 add g1, h2, g3 on g.sum #~ links:4\n", ""),
    ("@0 add g1, g2, h3 ; add g4, g5, h6 ; mul g7, g8, h9 #~ links:21\n", ""),
    ("@0 lw g1, [g2] ; lw g3, [g4] #~ no-slot:18\n", "one of them in another beat"),
    ("@0 lw g1, [h2] #~ no-slot:4\n", "a move to the slot's cluster first"),
    ("@0 fadd.s g1, g2, g3 #~ unknown-operation:4\n", ""),
    ("@0 add g1, g2, g3 if h3 #~ guard-register:22\n", ""),
    ("@0 add g1, g2, g3 on g.mem ; lw g4, [g5] #~ no-slot:30\n", "one of them in another beat"),
]


@pytest.mark.parametrize(("text", "remedy"), ILLEGAL)
def test_illegal(text: str, remedy: str) -> None:
    error = check(text + HALTS)
    assert error
    (problem,) = error.problems
    assert problem.kind == ("error" if problem.name.startswith("unknown") else "illegal")
    if remedy:
        assert problem.remedy == remedy


def test_read_ports() -> None:
    """pair7 has 10 read ports a cluster: five operations of two sources are 10, and a base makes 11."""
    text = "@0 add g0, g1, g2 ; mul g0, g3, g4 ; add g0, g5, g6 on g.flow ; sd g12, [g8 + {}]"
    check(text.format("4") + " ; add h0, h1, g6\n" + HALTS)
    check(text.format("g9") + " ; add h0, h1, g6\n" + HALTS)
    check(text.format("g9") + " ; add h0, h1, g10 #~ read-ports:85\n" + HALTS)


def test_no_halt_is_told_last() -> None:
    check("@0 add g1, g2, g3 #~ no-halt:1")
    check("@0 jump start #~ no-halt:1")


def test_everything_is_told_at_once_and_once() -> None:
    error = check(
        "@0 addd g1, g2, g3  #~ unknown-operation:4\n"
        "@1 add g1, g2  #~ operand-count:4\n"
        "repeat 3 as i\n"
        "@2+i lw g1, [g2] ; lw g3, [g4]  #~ no-slot:20\n"
        "end\n" + HALTS
    )
    assert error
    assert "\n    @1 add g1, g2  #~" in str(error)
    assert "  try      add" in str(error)


def test_the_shown_form() -> None:
    error = check("@0  lw g1, [g2] on g.mul #~ slot-class:5\n" + HALTS)
    assert str(error) == (
        "sensor.vliw:4:5  slot-class  (illegal)\n"
        "    @0  lw g1, [g2] on g.mul #~ slot-class:5\n"
        "        ^\n"
        "  found    lw (load) in g.mul\n"
        "  allowed  g.mul executes multiply arithmetic\n"
        "  try      on g.mem"
    )


def test_many_problems_are_cut_off() -> None:
    with pytest.raises(SourceError) as caught:
        kernel("".join(f"@{k} ad g1, g2, g3\n" for k in range(5000)) + HALTS)
    assert len(caught.value.problems) == 201
    assert caught.value.problems[-1].found == "4800 more problems"


def test_an_illegal_program_may_be_asked_for() -> None:
    """What the machine judges is left to it; pins decide."""
    for text, _ in ILLEGAL:
        if "no-slot" not in text and "unknown" not in text:
            assert kernel(text + HALTS, allow_illegal=True).program.bundles[0].instructions


def test_a_core_without_the_class() -> None:
    error = check("@0 fdiv.s g1, g2, g3 #~ no-slot:4\n" + HALTS, _without_division())
    assert error
    assert "no slot of float3 executes" in error.problems[0].found


def _without_division() -> Core:
    import attrs

    core = shipped("float3")
    slots = tuple(
        attrs.evolve(slot, classes=tuple(c for c in slot.classes if c != "float_divide"), busy={})
        for slot in core.slots
    )
    return attrs.evolve(core, slots=slots)
