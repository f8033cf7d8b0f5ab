"""A fuzzer over every kind of file and over command lines.

Each mutant is made from its number alone (and the shipped files), so any of them can be made and run again:

    python -m tests.robustness.fuzz 50000             mutants 0 to 49999, counts by outcome
    python -m tests.robustness.fuzz 25000 --from 25000
    python -m tests.robustness.fuzz --only 1234       one mutant, its files and what is said of it
"""

from __future__ import annotations

import argparse
import contextlib
import json
import os
import resource
import shlex
import shutil
import signal
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from itertools import pairwise
from pathlib import Path

import numpy as np

from tests.robustness.mutants import SEED, Mutant, mutant
from tests.robustness.workshop import Result, call, contents, write
from vliwsim.problems import ImageError
from vliwsim.program.encoding.image import read_image

SECONDS = 5
"""CPU time after which a mutant hangs."""
LARGEST = 2_000_000
"""Characters that one command may say."""
SILENT = ("more-problems",)
"""Problems that allow nothing."""


class Defect(Exception):
    """What is wrong with the program, not with its input."""


class Hang(BaseException):
    """Raised by the timer; no BaseException of the program's is caught."""


@contextlib.contextmanager
def bounded() -> Iterator[None]:
    """Raises Hang where the body takes more than SECONDS of CPU time."""

    def out_of_time(*_: object) -> None:
        raise Hang

    before = signal.signal(signal.SIGPROF, out_of_time)
    signal.setitimer(signal.ITIMER_PROF, SECONDS)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)
        signal.signal(signal.SIGPROF, before)


def judge(one: Mutant, folder: Path) -> tuple[str, Result]:
    """Run a mutant in an empty ``folder``, the working one; the outcome, or Defect."""
    write(folder, dict(one.files))
    before = contents(folder)
    try:
        with warnings.catch_warnings(), bounded():
            warnings.simplefilter("error")
            result = call(one.arguments)
    except Hang:
        raise Defect(f"more than {SECONDS} s") from None
    except Exception as error:
        raise Defect("".join(traceback.format_exception(error))[-3000:]) from None
    _judge_words(one, result)
    new = {name: what for name, what in contents(folder).items() if before.get(name) != what}
    if [name for name in before if name not in contents(folder)] or set(new) - set(_may_write(one, result)):
        raise Defect(f"files changed: {sorted(new)}")
    for name in new:
        _judge_output(folder / name, one.arguments)
    kind = ("accepted", "wrong or illegal", "refused")[result.status]
    return kind, result


def _may_write(one: Mutant, result: Result) -> list[str]:
    """Files that the command was asked to make."""
    if result.status == 2 and "--sarif" not in one.arguments:  # whose log also says what could not be read
        return []
    words = [word.removeprefix("-o") for word in one.arguments]
    return [name for word in words for name in (word, word.partition("=")[2], word.rpartition("=")[2]) if name]


def _judge_words(one: Mutant, result: Result) -> None:
    spoken = result.out + result.err
    if result.status not in (0, 1, 2):
        raise Defect(f"status {result.status}")
    if result.status == 2 and not result.said:
        raise Defect("refused without a problem")
    for said in result.said:
        if not said.found or not (said.allowed or said.name in SILENT):
            raise Defect(f"{said.name} says too little: {said}")
    strange = {c for c in spoken if not c.isprintable() and c != "\n"}
    if strange or len(spoken) > LARGEST:
        raise Defect(f"says {len(spoken)} characters, with {strange}")
    if "--json" in one.arguments and (result.status < 2 or result.out):
        try:
            json.loads(result.out)
        except ValueError:
            raise Defect("no JSON") from None


def _judge_output(path: Path, arguments: list[str]) -> None:
    """What was written must be whole; an image must come back from its source."""
    if path.suffix == ".npy":
        np.load(path, allow_pickle=False)
    if path.suffix == ".sarif":
        json.loads(path.read_text())
    if path.suffix != ".image":
        return
    try:
        image = read_image(path)
    except ImageError as error:
        raise Defect(f"half an image: {error}") from None
    core = [word for pair in pairwise(arguments) if pair[0] in ("--core", "--set") for word in pair]
    back, again = path.with_name("back.vliw"), path.with_name("again.image")
    for words in (["disassemble", str(path), "-o", str(back)], ["assemble", str(back), "-o", str(again)]):
        if (result := call([*words, *core])).status:
            raise Defect(f"{words} of what was assembled: {result.err[:2000]}")
    if read_image(again).words != image.words:
        raise Defect("other words after disassembling and assembling")


def campaign(numbers: range, report: Callable[[int, Mutant, str], None], seed: str = SEED) -> Counter[str]:
    """Run these mutants; counts by outcome and by problem (``~name``). Defects are reported and counted."""
    counts: Counter[str] = Counter()
    here = os.getcwd()
    with tempfile.TemporaryDirectory(prefix="fuzz") as name:
        try:
            for number in numbers:
                folder = Path(name) / "x"
                folder.mkdir()
                os.chdir(folder)
                one = mutant(number, seed)
                try:
                    outcome, result = judge(one, folder)
                    counts.update(f"~{said.name}" for said in {s.name: s for s in result.said}.values())
                except Defect as defect:
                    outcome = "DEFECT"
                    report(number, one, str(defect))
                counts[f"{one.kind}: {outcome}"] += 1
                os.chdir(name)
                shutil.rmtree(folder)
        finally:
            os.chdir(here)
    return counts


def table(counts: Counter[str]) -> str:
    """The counts as text."""
    outcomes = sorted(name for name in counts if not name.startswith("~"))
    names = [f"{name[1:]} {count}" for name, count in counts.most_common() if name.startswith("~")]
    total = sum(counts[name] for name in outcomes)
    return "\n".join(
        [f"{counts[name]:8}  {name}" for name in outcomes]
        + [f"{total:8}  in all; {len(names)} different problems: {', '.join(names)}"]
    )


def _shown(number: int, one: Mutant, why: str) -> None:
    print(f"\n=== mutant {number} ({one.kind}): {shlex.join(one.arguments)[:500]}\n{why}", flush=True)


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    options.add_argument("count", type=int, nargs="?", default=300)
    options.add_argument("--from", dest="first", type=int, default=0)
    options.add_argument("--only", type=int)
    options.add_argument("--keep", type=Path, help="folder for the files of --only")
    chosen = options.parse_args()
    resource.setrlimit(resource.RLIMIT_AS, (6 << 30, 6 << 30))
    if chosen.only is not None:
        one = mutant(chosen.only)
        if chosen.keep:
            chosen.keep.mkdir(exist_ok=True)
            write(chosen.keep, dict(one.files))
        _shown(chosen.only, one, "")
        campaign(range(chosen.only, chosen.only + 1), _shown)
        return
    began = time.process_time()
    counts = campaign(range(chosen.first, chosen.first + chosen.count), _shown)
    print(table(counts), f"\n{time.process_time() - began:.0f} s of CPU")
    sys.exit(any("DEFECT" in name for name in counts))


if __name__ == "__main__":
    main()
