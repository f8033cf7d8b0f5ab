"""Bad requests of the commands that prove, compare, keep and look: check, compare, golden, regress, debug."""

from __future__ import annotations

from tests.kernel.sources import SUM
from tests.robustness.workshop import Row, a_folder, a_pipe, npy

BROKEN = {"bad.vliw": SUM.replace("add g4", "plus g4")}

CHECK = [
    Row("check nothing", "check", ["missing-argument"]),
    Row("check what is not there", "check nowhere.vliw", ["no-such-file"]),
    Row("check a source that does not assemble", "check bad.vliw", ["unknown-operation"], 1, BROKEN),
    Row("check with no contexts", "check total --cap 0", ["bad-option"]),
    Row("check on a core nobody has", "check total --core pair8", ["unknown-core"], remedy="pair7"),
    Row("check, a log over a file", "check total --sarif x", ["file-exists"], files={"x": "mine"}, remedy="--replace"),
    Row("check, a log over a folder", "check total --sarif x", ["output-file"], files={"x": a_folder}),
    Row("check, a log in no folder", "check total --sarif none/x", ["output-file"]),
]

PAIR = "compare total second.vliw"
SECOND = {"second.vliw": SUM}

COMPARE = [
    Row("compare nothing", "compare", ["missing-argument"]),
    Row("compare one", "compare total", ["bad-option"]),
    Row("compare what is not there", "compare total nowhere.vliw", ["no-such-file"]),
    Row("compare other interfaces", "compare total double", ["other-interface", "other-interface"]),
    Row("compare on inputs that do not fit", f"{PAIR} --give x=1.5,2", ["array-type"], files=SECOND),
    Row("compare on a case nobody has", f"{PAIR} --case storm", ["unknown-case"], files=SECOND),
    Row("compare at sizes in words", f"{PAIR} --sizes few", ["bad-option"], files=SECOND),
]

GOLDEN = "golden total --case smallest"
DATED = f"{GOLDEN} --date 2030-01-31"
WRONG = {"total/reference.py": "def total(x):\n    return 0\n"}
KEPT = "total/golden/total.pair7.npz"

GOLDENS = [
    Row("a golden without a day", GOLDEN, ["missing-argument"]),
    Row("a golden of no day", f"{GOLDEN} --date yesterday", ["golden-date"], remedy="--date"),
    Row("a golden of a case nobody has", "golden total --case storm --date 2030-01-31", ["unknown-case"]),
    Row("a golden of a wrong run", DATED, ["golden-not-right"], files=WRONG),
    Row(
        "a golden without a reference",
        "golden bare.vliw --date 2030-01-31",
        ["golden-not-right"],
        files={"bare.vliw": SUM},
    ),
    Row("a golden over another file", DATED, ["damaged-golden"], files={KEPT: "mine"}),
    Row("a golden over an array", DATED, ["damaged-golden"], files={KEPT: npy([1, 2])}),
    Row("a golden over a folder", DATED, ["damaged-golden"], files={KEPT: a_folder}),
    Row("a golden over a pipe", DATED, ["damaged-golden"], files={KEPT: a_pipe}, process=True),
    Row("a golden where a file is in the way", DATED, ["damaged-golden"], files={"total/golden": "mine"}),
]

LOOK = "debug total --give x=1,2 --play play.txt"

DEBUG = [
    Row("a script that is not there", LOOK, ["script-file"]),
    Row("a script that is a folder", LOOK, ["script-file"], files={"play.txt": a_folder}),
    Row("a script that is a pipe", LOOK, ["script-file"], files={"play.txt": a_pipe}, process=True),
    Row("a script that is no text", LOOK, ["script-file"], files={"play.txt": b"\xff\xfe"}),
    Row("a script of another tongue", LOOK, ["script-line"], files={"play.txt": "go on\n"}),
    Row("a script that plays itself", LOOK, ["script-line"], files={"play.txt": "play play.txt\n"}),
    Row("a script with a terminal's command", LOOK, ["script-line"], files={"play.txt": "ahead\n\x1b[2J\n"}),
    Row("a look at inputs that do not fit", "debug total --give x=1.5,2 --play play.txt", ["array-type"]),
]

REGRESS = [
    Row("regress nothing", "regress", ["missing-argument"]),
    Row("regress what is not there", "regress nowhere --no-cache", ["no-such-file"]),
    Row("regress a folder of no kernel", "regress empty --no-cache", ["no-such-file"], files={"empty": a_folder}),
    Row("regress with no process", "regress total --jobs 0 --no-cache", ["bad-option"]),
    Row("regress a broken source", "regress bad.vliw --no-cache --jobs 1", ["unknown-operation"], 1, BROKEN),
]

ROWS = [*CHECK, *COMPARE, *GOLDENS, *DEBUG, *REGRESS]
