"""Goldens: what a kernel once gave, kept beside it to be held against what it gives now.

``golden/SOURCE.CORE.npz`` is an archive of ``.npy`` members, ``0/given/x.npy`` and ``0/returns/y.npy`` for case 0, and
of ``about.json``: the cases' names and accounts, where the file comes from, and a hash over all of it. ``numpy.load``
opens it. The same run always gives the same bytes.

Format 1, still read, is what one plain ``numpy.savez`` call can write: one case with the keys ``given.x``,
``returns.y``, ``cycles``, and where wanted ``case``, ``bundles``, ``drain``, ``stalls.bank`` (and other causes),
``code_bytes``.
"""

from __future__ import annotations

import hashlib
import io
import json
import re
import zipfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, BinaryIO

import attrs
import numpy as np

from vliwsim.description.corefile import core_digest
from vliwsim.description.files import open_regular
from vliwsim.kernel.files import write_whole
from vliwsim.kernel.runner import KernelRun
from vliwsim.problems import GoldenError, Place, problem
from vliwsim.program.kernel import Kernel

FORMAT = 2
LARGEST = 1 << 30
"""Bytes that the arrays of one golden file may have in all."""
_ABOUT = "about.json"
_DATED = (1980, 1, 1, 0, 0, 0)
_DAY = re.compile(r"\d{4}-\d{2}-\d{2}\Z")


@attrs.frozen(eq=False)
class GoldenCase:
    """One recorded run. ``inputs``, ``outputs``: arrays and numbers by name; ``stalls`` and ``sections`` in cycles."""

    name: str
    inputs: Mapping[str, Any]
    outputs: Mapping[str, Any]
    cycles: int
    bundles: int
    stalls: Mapping[str, int]
    drain: int
    sections: Mapping[str, int] = attrs.field(factory=dict)


@attrs.frozen(eq=False)
class Golden:
    """One golden file. Digests are sha256 in hex, empty where an earlier format has none; ``code_bytes`` may be None.

    ``date``: as the caller gave it, ``YYYY-MM-DD``.
    """

    kernel: str
    core: str
    cases: tuple[GoldenCase, ...]
    code_bytes: int | None
    kernel_digest: str = ""
    core_digest: str = ""
    reference_digest: str = ""
    tool: str = ""
    date: str = ""
    format: int = FORMAT

    def case(self, name: str) -> GoldenCase | None:
        return next((case for case in self.cases if case.name == name), None)


def golden_path(source: str | Path, core: str) -> Path:
    """Where the goldens of a source on a core are kept."""
    path = Path(source)
    return path.parent / "golden" / f"{path.stem}.{core}.npz"


def source_digest(text: str | bytes) -> str:
    return hashlib.sha256(text.encode() if isinstance(text, str) else text).hexdigest()


def digest_of_core(kernel: Kernel) -> str:
    """The hash of everything a core says, operations included."""
    return core_digest(kernel.core, kernel.operations.digest)


def record(runs: Sequence[KernelRun], date: str, tool: str, reference: str) -> Golden:
    """A golden of these runs of one kernel, each of which must have matched its reference.

    ``date``: ``YYYY-MM-DD``. ``tool``: version and hash of the program. ``reference``: text of the reference.
    Raises :class:`~vliwsim.problems.GoldenError`.
    """
    if not _DAY.match(date):
        raise GoldenError(problem("golden-date", f"date {date}", "YYYY-MM-DD", "--date 2030-01-31"))
    wrong = [run for run in runs if not (run.ok and run.matches)]
    if wrong or not runs:
        reasons = [problem("golden-not-right", run.verdict[:-1], "a run that matched its reference") for run in wrong]
        raise GoldenError(reasons or problem("golden-not-right", "no run", "a run that matched its reference"))
    kernel = runs[0].kernel
    return Golden(
        kernel.name,
        kernel.core.name,
        tuple(_case(run) for run in runs),
        kernel.program.code_bytes,
        source_digest(kernel.text),
        digest_of_core(kernel),
        source_digest(reference),
        tool,
        date,
    )


def _case(run: KernelRun) -> GoldenCase:
    setup = run.setup
    tables = {item.name for item in run.kernel.items if item.kind == "table"}
    inputs: dict[str, Any] = {name: array for name, array in setup.arrays.items() if name not in tables}
    inputs |= {name: value for name, value in setup.values.items() if _is_given(run.kernel, name)}
    inputs |= setup.sizes
    sections = {section.label: section.cycles for section in run.account.sections}
    stalls = {cause: n for cause, n in run.stalls.items() if n}
    return GoldenCase(run.case, inputs, dict(run.outputs), run.cycles, run.bundles, stalls, run.drain, sections)


def _is_given(kernel: Kernel, name: str) -> bool:
    return any(i.name == name and i.value is None and i.kind in ("given", "changes") for i in kernel.items)


def write_golden(path: Path, golden: Golden, *, replace: bool = False) -> None:
    """Write a golden file, whole or not at all; never over an existing one unasked.

    Raises :class:`~vliwsim.problems.InterfaceError`, :class:`~vliwsim.problems.GoldenError`.
    """
    data = to_bytes(golden)
    try:
        path.parent.mkdir(exist_ok=True)
    except OSError as error:
        raise GoldenError(problem("output-file", f"{path.parent}: {error.strerror}", "a folder")) from None
    write_whole(path, lambda stream: _put(stream, data), replace=replace)


def _put(stream: BinaryIO, data: bytes) -> None:
    stream.write(data)


def to_bytes(golden: Golden) -> bytes:
    """The bytes of a golden file."""
    members: dict[str, bytes] = {}
    for number, case in enumerate(golden.cases):
        for part, values in (("given", case.inputs), ("returns", case.outputs)):
            for name, value in values.items():
                members[f"{number}/{part}/{name}.npy"] = _npy(value)
    about: dict[str, Any] = {
        "format": FORMAT,
        **{key: getattr(golden, key) for key in ("kernel", "core", "code_bytes", *_PROVENANCE)},
        "cases": [
            {"name": c.name, **{key: _plain(getattr(c, key)) for key in _ACCOUNT}, "sections": dict(c.sections)}
            for c in golden.cases
        ],
    }
    about["digest"] = _digest(members, about)
    out = io.BytesIO()
    with zipfile.ZipFile(out, "w", zipfile.ZIP_STORED) as archive:  # stored: compressed bytes depend on the machine
        members[_ABOUT] = json.dumps(about, indent=1, ensure_ascii=True).encode()
        for name, data in members.items():
            archive.writestr(zipfile.ZipInfo(name, _DATED), data)
    return out.getvalue()


_PROVENANCE = ("kernel_digest", "core_digest", "reference_digest", "tool", "date")
_ACCOUNT = ("cycles", "bundles", "stalls", "drain")


def _plain(value: Any) -> Any:
    return dict(value) if isinstance(value, Mapping) else int(value)


def _npy(value: Any) -> bytes:
    array = np.asarray(value)
    stream = io.BytesIO()
    np.lib.format.write_array(stream, array.astype(array.dtype.newbyteorder("<")), (1, 0), allow_pickle=False)
    return stream.getvalue()


def _digest(members: Mapping[str, bytes], about: Mapping[str, Any]) -> str:
    digest = hashlib.sha256(
        json.dumps({k: v for k, v in about.items() if k != "digest"}, sort_keys=True, ensure_ascii=True).encode()
    )
    for name in sorted(members):
        digest.update(f"{name} {len(members[name])} ".encode() + members[name])
    return digest.hexdigest()


def read_golden(path: Path) -> Golden | None:
    """The golden in a file; None if there is no such file. Nothing in it is executed.

    Raises :class:`~vliwsim.problems.GoldenError` for one that is damaged, changed by hand, or of a later format.
    """
    try:
        with open_regular(path) as stream:
            return _read(path, stream)
    except FileNotFoundError:
        return None
    except GoldenError:
        raise
    except OSError as error:
        raise _damaged(path, error.strerror or str(error)) from None
    except Exception as error:  # of archives, deflate, Python's tokenizer, JSON: each reader has its own
        said = str(error).splitlines()
        raise _damaged(path, said[0] if said else type(error).__name__) from None


def _damaged(path: Path, why: str) -> GoldenError:
    remedy = "the copy in version control, or record it again (vliwsim golden … --replace)"
    return GoldenError(
        problem("damaged-golden", f"{path}: {why}", "a whole golden file", remedy, place=Place(str(path)))
    )


def _read(path: Path, stream: BinaryIO) -> Golden:
    with zipfile.ZipFile(stream) as archive:
        infos = archive.infolist()
        if sum(info.file_size for info in infos) > LARGEST or len({i.filename for i in infos}) != len(infos):
            raise _damaged(path, "more data than a golden has")
        members = {info.filename: _member(archive, info) for info in infos}
    if _ABOUT not in members:
        return _read_first(path, members)
    about = json.loads(members.pop(_ABOUT))
    if about["format"] != FORMAT:
        found = f"{path} is of format {about['format']!r:.20}"
        raise GoldenError(problem("golden-format", found, f"formats 1 to {FORMAT}", "a newer vliwsim"))
    if about.get("digest") != _digest(members, about):
        raise _damaged(path, "its contents are not those that were recorded")
    cases = []
    for number, said in enumerate(about["cases"]):
        given, returns = (_arrays(members, f"{number}/{part}/") for part in ("given", "returns"))
        account = {key: said[key] for key in _ACCOUNT}
        cases.append(GoldenCase(said["name"], given, returns, **account, sections=said.get("sections", {})))
    kept: dict[str, Any] = {key: str(about[key]) for key in _PROVENANCE}
    return Golden(about["kernel"], about["core"], tuple(cases), about["code_bytes"], **kept)


def _member(archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> bytes:
    with archive.open(info) as member:
        data = member.read(info.file_size + 1)
    if len(data) != info.file_size:
        raise zipfile.BadZipFile(f"{info.filename} is not as long as announced")
    return data


def _arrays(members: Mapping[str, bytes], prefix: str) -> dict[str, Any]:
    return {
        name[len(prefix) : -len(".npy")]: _array(data)
        for name, data in members.items()
        if name.startswith(prefix) and name.endswith(".npy")
    }


def _array(data: bytes) -> Any:
    """An array or, of no dimensions, the number in it."""
    array = np.lib.format.read_array(io.BytesIO(data), allow_pickle=False)
    if array.dtype.kind not in "iufUb":
        raise ValueError(f"an array of type {array.dtype}")
    return array if array.ndim else array[()]


def _read_first(path: Path, members: Mapping[str, bytes]) -> Golden:
    """Format 1."""
    values = _arrays(members, "")
    parts: dict[str, dict[str, Any]] = {"given": {}, "returns": {}, "stalls": {}}
    for key, value in values.items():
        part, dot, name = key.partition(".")
        if dot and part in parts:
            parts[part][name] = value
    if "cycles" not in values or not parts["returns"]:
        raise _damaged(path, "no about.json, and no cycles and returns as format 1 has them")
    stalls = {cause: int(n) for cause, n in parts["stalls"].items()}
    cycles, drain = int(values["cycles"]), int(values.get("drain", 0))
    bundles = int(values.get("bundles", cycles - drain - sum(stalls.values())))
    case = GoldenCase(
        str(values.get("case", "recorded")), parts["given"], parts["returns"], cycles, bundles, stalls, drain
    )
    size = int(values["code_bytes"]) if "code_bytes" in values else None
    return Golden(str(values.get("kernel", "")), str(values.get("core", "")), (case,), size, format=1)


def differences(old: Golden, new: Golden) -> list[str]:
    """What replacing ``old`` by ``new`` changes, a line each; empty if nothing."""
    lines = []
    if old.code_bytes != new.code_bytes:
        lines.append(f"code: {old.code_bytes} → {new.code_bytes} bytes")
    names = list(dict.fromkeys([c.name for c in old.cases] + [c.name for c in new.cases]))
    for name in names:
        before, after = old.case(name), new.case(name)
        if before is None or after is None:
            lines.append(f"{name}: {'added' if before is None else 'no longer there'}")
            continue
        lines += [f"{name}: {text}" for text in _case_differences(before, after)]
    for key, label in (("core_digest", "core"), ("kernel_digest", "source"), ("reference_digest", "reference")):
        if getattr(old, key) != getattr(new, key):
            lines.append(f"{label}: not the one of {old.date or 'then'}")
    return lines


def _case_differences(before: GoldenCase, after: GoldenCase) -> list[str]:
    lines = []
    if before.cycles != after.cycles:
        lines.append(f"{before.cycles} → {after.cycles} cycles")
    for part, one, other in (("given", before.inputs, after.inputs), ("returns", before.outputs, after.outputs)):
        for name in dict.fromkeys([*one, *other]):
            if name not in one or name not in other:
                lines.append(f"{part} {name}: {'new' if name not in one else 'gone'}")
            elif difference := first_difference(one[name], other[name]):
                lines.append(f"{part} {name}{difference}")
    return lines


def first_difference(before: Any, after: Any) -> str:
    """Where two arrays or numbers first differ, as ``[3]: 5 → 6``; empty if they are the same."""
    one, other = np.asarray(before), np.asarray(after)
    if one.shape != other.shape:
        return f": {one.size} → {other.size} elements"
    same = (one == other) | ((one != one) & (other != other))
    if same.all():
        return ""
    if one.ndim == 0:
        return f": {one[()]} → {other[()]}"
    index = int(np.flatnonzero(~same)[0])
    count = int(np.count_nonzero(~same))
    return f"[{index}]: {one[index]} → {other[index]}" + (f" (and {count - 1} more)" if count > 1 else "")
