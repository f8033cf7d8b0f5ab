"""Many runs of one program: a compiled loop over cases, on all processors, and the account of all of them together.

A case runs in plain code until it meets undefined data, and from there in code that carries undefined bytes along; one
that either gives back for another reason is left to the caller.
"""

from __future__ import annotations

import ctypes
import threading
from collections.abc import Collection, Mapping, Sequence
from typing import Any, cast

import attrs
import numpy as np

from vliwsim.machine.memory import DEFINED, Memory, Region
from vliwsim.machine.state import CAUSES, State
from vliwsim.machine.stepper import Machine
from vliwsim.native import cache, driver, exchange
from vliwsim.native.contexts import Context, Contexts
from vliwsim.native.loaded import Loaded
from vliwsim.native.region import MOST_CONTEXTS
from vliwsim.native.region import Region as Contextual
from vliwsim.native.translate import Translation

SLICE = 1 << 23
"""Cycles of a case between two looks at whether to go on, at most: well below a tenth of a second."""

NEAR = 256
"""Bytes between two regions whose status is copied in one go all the same."""

FOLLOWING_EFFORT = 0
"""LLVM's optimisation level for code that follows undefined bytes: three times the text, mostly run for a few beats."""

ROW, SHARED, BEFORE = 0, 1, 2
"""Where a register or a piece of memory comes from: the case's row, what all cases share, the result before."""

TOTALS = ("totals", "stalled", "backs", "halts", "drains")

_MANY = ctypes.CFUNCTYPE(ctypes.c_int64, ctypes.c_void_p, ctypes.c_int64)


@attrs.frozen(eq=False)
class Plan:
    """Where everything of a case stands; the same for all cases that are run together.

    ``registers``: (number, offset, source) of 32-bit values; ``image``: start values of all registers, for those that
    are given and the same for all. ``pieces``: (address, bytes, offset, source) of what is put into memory. Offsets are
    bytes in the row, in ``shared`` or in a result. What a case gives back: ``values`` (register, mask of the bytes that
    matter) and ``arrays`` (address, bytes). ``row``: bytes of a case's row.
    """

    regions: tuple[Region, ...]
    image: np.ndarray
    registers: tuple[tuple[int, int, int], ...]
    pieces: tuple[tuple[int, int, int, int], ...]
    values: tuple[tuple[int, int], ...]
    arrays: tuple[tuple[int, int], ...]
    row: int
    shared: bytes

    @property
    def value_places(self) -> list[int]:
        """Offsets of the values in a result."""
        return [driver.DATA + 4 * k for k in range(len(self.values))]

    @property
    def array_places(self) -> list[int]:
        """Offsets of the arrays in a result."""
        at, places = driver.DATA + 8 * -(-len(self.values) // 2), []
        for _, size in self.arrays:
            places.append(at)
            at += 8 * -(-size // 8)
        return [*places, at]

    @property
    def result(self) -> int:
        """Bytes of a result."""
        return self.array_places[-1]


Totals = Mapping[str, Mapping[str, np.ndarray]]
"""Counters of each translation, of many cases added up; :meth:`Batch.counted` makes an account of them."""


@attrs.frozen(eq=False)
class Results:
    """What some cases gave, a row each: ``rows`` as the plan says. ``finished``: ran through within the limit;
    ``defined``: and all outputs are; ``cycles``: drain included. ``totals``: the counters of those that are both."""

    plan: Plan
    rows: np.ndarray
    totals: Totals

    @property
    def finished(self) -> np.ndarray:
        return self._number(driver.REASON) == exchange.HALTED

    @property
    def defined(self) -> np.ndarray:
        return self._number(driver.DEFINED) != 0

    @property
    def cycles(self) -> np.ndarray:
        return self._number(driver.CYCLES)

    def value(self, k: int) -> np.ndarray:
        """Raw 32-bit value ``k`` of every case."""
        at = self.plan.value_places[k]
        return np.ascontiguousarray(self.rows[:, at : at + 4]).view(np.uint32)[:, 0]

    def array(self, k: int) -> np.ndarray:
        """The bytes of array ``k``, a row a case."""
        at = self.plan.array_places[k]
        return np.ascontiguousarray(self.rows[:, at : at + self.plan.arrays[k][1]])

    def _number(self, at: int) -> np.ndarray:
        return np.ascontiguousarray(self.rows[:, at : at + 8]).view(np.int64)[:, 0]


class Counted:
    """What the cases that ran through counted: as a machine's state has it, all cases added up.

    ``halts``: for each bundle how many cases halted in it, and the drain there.
    """

    def __init__(self, bundles: int) -> None:
        self.cycle = self.beat = self.issue = 0
        self.counts, self.begun = [0] * bundles, [0] * bundles
        self.stalls = dict.fromkeys(CAUSES, 0)
        self.halts: dict[int, tuple[int, int]] = {}

    def add(self, other: Counted, times: int = 1) -> None:
        self.cycle += times * other.cycle
        self.beat += times * other.beat
        self.issue += times * other.issue
        for own, more in ((self.counts, other.counts), (self.begun, other.begun)):
            own[:] = [one + times * two for one, two in zip(own, more, strict=True)]
        for cause, stalls in other.stalls.items():
            self.stalls[cause] += times * stalls
        for bundle, (halts, drain) in other.halts.items():
            self.halt(bundle, times * halts, times * drain)

    def add_run(
        self, counts: Sequence[int], begun: Sequence[int], stalls: Mapping[str, int], bundle: int | None, drain: int
    ) -> None:
        """A run by itself, with the bundle it halted in."""
        other = Counted(len(self.counts))
        other.counts[:], other.begun[:], other.issue = counts, begun, sum(counts)
        other.stalls.update(stalls)
        other.beat = other.cycle = other.issue + sum(stalls.values())
        self.add(other)
        if bundle is not None:
            self.halt(bundle, 1, drain)

    def halt(self, bundle: int, halts: int, drain: int) -> None:
        before = self.halts.get(bundle, (0, 0))
        self.halts[bundle] = (before[0] + halts, before[1] + drain)

    @property
    def drain(self) -> int:
        return sum(drain for _, drain in self.halts.values())


class _Side:
    """One translation, and what one count of each of its counters means."""

    def __init__(self, machine: Machine, translation: Translation) -> None:
        code = cache.code_of(translation.text("run"), FOLLOWING_EFFORT if translation.following else 2)
        self.loaded = Loaded(machine, translation, code)
        self.function = code.address("run")
        self.bytes = translation.layout.bytes
        self.counters = len(self.loaded.counts)
        self.contexts = len(self.loaded.region) + len(self.loaded.outside)
        units = [self.tallied(counter=k) for k in range(self.counters)]
        self.weights = np.array([unit.beat for unit in units] or [0], np.int64)
        inside = range(len(self.loaded.region))
        self.left = np.zeros(self.contexts, np.int64)
        self.left[inside] = [-self.tallied(given_back=k).beat for k in inside]
        self.fuelled = np.full(self.contexts, -1, np.int64)
        for k in set(translation.entries) & set(self.loaded.region.heads):
            counter = translation.chain_counter[translation.chain[k]]
            if int(self.weights[counter]) == int(self.left[k]):  # all that its chain counts lies behind it
                self.fuelled[k] = counter

    def tallied(self, counter: int | None = None, given_back: int | None = None) -> Counted:
        """What one count of a counter means, or how much too much is counted of a context that is given back."""
        counts = np.zeros(self.counters, np.int64)
        if counter is not None:
            counts[counter] = 1
        return self.counted(counts, [0] * len(driver.CAUSES), given_back)

    def counted(self, counts: np.ndarray, stalls: Sequence[int], given_back: int | None = None) -> Counted:
        loaded, found = self.loaded, Counted(len(self.loaded.machine.program.bundles))
        loaded.header[:] = 0
        loaded.header[list(driver.CAUSES)] = stalls
        loaded.counts[:] = counts
        reason = exchange.HALTED if given_back is None else exchange.GIVEN_BACK
        loaded.account(cast(State, found), given_back or 0, reason)
        return found


class Batch:
    """A program made ready for many cases, of any sizes.

    ``given``: numbers of the registers every case gives. ``most``: contexts of the translation.
    """

    def __init__(self, machine: Machine, given: Collection[int], most: int = MOST_CONTEXTS) -> None:
        self.machine = machine
        core = machine.core
        self.registers = len(core.register_names)
        self.defined = {*given, *(core.register_numbers[name] for name in core.zero_registers)}
        undefined = sum(1 << r for r in range(self.registers) if r not in self.defined)
        self.region = Contextual(Contexts(machine.ready), Context(0), undefined, most)
        self.plain = _Side(machine, Translation(self.region))
        self.code = cache.code_of(driver.Driver().text(), 2)
        self.origin = np.arange(self.plain.contexts)
        for own, copy in self.region.copy.items():
            self.origin[copy] = own
        self._following: _Side | None = None
        self._lock = threading.Lock()

    @property
    def following(self) -> _Side:
        """The code that carries undefined bytes along, made when the first case needs it."""
        with self._lock:
            if self._following is None:
                self._following = _Side(self.machine, Translation(self.region, following=True))
            return self._following

    @property
    def known(self) -> _Side | None:
        """That code if it has been made."""
        return self._following

    def counted(self, totals: Totals) -> Counted:
        """The account that counters stand for."""
        total = Counted(len(self.machine.program.bundles))
        with self._lock:
            for name, made in totals.items():
                side = self.plain if name == "plain" else self._following
                assert side is not None
                total.add(side.counted(made["totals"], made["stalled"].tolist()))
                for k in np.flatnonzero(made["backs"]).tolist():
                    total.add(side.tallied(given_back=k), int(made["backs"][k]))
                for k in np.flatnonzero(made["halts"]).tolist():
                    bundle = side.loaded.region.steps[k].context.at
                    total.halt(bundle, int(made["halts"][k]), int(made["drains"][k]))
        return total

    def fuel(self, limit: int) -> int:
        """Passes of loop heads that take no more than ``limit`` cycles."""
        return max(0, min(1 << 60, (limit - self.region.reach) // self.region.span - 1))


class Worker:
    """Buffers for running cases of a plan on one processor at a time, and the totals of what has been run in them.

    ``stop``: one 64-bit number; when somebody makes it other than 0, what runs ends within a fraction of a second.
    ``chained``: cases take what comes from the result before from that of the case before, and the first that does not
    run through, with all outputs defined, ends the row of them.
    """

    def __init__(self, batch: Batch, plan: Plan, stop: np.ndarray, *, chained: bool = False) -> None:
        self.batch, self.plan, self.chained = batch, plan, chained
        memory = Memory(batch.machine.core.memory, plan.regions)
        spans = _spans(plan.regions, len(memory.status))
        for address, size, _, _ in plan.pieces:
            memory.define(address, bytes(size))
        template = b"".join(bytes(memory.status[start : start + size]) for start, size, _ in spans)
        self.memory = np.zeros(len(memory.bytes), np.uint8)
        self.status = np.zeros(len(memory.status), np.uint8)
        self.stop = stop
        tables: dict[str, np.ndarray] = {
            "memory": self.memory,
            "status": self.status,
            "template": np.frombuffer(template or b"\0", np.uint8),
            "spans": _table(spans, 3),
            "shared": np.frombuffer(plan.shared or b"\0", np.uint8),
            "image": plan.image,
            "masks": np.array([0 if r in batch.defined else 15 for r in range(batch.registers)], np.uint8),
            "registers": _table(plan.registers, 3),
            "pieces": _table(plan.pieces, 4),
            "values": _table([(*v, at) for v, at in zip(plan.values, plan.value_places, strict=True)], 3),
            "arrays": _table([(*a, at) for a, at in zip(plan.arrays, plan.array_places, strict=False)], 3),
            "ones": np.full(max([1, *(size for _, size in plan.arrays)]), DEFINED, np.uint8),
            "stop": self.stop,
            "origin": batch.origin,
        }
        layout = batch.plain.loaded.layout
        numbers = {
            "spans.number": len(spans), "row": plan.row, "result": plan.result,
            "image.bytes": 4 * batch.registers, "masks.bytes": batch.registers,
            "registers.place": layout.registers, "masks.place": layout.masks, "handed": layout.counts,
            "registers.number": len(plan.registers), "pieces.number": len(plan.pieces),
            "values.number": len(plan.values), "arrays.number": len(plan.arrays),
            "slice": max(1, SLICE // batch.region.span), "chained": int(chained),
        }  # fmt: skip
        self.numbers = np.zeros(len(driver.PLAN), np.int64)
        self.kept: list[object] = [tables]
        self._put({**numbers, **{name: table.ctypes.data for name, table in tables.items()}})
        self.last = np.zeros(plan.result, np.uint8)
        self.ended = False
        self.sides: dict[str, tuple[_Side, dict[str, np.ndarray]]] = {}
        self._side("plain", batch.plain)
        self._function = _MANY(batch.code.address("many"))

    def _put(self, numbers: Mapping[str, int]) -> None:
        for name, number in numbers.items():
            self.numbers[driver.INDEX[name]] = number

    def _side(self, name: str, side: _Side) -> None:
        block = np.zeros(side.bytes, np.uint8)
        layout = side.loaded.layout
        block[layout.noted :] = 1  # every note has been made: nothing is given back for one
        contexts = np.zeros((3, side.contexts), np.int64)
        made = {
            "block": block, "weights": side.weights, "left": side.left, "fuelled": side.fuelled,
            "totals": np.zeros(side.counters, np.int64),
            "stalls": np.zeros(len(driver.CAUSES), np.int64), "stalled": np.zeros(len(driver.CAUSES), np.int64),
            "backs": contexts[0], "halts": contexts[1], "drains": contexts[2],
        }  # fmt: skip
        self.sides[name] = side, made
        self._put({f"{name}.{key}": table.ctypes.data for key, table in made.items()})
        self._put({f"{name}.function": side.function, f"{name}.counters": side.counters})
        self._put({f"{name}.counts": block.ctypes.data + layout.counts})

    def run(self, rows: np.ndarray, results: np.ndarray, limit: int, before: np.ndarray | None = None) -> int:
        """Run the cases of ``rows``, filling the same rows of ``results``; how many were run.

        ``limit``: cycles a case. ``before``: what the first case takes for the result before; None goes on from the
        last of the run before, and runs nothing if that one's chain had ended. Fewer are run when somebody sets
        ``stop``, or a chain ends. The interpreter is free meanwhile.
        """
        plan, done = self.plan, 0
        assert rows.shape == (len(results), plan.row)
        assert results.shape[1:] == (plan.result,)
        if before is None and self.ended:
            return 0
        first = np.ascontiguousarray(self.last if before is None else before)
        self._put({"limit": limit, "fuel": self.batch.fuel(limit), "before": first.ctypes.data})
        while done < len(rows):
            last = results[done - 1] if done else first
            if done:
                self._put({"before": last.ctypes.data})
            self._put({"rows": rows[done:].ctypes.data, "results": results[done:].ctypes.data, "wanted": 0})
            if self.batch.known is not None and "following" not in self.sides:
                self._side("following", self.batch.following)
            done += self._function(self.numbers.ctypes.data, len(rows) - done)
            if not self.numbers[driver.INDEX["wanted"]]:
                break
            self._side("following", self.batch.following)
        if self.chained:
            self.ended = done < len(rows) or not Results(plan, results[done - 1 : done], {}).defined.all()
            self.last = results[done - 1].copy() if done else first
        return done

    def totals(self) -> Totals:
        """The counters of what has run through since this was asked last."""
        taken = {}
        for name, (_, made) in self.sides.items():
            taken[name] = {key: made[key].copy() for key in TOTALS}
            for key in TOTALS:
                made[key][:] = 0
        return taken


def _spans(regions: Sequence[Region], size: int) -> list[tuple[int, int, int]]:
    """(address, bytes, bytes of those before) that hold all regions, near ones in one."""
    found: list[tuple[int, int, int]] = []
    for region in sorted(regions, key=lambda region: region.start):
        end = min(region.start + region.bytes + region.over, size)
        start, bytes_, before = found[-1] if found else (0, 0, 0)
        if found and region.start - (start + bytes_) <= NEAR:
            found[-1] = start, max(bytes_, end - start), before
        else:
            found.append((region.start, max(0, end - region.start), before + bytes_))
    return found


def _table(rows: Sequence[Sequence[int]], width: int) -> np.ndarray[Any, Any]:
    return np.array(rows or [[0] * width], np.int64).reshape(-1, width)
