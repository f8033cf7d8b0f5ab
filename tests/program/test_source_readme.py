"""The language reference in programs/README.md: its sources assemble, its names exist."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from vliwsim.problems import SourceError
from vliwsim.program.assembly.legality import Judge
from vliwsim.program.source import expressions
from vliwsim.program.source.header import ALLOWED_CLAUSES, HEADER_WORDS
from vliwsim.program.source.interface import TYPES
from vliwsim.program.source.parser import OPERAND_WORDS

from .sources import instructions, kernel, operations, shipped

README = (Path(__file__).parents[2] / "programs" / "README.md").read_text(encoding="utf-8")


def blocks() -> list[str]:
    """The indented blocks of the page, without their indentation."""
    found = re.findall(r"(?:^ {4}.*\n|^\n(?= {4}))+", README, re.MULTILINE)
    return ["\n".join(line[4:] for line in block.strip("\n").splitlines()) for block in found]


def test_the_sources_on_the_page_assemble() -> None:
    first = next(block for block in blocks() if "\nkernel " in block)
    built = kernel(first[first.index("kernel") :])
    assert [s.beats for s in built.map.sections] == [1, 5, 1]
    assert built.budget
    assert built.budget.value({"n": 4096}) == 20482
    second = next(block for block in blocks() if block.startswith("let taps"))
    built = kernel(f"kernel a\ncore pair7\n{second}\n")
    assert [s.beats for s in built.map.sections] == [13, 1]
    assert [i.operation.name for i in instructions(built)].count("mul") == 4


def test_the_table_of_labels_on_the_page_assembles() -> None:
    block = next(block for block in blocks() if "addr(low)" in block)
    built = kernel(f"kernel pick\ncore pair7\n{block}\nlow:\nmiddle:\nhigh:\n@0 halt\n")
    (jump,) = [i for i in instructions(built) if i.operation.name == "jump"]
    assert len(jump.targets) == 1  # three labels of one place


def test_the_diagnostic_on_the_page_is_what_is_said() -> None:
    shown = next(block for block in blocks() if block.startswith("frame.vliw:24:19"))
    with pytest.raises(SourceError) as caught:
        kernel("@2  lw g1, [g8] ; lw g2, [g9]\n@3 halt")
    said = str(caught.value).replace("sensor.vliw:4:19", "frame.vliw:24:19").replace("line 4", "line 24")
    assert said == shown


def test_every_word_of_the_language_is_on_the_page() -> None:
    words = {*HEADER_WORDS, *TYPES, *expressions.FUNCTIONS, *expressions.REFERENCES, *expressions.CONSTANTS}
    words |= {clause for clauses in ALLOWED_CLAUSES.values() for clause in clauses} - {"="}
    words |= {"repeat", "end", "idle", "lsb", "lo", "hi", *OPERAND_WORDS}
    assert not {word for word in words if not re.search(rf"(?<![\w]){word}(?!\w)", README)}


def test_every_name_of_an_illegality_is_on_the_page() -> None:
    source = Path(Judge.__module__.replace(".", "/") + ".py")
    text = (Path(__file__).parents[2] / source).read_text(encoding="utf-8")
    names = set(re.findall(r'(?:illegal|add)\(\s*"([a-z-]+)"', text))
    assert {"slot-taken", "links"} <= names
    assert not {name for name in names if f"`{name}`" not in README}


def test_the_operations_on_the_page_exist() -> None:
    known = operations(shipped("pair7").operations).by_name
    for name in ("jump", "count", "beq", "bne", "blt", "bge", "bltu", "bgeu", "call", "halt", "fieldu", "mul.half"):
        assert name in README
        assert name in known
