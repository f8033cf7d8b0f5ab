"""Opening files of strangers: only regular files, so that nothing is waited for and nothing is endless."""

from __future__ import annotations

import errno
import os
import stat
from typing import BinaryIO


def open_regular(path: str | os.PathLike[str]) -> BinaryIO:
    """A regular file, open for reading bytes.

    Raises OSError for what cannot be opened and for pipes and devices, at once even where no one writes to a pipe;
    ValueError for a path that cannot be.
    """
    # judged after opening: what the path means cannot change in between
    at_once = getattr(os, "O_NONBLOCK", 0)
    stream = open(path, "rb", opener=lambda name, flags: os.open(name, flags | at_once))  # noqa: SIM115
    if not stat.S_ISREG(os.fstat(stream.fileno()).st_mode):
        stream.close()
        raise OSError(errno.EINVAL, "a pipe or device, no regular file", str(path))
    return stream
