"""Bad requests: commands, options, arguments, and what they would write."""

from __future__ import annotations

from tests.kernel.sources import DOUBLE, REFERENCES
from tests.robustness.workshop import Row, a_folder, a_pipe, link_to

DELTA = {"small.toml": 'base = "pair7"\n'}

COMMANDS = [
    Row("a command that is none", "rum energy", ["no-such-command"], remedy="run"),
    Row("a command in capitals", "RUN energy", ["no-such-command"]),
    Row("a command of nothing", "'' energy", ["no-such-command"]),
    Row("an option before the command", "--core pair7 run energy", ["no-such-option"]),
    Row("no kernel", "run", ["missing-argument"]),
    Row("two kernels", "run energy peak", ["bad-usage"]),
    Row("an option that is none", "run energy --limits 3", ["no-such-option"], remedy="--limit"),
    Row("an option that is short for two", "run energy --ca smallest", ["no-such-option"]),
    Row("an option without its value", "run energy --give", ["bad-option"]),
    Row("a flag with a value", "run energy --json=yes", ["bad-option"]),
    Row("no image", "disassemble", ["missing-argument"]),
    Row("a kernel that is not there", "run nowhere.vliw", ["no-such-file"]),
    Row("a kernel that is not there, in a folder that is", "run total/nowhere.vliw", ["no-such-file"]),
    Row("a kernel with an endless name", f"run {'n' * 9000}", ["no-such-file"]),
    Row("a kernel of nothing", "run ''", ["no-such-file"]),
    Row("a folder of no kernel", "run empty", ["which-source"], files={"empty": a_folder}),
    Row("a folder that is the root", "run /", ["which-source"]),
    Row("out of the shipped folder", "run programs/../../isa", ["no-such-file"]),
    Row("an image for a kernel", "run x.image", ["not-text"], files={"x.image": b"vliwsim image 1\n\xff\xfe"}),
    Row("a kernel for an image", "disassemble total/total.vliw", ["not-an-image"]),
    Row("a kernel for a core", "run total --core total/total.vliw", ["unknown-core"]),
    Row("a core for a kernel", "run small.toml", ["no-code", "no-core", "no-kernel", "unknown-header-word"], 1, DELTA),
    Row("an operation that is none", "ops mul.hlaf", ["unknown-operation"], remedy="mul.half"),
    Row("an operation the core has not", "ops fadd.s --core pair7", ["unknown-operation"]),
    Row("the layout of no operation", "layout mul.hlaf", ["unknown-operation"], remedy="mul.half"),
]

GIVING = [
    Row("no sign", "run total --give x", ["bad-option"]),
    Row("no name", "run total --give =3", ["bad-option"]),
    Row("no value", "run total --give x=", ["bad-option"]),
    Row("a name that is none", "run total --give 3x=4", ["bad-option"]),
    Row("a name twice", "run total --give x=1,2 --give x=3,4", ["bad-option"]),
    Row("words for numbers", "run total --give x=1,two", ["bad-option"]),
    Row("a number too long", f"run total --give n={'9' * 5000}", ["bad-option"]),
    Row("a number in other digits", "run total --give n=٣", ["bad-option"]),
    Row("two bad ones, both said", "run total --give x --give n=many", ["bad-option", "bad-option"]),
    Row("an input nobody has", "run total --give z=3", ["unknown-input", "missing-input"]),
    Row("an output", "run total --give sum=3", ["not-an-input", "missing-input"]),
    Row("a computed input", "run total --give trips=3", ["not-an-input", "missing-input"]),
    Row("a size below zero", "run total --give n=-1", ["size-value"]),
    Row("a size of a half", "run total --give n=2.5", ["size-value"]),
    Row("a size too big", "run total --give n=99999999", ["memory-too-small"], remedy="memory.size"),
    Row("a size without end", f"run total --give n={'9' * 30}", ["size-value"]),
    Row("a size and another array", "run total --give x=1,2 --give n=3", ["size-conflict"]),
    Row("a file without an ending", "run total --give x=x", ["bad-option"]),
    Row("needs that do not hold", "run total --give n=0", ["needs-violated"]),
    Row("needs of another kernel", "run energy --give n=6", ["needs-violated"]),
]

RUNNING = [
    Row("no cycles", "run energy --limit 0", ["bad-option"]),
    Row("cycles in words", "run energy --limit many", ["bad-option"]),
    Row("cycles before time", "run energy --limit -5", ["bad-option"]),
    Row("half a cycle", "run energy --limit 2.5", ["bad-option"]),
    Row("too few cycles", "run total --limit 9", ["cycle-limit"], 1, remedy="--limit"),
    Row("an interrupt before time", "run energy --interrupt-at -1", ["bad-option"]),
    Row("an interrupt in words", "run energy --interrupt-at soon", ["bad-option"]),
    Row("an interrupt after the end", "run total --give x=1,2 --interrupt-at 99999999999", [], 0),
    Row("an interrupt beyond all counting", f"run total --give x=1,2 --interrupt-at {'9' * 40}", ["bad-option"]),
    Row("an engine nobody has", "run total --engine steam", ["bad-option"]),
    Row("a case nobody has", "run total --case storm", ["unknown-case"]),
    Row("a case of nothing", "run total --case ''", ["unknown-case"]),
    Row("a case and the list", "run total --cases --case zeros", ["bad-option"]),
    Row("a list and an input", "run total --cases --give n=3", ["bad-option"]),
    Row("all cases, traced", "run total --case all --trace", ["bad-option"]),
    Row("all cases, saved", "run double --case all --save y=y.npy", ["bad-option"]),
    Row("a core the kernel does not fit", "run total --core lone2", ["unknown-register", "unknown-register"], 1),
    Row("a core of too few registers", "run energy --set cluster.g.registers=8", ["unknown-register"]),
    Row("a core of too little memory", "run energy --set memory.size=64", ["memory-too-small"]),
]

SAVE = "run double --give x=1,2"
LOSES_FOLDER = "import shutil\nshutil.rmtree('out')\n" + REFERENCES["double"]
LOSES_INPUT = "import os\nos.unlink('probe/double.vliw')\n" + REFERENCES["double"]
MAKES_FILE = "open('y.npy', 'w').write('mine')\n" + REFERENCES["double"]

WRITING = [
    Row("an output without a file", f"{SAVE} --save y", ["bad-option"]),
    Row("an output nobody has", f"{SAVE} --save z=z.npy", ["bad-option"]),
    Row("an input as output", f"{SAVE} --save x=z.npy", ["bad-option"]),
    Row("a name twice in outputs", f"{SAVE} --save y=a.npy --save y=b.npy", ["bad-option"]),
    Row("another ending", f"{SAVE} --save y=y.txt", ["bad-option"]),
    Row("no such folder", f"{SAVE} --save y=none/y.npy", ["output-file"]),
    Row("over a file", f"{SAVE} --save y=y.npy", ["file-exists"], files={"y.npy": "mine"}, remedy="--replace"),
    Row("over a folder", f"{SAVE} --save y=y.npy --replace", ["output-file"], files={"y.npy": a_folder}),
    Row("over a link", f"{SAVE} --save y=y.npy", ["file-exists"], files={"y.npy": link_to("total/total.vliw")}),
    Row("over a link to nowhere", f"{SAVE} --save y=y.npy", ["file-exists"], files={"y.npy": link_to("nowhere")}),
    Row("over a pipe", f"{SAVE} --save y=y.npy", ["file-exists"], files={"y.npy": a_pipe}),
    Row("into a device", f"{SAVE} --save y=/dev/full", ["bad-option"]),
    Row("a name too long", f"{SAVE} --save y={'y' * 300}.npy", ["output-file"]),
    Row("below a file", f"{SAVE} --save y=total/total.vliw/y.npy", ["output-file"]),
    Row("two bad ones", f"{SAVE} --save z=z.npy --save y=y.txt", ["bad-option", "bad-option"]),
    Row("of a run that did not finish", f"{SAVE} --limit 5 --save y=y.npy", ["cycle-limit"], 1, says="nothing saved"),
    Row(
        "an image over a file",
        "assemble total -o x.image",
        ["file-exists"],
        files={"x.image": "mine"},
        remedy="--replace",
    ),
    Row("an image over a folder", "assemble total -o x --replace", ["unwritable"], files={"x": a_folder}),
    Row("an image over its source", "assemble total -o total/total.vliw", ["file-exists"]),
    Row("an image in no folder", "assemble total -o none/x.image", ["unwritable"]),
    Row("an image of no name", "assemble total -o ''", ["file-exists"]),
    Row("an image below a file", "assemble total -o total/total.vliw/x.image", ["unwritable"]),
    Row("an image of a name too long", f"assemble total -o {'x' * 300}", ["unwritable"]),
    Row("an image with a zero byte in its name", "assemble total -o 'x\0y'", ["unwritable"]),
    Row(
        "the folder vanishes while it runs",
        "run probe --give x=1,2 --save y=out/y.npy",
        ["output-file"],
        files={"probe/double.vliw": DOUBLE, "probe/reference.py": LOSES_FOLDER, "out": a_folder},
        changed=["out"],
    ),
    Row(
        "a file of that name appears while it runs",
        "run probe --give x=1,2 --save y=y.npy",
        ["file-exists"],
        files={"probe/double.vliw": DOUBLE, "probe/reference.py": MAKES_FILE},
        changed=["y.npy"],
    ),
    Row(
        "the source vanishes while it runs",
        "run probe --give x=1,2",
        [],
        0,
        files={"probe/double.vliw": DOUBLE, "probe/reference.py": LOSES_INPUT},
        changed=["probe/double.vliw"],
    ),
]

ROWS = [*COMMANDS, *GIVING, *RUNNING, *WRITING]
