"""Array files: ``.npy`` read as data only, and written whole or not at all."""

from __future__ import annotations

import contextlib
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
    return _opened(path, label, lambda stream: np.lib.format.read_array(stream, allow_pickle=False))


def map_npy(path: Path, label: str) -> np.ndarray:
    """The array in a ``.npy`` file, left there and read where it is looked at; otherwise like :func:`read_npy`."""

    def mapped(stream: BinaryIO) -> np.ndarray:
        shape, fortran, dtype = _header(stream)
        if 0 in shape:  # nothing to map
            return np.zeros(shape, dtype)
        order = "F" if fortran else "C"
        return np.memmap(stream, dtype, "r", stream.tell(), shape, order)  # type: ignore[call-overload]

    return _opened(path, label, mapped)


def _opened(path: Path, label: str, read: Callable[[BinaryIO], np.ndarray]) -> np.ndarray:
    """What ``read`` makes of the file, once its header has been judged."""
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
            return read(stream)
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
    shape, _, dtype = _header(stream)
    if dtype.hasobject:
        raise _bad(label, f"{path} holds pickled Python objects", "numbers", "save a plain integer or float array")
    count = 1
    for length in shape:
        count *= int(length)
    there = os.fstat(stream.fileno()).st_size - stream.tell()
    if min(shape, default=0) < 0 or count * dtype.itemsize > there:
        raise _bad(label, f"{path} announces {count * dtype.itemsize} bytes and holds {there}", "a whole .npy file")


def _header(stream: BinaryIO) -> tuple[tuple[int, ...], bool, np.dtype]:
    version = np.lib.format.read_magic(stream)
    if version == (1, 0):
        return np.lib.format.read_array_header_1_0(stream)
    return np.lib.format.read_array_header_2_0(stream)


def _bad(label: str, found: str, allowed: str, remedy: str = "") -> InterfaceError:
    return InterfaceError(problem("array-file", f"{label}: {found}", allowed, remedy))


def write_whole(path: Path, write: Callable[[BinaryIO], object], *, replace: bool = False) -> None:
    """Write a file atomically: a temporary file beside it, then one rename. Never over an existing file unasked.

    Raises :class:`~vliwsim.problems.InterfaceError` when ``path`` exists and ``replace`` is false, or it cannot be
    written.
    """
    with Aside(path) as file:
        file.write(write)
        file.keep(replace=replace)


class Aside:
    """A file in the making: a temporary one beside its place, which takes its name when it is whole, or goes.

    Raises :class:`~vliwsim.problems.InterfaceError` where it cannot be written.
    """

    def __init__(self, path: Path) -> None:
        import tempfile

        self.path = path
        if os.path.isdir(path):
            raise InterfaceError(problem("output-file", f"{path} is a folder", "the name of a file"))
        try:
            handle, self.name = tempfile.mkstemp(prefix=f".{path.name[:40]}.", dir=path.parent)
        except (OSError, ValueError) as error:
            said = getattr(error, "strerror", None) or str(error)
            raise InterfaceError(problem("output-file", f"{path}: {said}", "a folder that can be written")) from None
        self.stream: BinaryIO = os.fdopen(handle, "wb")

    def __enter__(self) -> Aside:
        return self

    def write(self, write: Callable[[BinaryIO], object]) -> None:
        """Have some more written."""
        try:
            write(self.stream)
        except OSError as error:
            raise self._failed(error) from None

    def keep(self, *, replace: bool = False) -> None:
        """Give the file its name; over an existing one only with ``replace``."""
        try:
            self.stream.close()
            os.chmod(self.name, 0o666 & ~_umask())
            if replace:
                os.replace(self.name, self.path)
            else:
                os.link(self.name, self.path)  # fails if it exists, also when it came into being just now
        except FileExistsError:
            raise exists(self.path) from None
        except OSError as error:
            raise self._failed(error) from None

    def __exit__(self, *_: object) -> None:
        with contextlib.suppress(OSError):
            self.stream.close()
        if os.path.exists(self.name):
            os.unlink(self.name)

    def _failed(self, error: OSError) -> InterfaceError:
        return InterfaceError(problem("output-file", f"{self.path}: {error.strerror}", "a folder that can be written"))


def exists(path: Path) -> InterfaceError:
    return InterfaceError(
        problem("file-exists", f"{path} is there already", "a new file", "--replace, or another name")
    )


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
