"""``vliwsim run --frames``: a recording through a kernel, frame by frame, and its report."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from vliwsim.faces.options import given_value
from vliwsim.faces.run_report import account_lines, difference_values, element, note_lines
from vliwsim.problems import OptionError, problem

if TYPE_CHECKING:
    import numpy as np

    from vliwsim.kernel.files import Aside
    from vliwsim.kernel.frames_run import FramesRun
    from vliwsim.kernel.reference import Reference
    from vliwsim.program.kernel import Kernel

ALONE = ("case", "cases", "interrupt_at", "trace", "debug")
"""Options that speak of one run."""


def judge_options(options: Mapping[str, Any]) -> None:
    """Refuse what does not go together."""
    if options["frames"]:
        beside = [f"--{name.replace('_', '-')}" for name in ALONE if options[name]]
        if beside:
            raise OptionError(problem("bad-option", f"--frames with {', '.join(beside)}", "--frames without"))
        return
    lonely = [f"--{name}" for name in ("hop", "lead", "pad") if options[name]]
    if lonely:
        raise OptionError(problem("bad-option", f"{', '.join(lonely)} without --frames", "--frames x=FILE.npy"))


def frames_given(kernel: Kernel, texts: Sequence[str]) -> dict[str, Any]:
    """What the ``--frames`` options give, by name: samples, or an expression of the frame's number as text."""
    from vliwsim.kernel.files import map_npy
    from vliwsim.kernel.interface import interface_of

    interface = interface_of(kernel)
    found: dict[str, Any] = {}
    for text in texts:
        name, sign, value = (part.strip() for part in text.partition("="))
        if not sign or not name or not value:
            raise OptionError(
                problem("bad-option", f"--frames {text}", "NAME=FILE.npy, or for a value NAME=EXPRESSION")
            )
        if name in found:
            raise OptionError(problem("bad-option", f"--frames {name} twice", "each name once"))
        item = interface.inputs.get(name)
        if Path(value).suffix == ".npy" or (item is not None and item.size is not None and "," not in value):
            found[name] = map_npy(Path(value), name)
        elif "," in value:
            found[name] = given_value(name, value)
        else:
            found[name] = value
    return found


def steps(kernel: Kernel, texts: Sequence[str], option: str, given: Mapping[str, Any]) -> int | dict[str, int] | None:
    """``--hop`` or ``--lead``: one number for all arrays that are cut, or some by name. Sizes may stand in it."""
    from vliwsim.kernel.recording import expression, value_of

    found: dict[str, Any] = {}
    for text in texts:
        name, sign, value = (part.strip() for part in text.partition("="))
        if not sign:
            name, value = "", name
        if name in found or (found and "" in (name, *found)):
            raise OptionError(problem("bad-option", f"--{option} {text} besides another", "one for all, or one a name"))
        what = f"--{option}"
        found[name] = value_of(what, expression(what, value), {**kernel.constants, **given})
    return found.get("", found) if found else None


def run_frames(
    kernel: Kernel, reference: Reference | None, given: dict[str, Any], targets: Mapping[str, Path], options: Any
) -> FramesRun:
    """Do it, with progress, and keep what is asked for."""
    from vliwsim.faces.progress import Watcher
    from vliwsim.kernel.frames import run_frames as run
    from vliwsim.kernel.runner import LIMIT

    numbers = {name: value for name, value in given.items() if isinstance(value, (int, float))}
    with contextlib.ExitStack() as stack:
        files = {name: stack.enter_context(_ArrayFile(path)) for name, path in targets.items()}

        def take(name: str, array: np.ndarray) -> None:
            if name in files:
                files[name].add(array)

        watcher = stack.enter_context(Watcher(f"{kernel.name} on {kernel.core.name}", "frame"))
        found = run(
            kernel,
            frames_given(kernel, options["frames"]),
            given,
            hop=steps(kernel, options["hop"], "hop", numbers),
            lead=steps(kernel, options["lead"], "lead", numbers) or 0,
            pad=options["pad"],
            reference=reference,
            limit=options["limit"] or LIMIT,
            engine=options["engine"] or "auto",
            look=watcher,
            take=take,
        )
        if found.reason == "halt":
            for file in files.values():
                file.keep(options["replace"])
    return found


class _ArrayFile:
    """A ``.npy`` file that grows, and gets its name when it is whole."""

    def __init__(self, path: Path) -> None:
        self.path, self.count = path, 0
        self.array: np.ndarray | None = None
        self.file: Aside | None = None

    def __enter__(self) -> _ArrayFile:
        from vliwsim.kernel.files import Aside

        self.file = Aside(self.path).__enter__()
        return self

    def __exit__(self, *what: object) -> None:
        assert self.file is not None
        self.file.__exit__(*what)

    def add(self, array: np.ndarray) -> None:
        assert self.file is not None
        if self.array is None:
            self.array = array[:0]
            self.file.write(lambda stream: stream.write(self._header()))
        self.count += len(array)
        self.file.write(lambda stream: stream.write(array.tobytes()))

    def keep(self, replace: bool) -> None:
        assert self.file is not None
        header = self._header()

        def finish(stream: Any) -> None:
            stream.seek(0)
            stream.write(header)

        self.file.write(finish)
        self.file.keep(replace=replace)

    def _header(self) -> bytes:
        """Of as many entries as there are now; always of one length, since numbers leave room to grow."""
        import io

        import numpy as np

        assert self.array is not None
        shape = (self.count, *self.array.shape[1:])
        stream = io.BytesIO()
        np.lib.format.write_array_header_1_0(
            stream, {"descr": self.array.dtype.str, "fortran_order": False, "shape": shape}
        )
        return stream.getvalue()


# ---------------------------------------------------------------------------------------------------------- the report


def report(run: FramesRun, all_notes: bool = False) -> str:
    """The whole report, no trailing newline."""
    parts = [[run.verdict], list(_differences(run)), [*account_lines(run.account, run.reason), *_frame_lines(run)]]
    parts += [str(p).splitlines() for p in run.problems]
    parts.append([*_left_over(run), *note_lines(run.notes, all_notes)])
    return "\n\n".join("\n".join(lines) for lines in parts if lines)


def _differences(run: FramesRun) -> Iterator[str]:
    width = max((len(element(name, d)) for name, (_, d) in run.differences.items()), default=0)
    for name, (frame, difference) in run.differences.items():
        yield f"  frame {frame}  {element(name, difference):<{width}}  {difference_values(difference)}"


def _frame_lines(run: FramesRun) -> Iterator[str]:
    if not run.frames:
        return
    low, median, high = run.spread.values()
    if low == high:
        yield f"  Every frame takes {low} cycles{_budget(run)}."
    else:
        slowest = int(run.cycles.argmax())
        yield f"  A frame takes {low} to {high} cycles, median {median:g}; frame {slowest} takes most{_budget(run)}."
    if run.first_over is not None:
        assert run.budgets is not None
        took, allowed = run.cycles[run.first_over], run.budgets[run.first_over]
        yield f"  Frame {run.first_over} is the first over budget: {took} cycles of {allowed:.10g}."


def _budget(run: FramesRun) -> str:
    if run.allowed is None:
        return ""
    low, _, high = run.allowed.spread
    return f", budget {low:.10g}" if low == high else f", budgets {low:.10g} to {high:.10g}"


def _left_over(run: FramesRun) -> Iterator[str]:
    for signal in run.signals:
        rest = signal.rest(run.wanted)
        if rest > 0:
            yield f"  note     {rest} of {len(signal.samples)} samples of {signal.name} fill no frame: left out (--pad)"
        elif rest < 0:
            yield f"  note     {-rest} zeros fill up the last frame of {signal.name}"
