"""Verdicts kept by content: a source that has not changed, nor anything that was read to judge it, is not judged again.

A kept verdict lies in the user's cache folder under a name made of the program's own files, the Python and NumPy it ran
on, the source's path and the options; inside stand the hashes of every file that was opened while it was judged. It is
used only while all of them are as they were. Files are written whole or not at all, carry a hash of themselves, and
what is damaged counts as not there.
"""

from __future__ import annotations

import hashlib
import json
import os
import sys
import tempfile
from collections.abc import Iterable
from pathlib import Path
from typing import Any

import attrs

from vliwsim.problems import OptionError, problem
from vliwsim.regression.claims import Options, Verdict, verdict_from_json
from vliwsim.regression.sources import Target

MOST = 4000
"""Verdicts kept; the oldest go first."""
LARGEST = 64 << 20
"""Bytes of a file that is still hashed; a larger one is known by its size and time."""


def cache_folder() -> Path:
    """``VLIWSIM_CACHE``, else ``vliwsim`` in the user's cache folder."""
    own = os.environ.get("VLIWSIM_CACHE")
    if own:
        return Path(own)
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA") or os.path.expanduser("~\\AppData\\Local")
    elif sys.platform == "darwin":
        base = os.path.expanduser("~/Library/Caches")
    else:
        base = os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    return Path(base) / "vliwsim"


def tool_digest() -> str:
    """A hash of the program's own files and version."""
    package = Path(__file__).resolve().parent.parent
    digest = hashlib.sha256()
    for path in sorted(package.rglob("*.py")):
        digest.update(f"{path.relative_to(package).as_posix()} ".encode() + path.read_bytes())
    return digest.hexdigest()


def tool_name() -> str:
    """Version and hash of the program, for a golden."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        number = version("vliwsim")
    except PackageNotFoundError:
        number = "unknown"
    return f"vliwsim {number} {tool_digest()[:16]}"


class Keep:
    """The kept verdicts of one set of options; ``folder`` None keeps nothing."""

    def __init__(self, folder: Path | None, options: Options) -> None:
        self.folder = folder / "verdicts" if folder else None
        self.files: dict[Target, tuple[str, ...]] = {}
        """For every target asked for, the files it was judged by."""
        self._hashes: dict[str, str] = {}
        self._written = 0
        if self.folder:
            from importlib.metadata import PackageNotFoundError, version

            try:
                numpy = version("numpy")
            except PackageNotFoundError:
                numpy = ""
            about = [tool_digest(), sys.version, sys.platform, numpy, attrs.asdict(options)]
            self._base = json.dumps(about, sort_keys=True)

    def find(self, target: Target) -> Verdict | None:
        """The verdict of an unchanged target, None if there is none."""
        path = self._path(target)
        if path is None:
            return None
        try:
            text = path.read_text(encoding="utf-8")
            data = json.loads(text)
            if data["digest"] != _digest(data["kept"]):
                return None
            kept = data["kept"]
            if all(self._hash(name) == digest for name, digest in kept["files"]):
                verdict = verdict_from_json(kept["verdict"])
                self.files[target] = tuple(str(name) for name, _ in kept["files"])
                return verdict
        except (OSError, ValueError, KeyError, TypeError, AttributeError, RecursionError):
            return None
        return None

    def put(self, target: Target, verdict: Verdict, files: Iterable[str]) -> None:
        """Keep a verdict that was made of these files. What cannot be written is not kept."""
        self.files[target] = tuple(sorted(set(files)))
        path = self._path(target)
        if path is None or not verdict.kept:
            return
        hashes = [(name, self._hash(name)) for name in self.files[target]]
        kept = {"files": hashes, "verdict": verdict.as_json()}
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            _write(path, json.dumps({"digest": _digest(kept), "kept": kept}))
        except OSError:
            return
        self._written += 1
        if self._written % 64 == 1:
            self._prune(path.parent)

    def look_again(self) -> None:
        """Files may have changed since they were last looked at."""
        self._hashes.clear()

    def _path(self, target: Target) -> Path | None:
        if self.folder is None:
            return None
        text = f"{self._base} {target.source!r} {target.core!r} {os.path.isabs(target.source)}"
        return self.folder / f"{hashlib.sha256(text.encode()).hexdigest()[:40]}.json"

    def _hash(self, name: str) -> str:
        found = self._hashes.get(name)
        if found is None:
            found = self._hashes[name] = _file_hash(name)
        return found

    def _prune(self, folder: Path) -> None:
        """Drop the oldest verdicts beyond :data:`MOST`, and what a killed run left half written."""
        import time

        dated = []
        for entry in os.scandir(folder):
            try:
                dated.append((entry.stat().st_mtime, entry.path))
            except OSError:
                continue
        dated.sort()
        finished = [path for _, path in dated if path.endswith(".json")]
        old = [path for when, path in dated if not path.endswith(".json") and when < time.time() - 3600]
        for path in [*finished[: max(0, len(finished) - MOST)], *old]:
            try:
                os.unlink(path)
            except OSError:
                continue


def _digest(kept: Any) -> str:
    return hashlib.sha256(json.dumps(kept, sort_keys=True).encode()).hexdigest()


def _file_hash(name: str) -> str:
    """sha256 of a file's bytes, or of a folder's names; what is not there or no regular file has a mark of its own."""
    from vliwsim.description.files import open_regular

    try:
        if name.endswith(os.sep):  # a folder: what is in it
            return hashlib.sha256("\n".join(sorted(os.listdir(name))).encode(errors="replace")).hexdigest()
        with open_regular(name) as stream:
            there = os.fstat(stream.fileno())
            if there.st_size > LARGEST:
                return f"size {there.st_size} time {there.st_mtime_ns}"
            return hashlib.sha256(stream.read()).hexdigest()
    except (OSError, ValueError):
        return "absent"


def _write(path: Path, text: str) -> None:
    handle, name = tempfile.mkstemp(prefix=".half-", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8") as stream:
            stream.write(text)
        os.replace(name, path)
    except BaseException:
        os.unlink(name)
        raise


def clear(folder: Path) -> int:
    """Forget every kept verdict below a cache folder; how many there were.

    Raises :class:`~vliwsim.problems.OptionError` if one cannot be removed.
    """
    count = 0
    kept = folder / "verdicts"
    if not kept.is_dir():
        return 0
    for path in kept.iterdir():
        if path.suffix == ".json" or path.name.startswith(".half-"):
            try:
                path.unlink(missing_ok=True)
            except OSError as error:
                raise OptionError(problem("cache-folder", f"{path}: {error.strerror}", "files to remove")) from None
            count += path.suffix == ".json"
    return count
