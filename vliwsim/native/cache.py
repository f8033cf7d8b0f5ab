"""Machine code kept between runs, in the user's cache folder.

What a file is called is a hash of the very text it was compiled from, the processor and the compiler's version: so
nothing stale is ever found. A file carries a hash of its content; one that is cut short or spoilt is ignored and
written again. Files appear whole (written aside, then renamed), so that any number of processes may share the folder.
What is in it is run: a folder that others may write into is not used.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import stat
import tempfile
from functools import lru_cache
from pathlib import Path

from vliwsim.native.compiler import Code, binding, compile_text, host
from vliwsim.native.text import COMMON

MOST_BYTES = 128 << 20
"""Of all files together; beyond it the least recently used half goes."""

VERSION = b"vliwsim native 1"
ENDING = ".code"
_DIGEST = 32


def folder() -> Path:
    """Where the code is kept: ``vliwsim/native`` in the user's cache folder."""
    base = os.environ.get("XDG_CACHE_HOME") or os.environ.get("LOCALAPPDATA")
    return (Path(base) if base else Path.home() / ".cache") / "vliwsim" / "native"


def ours(place: Path) -> bool:
    """Whether a folder is there that belongs to this user and that nobody else may write into."""
    try:
        found = place.stat()
    except OSError:
        return False
    if not stat.S_ISDIR(found.st_mode):
        return False
    return not hasattr(os, "getuid") or (found.st_uid == os.getuid() and not found.st_mode & 0o022)


@lru_cache(maxsize=64)
def code_of(text: str, effort: int) -> Code:
    """The loaded code of a module's text, from the cache if it is there."""
    name = key(text, effort)
    found = read(name)
    if found is None:
        found = compile_text(text, effort)
        write(name, found)
    return Code(found)


def kept(text: str, effort: int) -> Code | None:
    """The loaded code of a module's text if it is in the cache."""
    found = read(key(text, effort))
    return None if found is None else Code(found)


def key(text: str, effort: int) -> str:
    llvm = binding()
    versions = [*llvm.llvm_version_info, effort]
    parts = [VERSION, repr(versions).encode(), "\n".join(host()).encode(), (text + COMMON).encode()]
    return hashlib.sha256(b"\0".join(parts)).hexdigest()


def read(name: str) -> bytes | None:
    """What is kept under ``name``; None if nothing is, or it is spoilt."""
    path = folder() / (name + ENDING)
    if not ours(path.parent):
        return None
    try:
        content = path.read_bytes()
        os.utime(path)
    except OSError:
        return None
    digest, code = content[:_DIGEST], content[_DIGEST:]
    return code if hashlib.sha256(code).digest() == digest else None


def write(name: str, code: bytes) -> None:
    """Keep ``code``; where that cannot be, it is not kept."""
    place = folder()
    try:
        place.mkdir(mode=0o700, parents=True, exist_ok=True)
        if not ours(place):
            return
        number, aside = tempfile.mkstemp(prefix=name[:16], suffix=".part", dir=place)
    except (OSError, RuntimeError):
        return
    try:
        with os.fdopen(number, "wb") as file:
            file.write(hashlib.sha256(code).digest() + code)
        os.replace(aside, place / (name + ENDING))
    except OSError:
        with contextlib.suppress(OSError):
            os.unlink(aside)
    shrink()


def shrink(most: int = MOST_BYTES) -> None:
    """Drop what was not used for longest, down to half of ``most`` bytes, if there is more than that."""
    files = []
    with contextlib.suppress(OSError):
        for path in folder().iterdir():
            with contextlib.suppress(OSError):
                found = path.stat()
                files.append((found.st_mtime_ns, found.st_size, path))
    total = sum(size for _, size, _ in files)
    if total <= most:
        return
    for _, size, path in sorted(files):
        if total <= most // 2:
            return
        with contextlib.suppress(OSError):
            path.unlink()
        total -= size


def clear() -> int:
    """Drop everything; the number of files that are gone."""
    gone = 0
    try:
        files = list(folder().iterdir())
    except OSError:
        return 0
    for path in files:
        with contextlib.suppress(OSError):
            path.unlink()
            gone += 1
    return gone
