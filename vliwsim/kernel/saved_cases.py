"""Cases kept as text beside a kernel: ``cases/NAME.json`` with the inputs by name, small enough to read.

{"kernel": "lowpass", "inputs": {"x": [0, 0, 32767], "gain": 3}}
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from vliwsim.description.files import open_regular
from vliwsim.kernel.files import write_whole
from vliwsim.kernel.interface import interface_of
from vliwsim.problems import InterfaceError, Place, problem
from vliwsim.program.kernel import Kernel

LARGEST = 1 << 24
"""Bytes of one file, at most."""
_NAME = re.compile(r"[A-Za-z0-9][\w.-]{0,80}\Z")


def cases_folder(kernel: Kernel) -> Path:
    return Path(kernel.path).parent / "cases"


def save_case(kernel: Kernel, name: str, inputs: Mapping[str, Any], *, replace: bool = False) -> Path:
    """Keep ``inputs`` as case ``name`` of ``kernel``; where it is then. Never over an existing file unasked.

    Raises :class:`~vliwsim.problems.InterfaceError`.
    """
    if not _NAME.match(name):
        raise InterfaceError(problem("case-name", f"a case called {name!r:.40}", "letters, digits, - _ ."))
    path = cases_folder(kernel) / f"{name}.json"
    plain = {key: _plain(value) for key, value in inputs.items()}
    text = json.dumps({"kernel": kernel.name, "inputs": plain}, ensure_ascii=True) + "\n"
    try:
        path.parent.mkdir(exist_ok=True)
    except OSError as error:
        raise InterfaceError(problem("output-file", f"{path.parent}: {error.strerror}", "a folder")) from None
    write_whole(path, lambda stream: _put(stream, text), replace=replace)
    return path


def _put(stream: Any, text: str) -> None:
    stream.write(text.encode())


def _plain(value: Any) -> Any:
    """JSON data; a float as the shortest decimal that gives its binary32 back."""
    array = np.asarray(value)
    values = [float(str(v)) if array.dtype.kind == "f" else int(v) for v in array.ravel()]
    return values if array.ndim else values[0]


def saved_cases(kernel: Kernel) -> Iterator[tuple[str, dict[str, Any]]]:
    """(name, inputs) of every case kept for this kernel, by name.

    Raises :class:`~vliwsim.problems.InterfaceError` for a file that is none.
    """
    folder = cases_folder(kernel)
    try:
        names = sorted(os.listdir(folder))
    except OSError:
        return
    for path in [folder / name for name in names if name.endswith(".json") and not name.startswith(".")]:
        try:
            with open_regular(path) as stream:
                data = json.loads(stream.read(LARGEST).decode())
            if data["kernel"] == kernel.name:
                yield path.stem, {str(k): _array(kernel, str(k), v) for k, v in data["inputs"].items()}
        except (OSError, ValueError, KeyError, TypeError, AttributeError, RecursionError, OverflowError) as error:
            found = f"{path} is no case: {str(error).splitlines()[0] if str(error) else type(error).__name__}"
            allowed = '{"kernel": NAME, "inputs": {…}}'
            raise InterfaceError(problem("case-file", found, allowed, place=Place(str(path)))) from None


def _array(kernel: Kernel, name: str, value: Any) -> Any:
    """A list as an array of the item's type where it fits, so that references get what they always get."""
    item = interface_of(kernel).items.get(name)
    if not isinstance(value, list) or item is None:
        return value
    element = interface_of(kernel).element(name)
    whole = all(type(one) is int and element.low <= one <= element.high for one in value)
    return np.array(value, element.dtype) if element.floating or whole else value
