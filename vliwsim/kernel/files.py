"""Array files: ``.npy`` read as data only, and written whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import BinaryIO

import numpy as np

from vliwsim.description.files import open_regular
from vliwsim.problems import InterfaceError, problem


def read_npy(path: Path, label: str) -> np.ndarray:
    """The array in a ``.npy`` file. ``label`` names it in messages.

    The header is checked against the file's length before anything is allocated, and pickled objects are refused.
    Raises :class:`~vliwsim.problems.InterfaceError`.
    """
    try:
        with open_regular(path) as stream:
            magic = stream.read(6)
            if magic[:4] == b"PK\x03\x04":
                raise _bad(label, f"{path} is an archive of several arrays", "a .npy file", "numpy.save(…) one array")
            if magic != b"\x93NUMPY":
                raise _bad(label, f"{path} is no .npy file", "a file that numpy.save wrote")
            stream.seek(0)
            _check_header(stream, path, label)
            stream.seek(0)
            return np.lib.format.read_array(stream, allow_pickle=False)
    except IsADirectoryError:
        raise _bad(label, f"{path} is a folder", "a .npy file") from None
    except OSError as error:
        raise _bad(label, f"{path}: {error.strerror or error}", "a file that can be read") from None
    except InterfaceError:
        raise
    except Exception as error:  # NumPy parses headers with Python's own tools, each of which has its own
        said = next(iter(str(error).splitlines()), type(error).__name__)
        raise _bad(label, f"{path} is damaged: {said}", "a whole .npy file") from None


def _check_header(stream: BinaryIO, path: Path, label: str) -> None:
    version = np.lib.format.read_magic(stream)
    if version == (1, 0):
        shape, _, dtype = np.lib.format.read_array_header_1_0(stream)
    else:
        shape, _, dtype = np.lib.format.read_array_header_2_0(stream)
    if dtype.hasobject:
        raise _bad(label, f"{path} holds pickled Python objects", "numbers", "save a plain integer or float array")
    count = 1
    for length in shape:
        count *= int(length)
    there = os.fstat(stream.fileno()).st_size - stream.tell()
    if min(shape, default=0) < 0 or count * dtype.itemsize > there:
        raise _bad(label, f"{path} announces {count * dtype.itemsize} bytes and holds {there}", "a whole .npy file")


def _bad(label: str, found: str, allowed: str, remedy: str = "") -> InterfaceError:
    return InterfaceError(problem("array-file", f"{label}: {found}", allowed, remedy))


def write_whole(path: Path, write: Callable[[BinaryIO], None], *, replace: bool = False) -> None:
    """Write a file atomically: a temporary file beside it, then one rename. Never over an existing file unasked.

    Raises :class:`~vliwsim.problems.InterfaceError` when ``path`` exists and ``replace`` is false, or it cannot be
    written.
    """
    import tempfile

    if os.path.isdir(path):
        raise InterfaceError(problem("output-file", f"{path} is a folder", "the name of a file"))
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.name[:40]}.", dir=path.parent)
    except (OSError, ValueError) as error:
        said = getattr(error, "strerror", None) or str(error)
        raise InterfaceError(problem("output-file", f"{path}: {said}", "a folder that can be written")) from None
    try:
        with os.fdopen(handle, "wb") as stream:
            write(stream)
        os.chmod(name, 0o666 & ~_umask())
        if replace:
            os.replace(name, path)
        else:
            os.link(name, path)  # fails if it exists, also when it came into being just now
    except FileExistsError:
        raise exists(path) from None
    except OSError as error:
        raise InterfaceError(
            problem("output-file", f"{path}: {error.strerror}", "a folder that can be written")
        ) from None
    finally:
        if os.path.exists(name):
            os.unlink(name)


def exists(path: Path) -> InterfaceError:
    return InterfaceError(
        problem("file-exists", f"{path} is there already", "a new file", "--replace, or another name")
    )


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
