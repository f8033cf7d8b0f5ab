"""Many runs of one program: a compiled loop over cases, on all processors.

All cases have their arrays in the same places. A case runs in plain code until it meets undefined data, and from there
in code that carries undefined bytes along; one that either gives back for another reason is left to the caller.
"""

from __future__ import annotations

import ctypes
import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor

import numpy as np

from vliwsim.machine.memory import Memory, Region
from vliwsim.machine.stepper import Machine
from vliwsim.native import cache, exchange
from vliwsim.native.contexts import Context, Contexts
from vliwsim.native.exchange import HALTED
from vliwsim.native.region import Region as Contextual
from vliwsim.native.text import Text
from vliwsim.native.translate import Translation

CHUNK = 2048
"""Cases handed to a processor at a time."""

_MANY = ctypes.CFUNCTYPE(None, *[ctypes.c_void_p] * 6, ctypes.c_int64, ctypes.c_int64)
Piece = tuple[int, int]
"""(address, bytes)"""


class Batch:
    """A program made ready for many cases.

    ``given``: numbers of the registers that every case gives. ``regions``: the arrays. ``pieces``: (address, bytes) of
    what every case puts into memory, ``outputs`` of what it gives back. A row holds a case's registers (32 bits each,
    all of the core's) and its pieces, one behind the other.
    """

    def __init__(
        self,
        machine: Machine,
        given: Sequence[int],
        regions: Sequence[Region],
        pieces: Sequence[Piece],
        outputs: Sequence[Piece],
    ) -> None:
        self.machine, self.regions, self.pieces, self.outputs = machine, regions, tuple(pieces), tuple(outputs)
        core = machine.core
        self.registers = len(core.register_names)
        zero = {core.register_numbers[name] for name in core.zero_registers}
        defined = {*given, *zero}
        undefined = sum(1 << r for r in range(self.registers) if r not in defined)
        region = Contextual(Contexts(machine.ready), Context(0), undefined)
        self.plain, self.following = Translation(region), Translation(region, following=True)
        self.row = 4 * self.registers + sum(size for _, size in pieces)
        self.result = 16 + 5 * self.registers + 2 * sum(size for _, size in outputs)
        self.template = Memory(core.memory, regions)
        for address, size in pieces:
            self.template.define(address, bytes(size))
        masks = bytes(0 if r in defined else 15 for r in range(self.registers))
        status = b"".join(bytes(self.template.status[r.start : r.start + r.bytes]) for r in regions)
        self.fixed = np.frombuffer(masks + status, np.uint8).copy()
        text = self.plain.text("run") + self.following.text("follow") + _Many(self).text()
        self.code = cache.code_of(text, 2)
        self.function = _MANY(self.code.address("many"))

    def run(
        self, rows: Callable[[int, int], np.ndarray], count: int, fuel: int, progress: Callable[[int], None] | None
    ) -> np.ndarray:
        """Results of ``count`` cases, a row each; ``rows(first, last)`` gives the rows of some. See :meth:`parts`."""
        results = np.zeros((count, self.result), np.uint8)
        done = 0

        def some(first: int) -> int:
            last = min(first + CHUNK, count)
            self._some(np.ascontiguousarray(rows(first, last)), results[first:last], fuel)
            return last - first

        with ThreadPoolExecutor(os.cpu_count() or 1) as pool:
            for finished in pool.map(some, range(0, count, CHUNK)):
                done += finished
                if progress:
                    progress(done)
        return results

    def _some(self, rows: np.ndarray, results: np.ndarray, fuel: int) -> None:
        block = np.zeros(max(self.plain.layout.bytes, self.following.layout.bytes), np.uint8)
        memory = np.zeros(len(self.template.bytes), np.uint8)
        status = np.frombuffer(bytes(self.template.status), np.uint8).copy()
        arrays = (block, memory, status, rows, results, self.fixed)
        self.function(*[array.ctypes.data for array in arrays], len(rows), fuel)

    def parts(self, results: np.ndarray) -> Mapping[str, np.ndarray]:
        """What a matrix of results holds: ``finished`` (did it halt), ``cycles``, ``registers``, ``masks`` (undefined
        bytes), and for output k ``data k`` and ``status k``."""
        at = 16 + 4 * self.registers
        found = {
            "finished": results[:, :8].copy().view(np.int64)[:, 0] == HALTED,
            "cycles": results[:, 8:16].copy().view(np.int64)[:, 0],
            "registers": results[:, 16:at].copy().view(np.uint32),
            "masks": results[:, at : at + self.registers],
        }
        at += self.registers
        for k, (_, size) in enumerate(self.outputs):
            found[f"data {k}"], found[f"status {k}"] = results[:, at : at + size], results[:, at + size : at + 2 * size]
            at += 2 * size
        return found


class _Many(Text):
    """Writes the loop over cases."""

    def __init__(self, batch: Batch) -> None:
        super().__init__()
        self.batch = batch
        self.globals: list[str] = []

    def text(self) -> str:
        batch, put = self.batch, self.put
        registers, layout = batch.registers, batch.plain.layout
        put("br label %test")
        self.block("test")
        put("%c = phi i64 [0, %start], [%next, %end]")
        put("%more = icmp slt i64 %c, %count")
        put("br i1 %more, label %case, label %over")
        self.block("over")
        put("ret void")
        self.block("case")
        row = self.at("%rows", self.let(f"mul i64 %c, {batch.row}"))
        result = self.at("%results", self.let(f"mul i64 %c, {batch.result}"))
        self.copy(self.at("%io", layout.registers), row, 4 * registers)
        self.copy(self.at("%io", layout.masks), "%fixed", registers)
        offset = registers
        for region in batch.regions:
            self.copy(self.at("%status", region.start), self.at("%fixed", offset), region.bytes)
            offset += region.bytes
        offset = 4 * registers
        for address, size in batch.pieces:
            self.copy(self.at("%mem", address), self.at(row, offset), size)
            offset += size
        put(f"store i64 0, ptr {self.header(exchange.CONTEXT)}")
        put(f"store i64 %fuel, ptr {self.header(exchange.FUEL)}")
        first = self.run(batch.plain, "run")
        reason = self.let(f"load i64, ptr {self.header(exchange.REASON)}")
        put(f"br i1 {self.compare('eq', 'i64', reason, str(exchange.GIVEN_BACK))}, label %again, label %join")
        self.block("again")
        second = self.let(f"add i64 {first}, {self.run(batch.following, 'follow')}")
        put("br label %join")
        self.block("join")
        total = self.let(f"phi i64 [{first}, %case], [{second}, %again]")
        reason = self.let(f"load i64, ptr {self.header(exchange.REASON)}")
        last = self.let(f"sub i64 {self.let(f'load i64, ptr {self.header(exchange.LAST)}')}, 1")
        drain = self.let(f"call i64 @llvm.smax.i64(i64 {last}, i64 0)")
        halted = self.compare("eq", "i64", reason, str(HALTED))
        total = self.let(f"add i64 {total}, {self.select(halted, 'i64', drain, '0')}")
        put(f"store i64 {reason}, ptr {result}, align 1")
        put(f"store i64 {total}, ptr {self.at(result, 8)}, align 1")
        self.copy(self.at(result, 16), self.at("%io", layout.registers), 4 * registers)
        self.copy(self.at(result, 16 + 4 * registers), self.at("%io", layout.masks), registers)
        offset = 16 + 5 * registers
        for address, size in batch.outputs:
            self.copy(self.at(result, offset), self.at("%mem", address), size)
            self.copy(self.at(result, offset + size), self.at("%status", address), size)
            offset += 2 * size
        put("br label %end")
        self.block("end")
        put("%next = add i64 %c, 1")
        put("br label %test")
        names = ("io", "mem", "status", "rows", "results", "fixed")
        parameters = ", ".join(f"ptr noalias %{name}" for name in names)
        head = f"define void @many({parameters}, i64 %count, i64 %fuel) nounwind {{\nstart:\n"
        return "\n".join(self.globals) + "\n" + head + "\n".join(self.lines) + "\n}\n"

    def header(self, number: int) -> str:
        return self.at("%io", 8 * number)

    def at(self, base: str, offset: int | str) -> str:
        return self.let(f"getelementptr i8, ptr {base}, i64 {offset}")

    def copy(self, to: str, source: str, size: int) -> None:
        if size:
            self.put(f"call void @llvm.memcpy.p0.p0.i64(ptr {to}, ptr {source}, i64 {size}, i1 false)")

    def run(self, translation: Translation, name: str) -> str:
        """A call of the code; the cycles it took, without drain."""
        layout = translation.layout
        counters = layout.noted - layout.counts
        self.put(f"call void @llvm.memset.p0.i64(ptr {self.at('%io', layout.counts)}, i8 0, i64 {counters}, i1 false)")
        notes = layout.bytes - layout.noted
        self.put(f"call void @llvm.memset.p0.i64(ptr {self.at('%io', layout.noted)}, i8 1, i64 {notes}, i1 false)")
        self.put(f"call void @{name}(ptr %io, ptr %mem, ptr %status)")
        total = "0"
        for number, weight in sorted(weights(translation).items()):
            times = self.let(f"load i64, ptr {self.at('%io', layout.counts + 8 * number)}")
            times = self.let(f"mul i64 {times}, {weight}") if weight != 1 else times
            total = self.let(f"add i64 {total}, {times}")
        for cause in range(exchange.BANK, exchange.FRESH + 1):
            total = self.let(f"add i64 {total}, {self.let(f'load i64, ptr {self.header(cause)}')}")
        left = list(unfinished(translation))
        values = ", ".join(f"i64 {one}" for one in left)
        self.globals.append(f"@left.{name} = internal constant [{len(left)} x i64] [{values}]")
        context = self.let(f"load i64, ptr {self.header(exchange.CONTEXT)}")
        reason = self.let(f"load i64, ptr {self.header(exchange.REASON)}")
        back = self.compare("eq", "i64", reason, str(exchange.GIVEN_BACK))
        where = self.select(back, "i64", context, "0")
        place = self.let(f"getelementptr i64, ptr @left.{name}, i64 {where}")
        less = self.select(back, "i64", self.let(f"load i64, ptr {place}"), "0")
        return self.let(f"sub i64 {total}, {less}")


def weights(translation: Translation) -> dict[int, int]:
    """Beats that one count of each counter stands for."""
    found: dict[int, int] = {}
    for first in translation.chain:
        number = translation.chain_counter[first]
        found[number] = found.get(number, 0) + 1
    for (k, kind), number in translation.edge_counter.items():
        if kind == "out":  # the rest of the last pass is not run
            chain = translation.chain_counter[translation.chain[k]]
            found[number] = translation.region.place[k] + 1 - found[chain]
    return found


def unfinished(translation: Translation) -> Iterator[int]:
    """For every context, beats that its chain's count stands for and that were not run when it is given back."""
    lengths: dict[int, int] = {}
    for first in translation.chain:
        lengths[first] = lengths.get(first, 0) + 1
    for k, first in enumerate(translation.chain):
        yield lengths[first] - (0 if translation.following else translation.region.place[k])
