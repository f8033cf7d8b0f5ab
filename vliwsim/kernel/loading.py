"""Finding and assembling kernels: by path, or the shipped ones by name."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from pathlib import Path

from vliwsim.description.core import Core
from vliwsim.description.places import programs_folder
from vliwsim.problems import OptionError, problem
from vliwsim.program.kernel import Kernel

Changes = Mapping[str, object] | Sequence[str]
"""``{"latency.load": 5}`` or ``["latency.load=5"]``."""


def find_source(path: str) -> Path:
    """The source file that ``path`` means.

    A file; a folder with one source; or, where there is no such path, a shipped kernel: ``energy``,
    ``programs/energy`` or ``programs/energy/energy.vliw``. Raises :class:`~vliwsim.problems.OptionError`.
    """
    given = Path(path)
    if not os.path.exists(path):  # unlike Path.exists, False for names that cannot be
        shipped = _shipped(path)
        if shipped is None:
            found = f"no file {path}"
            raise OptionError(
                problem("no-such-file", found, "a .vliw file, its folder, or the name of a shipped kernel")
            )
        given = _near(shipped)
    if given.is_dir():
        sources = sorted(given.glob("*.vliw"))
        if len(sources) != 1:
            found = f"{given} holds {len(sources)} sources" + "".join(f" {s.name}" for s in sources[:8])
            raise OptionError(problem("which-source", found, "one .vliw file", str(sources[0]) if sources else ""))
        return sources[0]
    return given


def _near(path: Path) -> Path:
    """The path as seen from the working folder, where it is below that."""
    try:
        here = Path.cwd()
    except OSError:  # it is gone
        return path
    return path.relative_to(here) if path.is_relative_to(here) else path


def _shipped(path: str) -> Path | None:
    """A shipped kernel of this name, looked for only below the folder of the shipped kernels."""
    folder = programs_folder()
    parts = Path(path).parts
    if not parts or Path(path).is_absolute() or ".." in parts:
        return None
    inner = Path(*parts[1:]) if parts[0] == "programs" and len(parts) > 1 else Path(path)
    if os.path.exists(folder / inner):
        found = folder / inner
        own = found / f"{found.name}.vliw"
        return own if own.is_file() else found
    if len(parts) == 1:
        name = path if path.endswith(".vliw") else f"{path}.vliw"
        inside = (each / name for each in sorted(folder.iterdir()))
        return next((source for source in inside if os.path.isfile(source)), None)
    return None


def assemble_source(path: str, core: str | Core | None = None, changes: Changes = ()) -> Kernel:
    """The kernel in the source that ``path`` means, assembled for ``core`` (a name, a core file, or a core).

    Without ``core`` the first core that the source names. Raises :class:`~vliwsim.problems.VliwsimError`.
    """
    from vliwsim.program.assembler import assemble

    source = str(find_source(path))
    if core is None:
        return assemble(source, changes=changes)
    from vliwsim.description.corefile import evolve, load_core

    if isinstance(core, str):
        return assemble(source, load_core(core, changes))
    return assemble(source, evolve(core, changes) if changes else core)
