"""The fuzzer: no traceback, no hang, no partial file, whatever is in the files. 50,000 mutants with --long."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.robustness import fuzz
from tests.robustness.fuzz import Defect, campaign, judge, table
from tests.robustness.mutants import Mutant, mutant
from tests.robustness.workshop import Result

PARTS = 10
FEW, MANY = 30, 5000
"""Mutants of one part, usually and with --long."""


@pytest.mark.parametrize("part", range(PARTS))
def test_mutants(part: int, long: bool) -> None:
    """Each ends with a status and problems that say something; files stay as they are; what is written is whole."""
    count = MANY if long else FEW
    defects: list[str] = []
    counts = campaign(range(part * MANY, part * MANY + count), lambda *what: defects.append(told(*what)))
    print(table(counts))
    assert not defects, "\n\n".join(defects[:5])
    assert counts.total() >= count
    assert len(counts) > 20


def told(number: int, one: Mutant, why: str) -> str:
    return f"python -m tests.robustness.fuzz --only {number}: {' '.join(one.arguments)[:300]}\n{why}"


def test_a_mutant_is_made_from_its_number_alone() -> None:
    """So that what one run finds another can look at."""
    made = [mutant(number) for number in (3, 1, 2, 1, 3)]
    assert made[0] == made[4]
    assert made[1] == made[3]
    assert made[0] != made[1]


class TestTheJudge:
    """The judge of the fuzzer complains of what it is there to complain of."""

    MUTANT = Mutant("source", {"x.vliw": b"kernel\n"}, ["assemble", "x.vliw", "-o", "out.image"])

    @pytest.fixture(autouse=True)
    def _there(self, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.chdir(tmp_path)

    def judged(self, monkeypatch: pytest.MonkeyPatch, behaves: object) -> str:
        """What the judge says of a command line that ``behaves`` so."""
        monkeypatch.setattr(fuzz, "call", behaves)
        with pytest.raises(Defect) as caught:
            judge(self.MUTANT, Path.cwd())
        return str(caught.value)

    def test_of_an_exception(self, monkeypatch: pytest.MonkeyPatch) -> None:
        assert "ZeroDivisionError" in self.judged(monkeypatch, lambda words: 1 // 0)

    def test_of_a_hang(self, monkeypatch: pytest.MonkeyPatch) -> None:
        monkeypatch.setattr(fuzz, "SECONDS", 0.1)

        def hangs(words: list[str]) -> Result:
            while True:
                pass

        assert "more than 0.1 s" in self.judged(monkeypatch, hangs)

    def test_of_a_file_left_behind(self, monkeypatch: pytest.MonkeyPatch) -> None:
        def leaves(words: list[str]) -> Result:
            Path("out.image").write_bytes(b"half")
            return Result(2, "", "x  (error)\n  found    a\n  allowed  b\n")

        assert "files changed: ['out.image']" in self.judged(monkeypatch, leaves)

    def test_of_a_file_changed(self, monkeypatch: pytest.MonkeyPatch) -> None:
        def changes(words: list[str]) -> Result:
            Path("x.vliw").write_bytes(b"mine")
            return Result(1, "", "x  (error)\n  found    a\n  allowed  b\n")

        monkeypatch.setattr(self, "MUTANT", Mutant("source", {"x.vliw": b"kernel\n"}, ["assemble"]), raising=False)
        assert "files changed: ['x.vliw']" in self.judged(monkeypatch, changes)

    def test_of_half_an_image(self, monkeypatch: pytest.MonkeyPatch) -> None:
        def halves(words: list[str]) -> Result:
            Path("out.image").write_bytes(b"vliwsim image 1\n")
            return Result(0, "", "")

        assert "damaged-image" in self.judged(monkeypatch, halves)

    @pytest.mark.parametrize(
        ("result", "says"),
        [
            (Result(130, "", ""), "status 130"),
            (Result(2, "", ""), "without a problem"),
            (Result(2, "", "no-kernel  (error)\n  found    a\n"), "says too little"),
            (Result(0, "\x1b[2J", ""), "says 4 characters"),
        ],
    )
    def test_of_words(self, result: Result, says: str, monkeypatch: pytest.MonkeyPatch) -> None:
        assert says in self.judged(monkeypatch, lambda words: result)
