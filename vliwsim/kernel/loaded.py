"""A kernel to work with from Python: load, run, look."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cached_property
from typing import TYPE_CHECKING, Any

from vliwsim.description.core import Core
from vliwsim.kernel.binding import describe
from vliwsim.kernel.cases import Case, case_with, cases_of
from vliwsim.kernel.crew import batch_of
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.loading import Changes, assemble_source
from vliwsim.kernel.reference import Reference, load_reference
from vliwsim.kernel.runner import ENGINE, LIMIT, KernelRun, run_kernel
from vliwsim.program.kernel import Kernel

if TYPE_CHECKING:
    import numpy as np

    from vliwsim.kernel.frames_run import FramesRun
    from vliwsim.kernel.many import Cases, ManyRuns
    from vliwsim.native.batch import Batch


class LoadedKernel:
    """An assembled kernel with its reference; see :func:`load_kernel`."""

    def __init__(self, kernel: Kernel) -> None:
        self.kernel = kernel

    @property
    def name(self) -> str:
        return self.kernel.name

    @property
    def core(self) -> Core:
        return self.kernel.core

    @cached_property
    def reference(self) -> Reference | None:
        """The reference beside the source, loaded (which executes it) on first use; None if there is none."""
        return load_reference(self.kernel)

    def cases(self) -> dict[str, Mapping[str, Any]]:
        """The kernel's cases: inputs by name, by case name."""
        return {case.name: case.inputs for case in cases_of(self.kernel, self.reference)}

    def run(
        self,
        *,
        case: str | None = None,
        given: Mapping[str, Any] | None = None,
        reference: bool = True,
        limit: int = LIMIT,
        interrupt_at: int | None = None,
        trace: bool = False,
        engine: str = ENGINE,
        **arrays: Any,
    ) -> KernelRun:
        """Run the kernel on ``arrays``: arrays, scalars and sizes by name.

        ``case`` names a case to start from; with nothing given the first one is run. ``given`` takes inputs whose names
        are those of options here. ``reference``: compare with the reference, if there is one. ``limit`` in cycles.
        ``interrupt_at``: cycle, from 0. ``trace``: keep a record of every beat up to the halt. ``engine``: ``step``,
        ``native`` (machine code) or ``auto`` (that once a run is long).

        A run that is wrong, illegal or over budget is a result, not an exception: look at ``ok`` and ``diagnostics``.
        Raises :class:`~vliwsim.problems.VliwsimError` for inputs that do not fit and a reference that fails.
        """
        loaded = self.reference if reference else None
        chosen: Case = case_with(self.kernel, loaded, case, {**(given or {}), **arrays})
        return run_kernel(
            self.kernel,
            chosen.inputs,
            case=chosen.name,
            reference=loaded,
            limit=limit,
            interrupt_at=interrupt_at,
            trace=trace,
            engine=engine,
        )

    @cached_property
    def batch(self) -> Batch:
        """The kernel's code, made ready for many runs on first use."""
        return batch_of(self.kernel)

    def run_many(
        self, cases: Cases, *, limit: int = LIMIT, progress: Callable[[int], bool | None] | None = None
    ) -> ManyRuns:
        """Run many cases on all processors: a matrix of every array, or dicts; see :func:`.many.run_many`."""
        from vliwsim.kernel.many import run_many

        return run_many(self.kernel, cases, limit=limit, progress=progress, batch=self.batch)

    def run_frames(
        self,
        frames: Mapping[str, Any],
        *,
        given: Mapping[str, Any] | None = None,
        hop: int | Mapping[str, int] | None = None,
        lead: int | Mapping[str, int] = 0,
        pad: bool = False,
        reference: bool = True,
        limit: int = LIMIT,
        engine: str = "auto",
        progress: Callable[[int], bool | None] | None = None,
        take: Callable[[str, np.ndarray], None] | None = None,
        **same: Any,
    ) -> FramesRun:
        """Run a recording frame by frame, ``changes`` kept between them; see :func:`.frames.run_frames`.

        ``frames``: what is cut or differs; ``same``: sizes, and inputs that are the same for all frames (``given``
        takes those whose names are options here). ``progress`` is called with the number of frames done.
        """
        from vliwsim.kernel.frames import run_frames

        return run_frames(
            self.kernel,
            frames,
            {**(given or {}), **same},
            hop=hop,
            lead=lead,
            pad=pad,
            reference=self.reference if reference else None,
            limit=limit,
            engine=engine,
            look=progress,
            take=take,
            batch=lambda: self.batch,
        )

    def __repr__(self) -> str:
        interface = interface_of(self.kernel)
        takes = ", ".join(f"{n}: {describe(i)}" for n, i in interface.inputs.items())
        gives = ", ".join(f"{n}: {describe(i)}" for n, i in interface.outputs.items())
        return f"<kernel {self.name} on {self.core.name}: ({takes}) gives ({gives})>"


def load_kernel(path: str, core: str | Core | None = None, changes: Changes | None = None) -> LoadedKernel:
    """Assemble the kernel at ``path``: a ``.vliw`` file, its folder, or a shipped kernel's name.

    ``core``: a core's name, core file or :class:`~vliwsim.description.core.Core`; None takes the one the source names.
    ``changes``: values of the core to change, ``{"latency.load": 5}``. Raises :class:`~vliwsim.problems.VliwsimError`.
    """
    return LoadedKernel(assemble_source(str(path), core, changes or ()))
