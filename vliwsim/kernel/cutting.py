"""The inputs of every frame of a recording, from what a caller gives: what is cut and how, and what never differs."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.recording import Computed, Rows, Signal, Source, expression, whole_number
from vliwsim.kernel.sizes import formula_value
from vliwsim.problems import InterfaceError, Problem, problem
from vliwsim.program.kernel import Item, Kernel


class Cut:
    """The inputs of every frame. ``sources`` by name; ``count``: frames there are; ``given``: what never differs."""

    def __init__(
        self,
        kernel: Kernel,
        frames: Mapping[str, Any],
        given: Mapping[str, Any],
        hop: int | Mapping[str, int] | None,
        lead: int | Mapping[str, int],
        pad: bool,
    ) -> None:
        self.kernel, self.interface, self.given = kernel, interface_of(kernel), dict(given)
        self.hop, self.lead, self.pad = hop, lead, pad
        self.sources: dict[str, Source] = {}
        for name, value in frames.items():
            item = self.interface.inputs.get(name)
            if item is None or item.kind == "changes" or name in given:
                raise InterfaceError(self._no_frames(name, item, name in given))
            self.sources[name] = self._source(item, value)
        counts = {name: s.count for name, s in self.sources.items() if s.count is not None}
        if len(set(counts.values())) != 1:
            shown = ", ".join(f"{name}: {count}" for name, count in counts.items()) or "nothing that is cut"
            raise InterfaceError(problem("frame-count", shown, "recordings of one number of frames"))
        self.count = next(iter(counts.values()))
        if not self.count:
            short = ", ".join(f"{s.name} has {len(s.samples)} of {s.length}" for s in self.signals) or "no row"
            raise InterfaceError(problem("frame-count", f"no whole frame: {short}", "at least one frame", "--pad"))
        for name in {*self._names(hop), *self._names(lead)}:
            if not isinstance(self.sources.get(name), Signal):
                raise InterfaceError(problem("frame-step", f"a hop or lead of {name}", "of an array that is cut"))

    @property
    def signals(self) -> tuple[Signal, ...]:
        return tuple(source for source in self.sources.values() if isinstance(source, Signal))

    @staticmethod
    def _names(value: object) -> list[str]:
        return list(value) if isinstance(value, Mapping) else []

    def _no_frames(self, name: str, item: Item | None, twice: bool) -> Problem:
        inputs = [n for n, i in self.interface.inputs.items() if i.kind != "changes"]
        if twice:
            found = f"{name} is given once for all frames and once for each"
        elif item is not None:
            found = f"{name} is what the kernel changes: each frame takes it from the one before"
        else:
            found = f"{self.kernel.name} has no input {name}"
        return problem("frame-input", found, f"given inputs: {', '.join(inputs) or 'none'}")

    def _source(self, item: Item, value: Any) -> Source:
        element, name = self.interface.element(item.name), item.name
        if isinstance(value, str):
            if item.size is not None:
                raise InterfaceError(problem("frame-input", f"{name} is an array", "samples, or the file they are in"))
            known = {**self.kernel.constants, **{n: v for n, v in self.given.items() if isinstance(v, (int, float))}}
            return Computed(name, element, expression(name, value), known)
        samples = value if isinstance(value, np.ndarray) else np.asarray(value)
        wanted = (1,) if item.size is None else (1, 2)
        if samples.dtype.kind not in "iuf" or samples.ndim not in wanted:
            found = f"{name} has {samples.ndim} dimensions, of type {samples.dtype}"
            allowed = "numbers, one a frame" if item.size is None else "numbers: one dimension to cut, or a row a frame"
            raise InterfaceError(problem("frame-input", found, allowed))
        if item.size is None or samples.ndim == 2:
            return Rows(name, element, samples)
        length = self._length(item)
        hop = self.hop.get(name) if isinstance(self.hop, Mapping) else self.hop
        lead = self.lead.get(name, 0) if isinstance(self.lead, Mapping) else self.lead
        step = length if hop is None else whole_number(f"the hop of {name}", hop, 1)
        return Signal(name, element, samples, length, step, whole_number(f"the lead of {name}", lead, 0), self.pad)

    def _length(self, item: Item) -> int:
        """Samples of a frame, from the sizes that are given."""
        assert item.size is not None
        names = {**self.kernel.constants, **self.given}
        missing = sorted(item.size.names - names.keys())
        if missing:
            found = f"how long a frame of {item.name} is: no value for {', '.join(missing)}"
            remedy = " ".join(f"--give {name}=…" for name in missing)
            raise InterfaceError(problem("frame-length", found, f"{item.size.text.strip()} of given sizes", remedy))
        problems: list[Problem] = []
        value = formula_value(item.size, names, problems)
        if problems:
            raise InterfaceError(problems)
        if isinstance(value, bool) or not isinstance(value, int) or value < 1:
            found = f"frames of {item.name} have {value} samples ({item.size.text.strip()})"
            raise InterfaceError(problem("frame-length", found, "a whole number, 1 or more"))
        return value

    def frames(self, first: int, last: int) -> dict[str, np.ndarray]:
        return {name: source.frames(first, last) for name, source in self.sources.items()}

    def inputs(self, frame: int, carried: Mapping[str, Any]) -> dict[str, Any]:
        """The inputs of one frame."""
        own = {name: array[0] for name, array in self.frames(frame, frame + 1).items()}
        return {**self.given, **carried, **own}
