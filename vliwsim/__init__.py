"""Simulate hand-scheduled kernels on a parameterizable VLIW core, cycle by cycle.

>>> import vliwsim
>>> kernel = vliwsim.load_kernel("programs/energy/energy.vliw")
>>> kernel.run(x=samples).cycles  # doctest: +SKIP
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from vliwsim.description.corefile import load_core
    from vliwsim.kernel.loaded import LoadedKernel, load_kernel
    from vliwsim.kernel.runner import KernelRun
    from vliwsim.problems import Problem, VliwsimError

_HOMES = {
    "KernelRun": "vliwsim.kernel.runner",
    "LoadedKernel": "vliwsim.kernel.loaded",
    "Problem": "vliwsim.problems",
    "VliwsimError": "vliwsim.problems",
    "load_core": "vliwsim.description.corefile",
    "load_kernel": "vliwsim.kernel.loaded",
}
"""Where each public name lives; nothing is imported before it is used."""

__all__ = ["KernelRun", "LoadedKernel", "Problem", "VliwsimError", "load_core", "load_kernel"]


def __getattr__(name: str) -> Any:
    if name == "__version__":
        from importlib.metadata import version

        return version("vliwsim")
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module 'vliwsim' has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(home), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__, "__version__"])
