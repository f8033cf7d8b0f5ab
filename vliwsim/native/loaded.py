"""A region's machine code, and the hand-over between a machine's state and it."""

from __future__ import annotations

import ctypes

import numpy as np

from vliwsim.description.values import Undefined, Value, parts, value_of
from vliwsim.machine.state import NEVER, State
from vliwsim.machine.stepper import Machine
from vliwsim.native import exchange
from vliwsim.native.compiler import Code
from vliwsim.native.contexts import Context
from vliwsim.native.translate import Translation

Match = tuple[int, list[Value], list[int], list[int]]
"""A context index, and for its flights their values and bits, and the bits of its turns."""

_FUNCTION = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_void_p)


class Loaded:
    """One region, ready to run for one machine."""

    def __init__(self, machine: Machine, translation: Translation, code: Code) -> None:
        self.machine, self.translation, self.code = machine, translation, code
        self.following = translation.following
        self.region, self.layout = translation.region, translation.layout
        self.function = _FUNCTION(code.address("run"))
        self.block = np.zeros(self.layout.bytes, np.uint8)
        self.pointer = self.block.ctypes.data
        at = self.layout
        self.header = self.view(0, np.int64, exchange.HEADER)
        self.registers = self.view(at.registers, np.uint32, len(machine.core.register_names))
        self.masks = self.view(at.masks, np.uint8, len(machine.core.register_names))
        flights = at.value_masks - at.values >> 2
        self.values = self.view(at.values, np.uint32, flights)
        self.value_masks = self.view(at.value_masks, np.uint8, at.value_on - at.value_masks)
        self.value_on = self.view(at.value_on, np.uint8, at.turn_on - at.value_on)
        self.turn_on = self.view(at.turn_on, np.uint8, at.counts - at.turn_on)
        self.counts = self.view(at.counts, np.int64, at.noted - at.counts >> 3)
        self.noted = self.view(at.noted, np.uint8, at.bytes - at.noted)
        region = self.region
        self.entries: dict[tuple[int, int, bool], list[int]] = {}
        for k in translation.entries:
            context = region.steps[k].context
            self.entries.setdefault((context.at, context.within, context.waited), []).append(k)
        self.chain_of = np.array([translation.chain_counter[c] for c in translation.chain], np.int64)
        self.place = np.array([0] * len(region) if self.following else region.place, np.int64)
        self.bundle_of = np.array([step.context.at for step in region.steps], np.int64)
        self.beginning = np.array([step.context.within == 0 for step in region.steps], np.int64)
        self.holding = np.array([step.held for step in region.steps], bool)
        self.outside = list(translation.outside)
        edges = translation.edge_counter.items()
        self.edges = [(k, kind, number) for (k, kind), number in edges if kind in ("hold", "fresh")]
        self.ways_out = [(k, kind == "back", number) for (k, kind), number in edges if kind in ("out", "back")]

    def view(self, start: int, kind: type, count: int) -> np.ndarray:
        return np.frombuffer(self.block, kind, count, start)

    # ------------------------------------------------------------------------------------------------------ going in

    def match(self, state: State) -> Match | None:
        """The context to enter at, with what is in flight; None where the state fits none."""
        found = self.entries.get((state.at, state.within, state.waited_fresh))
        if not found or state.frozen or state.service or state.halt_beat is not None:
            return None
        flying = {}
        for beat, batches in state.flight.items():
            for numbers, values in batches:
                for n, value in zip(numbers, values, strict=True):
                    if isinstance(value, Undefined) and not self.following:
                        return None
                    flying[beat - state.beat, n] = value
        undefined = 0
        for register in range(0 if self.following else len(self.registers)):
            if isinstance(state.operands[register], Undefined):
                undefined |= 1 << register
        busy = tuple((slot, until - state.beat) for slot, until in enumerate(state.busy_until) if until > state.beat)
        for k in found:
            context = self.region.steps[k].context
            if undefined & ~self.region.may[k] or context.busy != busy:
                continue
            match = self._fits(k, context, flying, state)
            if match is not None:
                return match
        return None

    def _fits(self, k: int, context: Context, flying: dict[tuple[int, int], Value], state: State) -> Match | None:
        values: list[Value] = []
        bits: list[int] = []
        for flight in context.flights:
            value = flying.get((flight.beats, flight.number))
            if value is None and flight.sure:
                return None
            values.append(0 if value is None else value)
            bits.append(int(value is not None))
        if sum(bits) != len(flying):
            return None
        latency = self.machine.core.branch.latency
        behind = state.issue - state.last_branch
        if max((t.bundles for t in context.turns), default=0) != max(0, latency - behind):
            return None
        redirects = {index - state.issue: target for index, target in state.redirects.items()}
        turns = []
        for turn in context.turns:
            target = self.machine.ready[turn.bundle].parts[turn.part].target
            on = turn.bundles in redirects and redirects[turn.bundles] == target
            if on:
                del redirects[turn.bundles]
            elif turn.sure:
                return None
            turns.append(int(on))
        return None if redirects else (k, values, bits, turns)

    def run(self, state: State, match: Match, fuel: int) -> int:
        """Run from ``match`` for ``fuel`` passes of loop heads at most; the reason it came back."""
        k, values, bits, turns = match
        self.header[:] = 0
        self.header[exchange.CONTEXT], self.header[exchange.FUEL] = k, fuel
        self.counts[:] = 0
        for register in range(len(self.registers)):
            self.registers[register], self.masks[register] = parts(state.operands[register])
        for j, value in enumerate(values):
            self.values[j], self.value_masks[j] = parts(value)
        self.value_on[: len(bits)] = bits
        self.turn_on[: len(turns)] = turns
        self._note(state)
        memory = state.memory
        data = ctypes.addressof(ctypes.c_char.from_buffer(memory.bytes))
        status = ctypes.addressof(ctypes.c_char.from_buffer(memory.status))
        self.function(self.pointer, data, status)
        self._take(state)
        return int(self.header[exchange.REASON])

    def _note(self, state: State) -> None:
        """Mark the notes that have been made."""
        index = self.translation.note_index
        if index:
            self.noted[:] = 0
            for site in state.notes:
                number = index.get((site.name, site.bundle, site.instruction, site.register))
                if number is not None:
                    self.noted[number] = 1

    # ----------------------------------------------------------------------------------------------------- coming out

    def _take(self, state: State) -> None:
        """Make the state what the code left."""
        header, region = self.header, self.region
        k, reason = int(header[exchange.CONTEXT]), int(header[exchange.REASON])
        known = range(len(self.registers)) if self.following else np.flatnonzero(self.masks == 0).tolist()
        for register in known:
            state.operands[register] = value_of(int(self.registers[register]), int(self.masks[register]))
        self.account(state, k, reason)
        if reason == exchange.HALTED:
            self._halted(state, k)
            return
        inside = k < len(region)
        context = region.steps[k].context if inside else self.outside[k - len(region)]
        state.at, state.within, state.waited_fresh = context.at, context.within, context.waited
        state.flight = {}
        sites = self.machine.ready.sites
        for j, flight in enumerate(context.flights):
            if flight.sure or self.value_on[j]:
                lands = state.beat + flight.beats
                value = value_of(int(self.values[j]), int(self.value_masks[j]))
                state.flight.setdefault(lands, []).append(((flight.number,), (value,)))
                register = sites[flight.number].write.register
                state.ready[register] = max(state.ready[register], lands)
        state.redirects = {}
        latency = self.machine.core.branch.latency
        state.last_branch = NEVER
        for j, turn in enumerate(context.turns):
            state.last_branch = max(state.last_branch, state.issue + turn.bundles - latency)
            if turn.sure or self.turn_on[j]:
                target = self.machine.ready[turn.bundle].parts[turn.part].target
                state.redirects[state.issue + turn.bundles] = target
        state.busy_until = [0] * len(state.busy_until)
        for slot, beats in context.busy:
            state.busy_until[slot] = state.beat + beats

    def account(self, state: State, k: int, reason: int) -> None:
        """Counts, stalls and the three counters."""
        header, counts = self.header, self.counts
        times = counts[self.chain_of]
        if reason in (exchange.GIVEN_BACK, exchange.OUT_OF_FUEL):
            times[(self.chain_of == self.chain_of[k]) & (self.place >= self.place[k])] -= 1
        for context, back, number in self.ways_out:
            if counts[number]:
                self._left_strip(times, context, back, int(counts[number]))
        beats = int(times.sum())
        held = int(times[self.holding].sum())
        times[self.holding] = 0
        fresh = 0
        for context, kind, number in self.edges:
            waited = int(counts[number])
            times[context] -= waited
            if kind == "hold":
                held += waited
            else:
                fresh += waited
        for totals, some in ((state.counts, times), (state.begun, times * self.beginning)):
            issued = np.zeros(len(totals), np.int64)
            np.add.at(issued, self.bundle_of, some)
            for bundle in np.flatnonzero(issued).tolist():
                totals[bundle] += int(issued[bundle])
        bank, wait, penalty, straddle, frozen = (int(header[n]) for n in range(exchange.BANK, exchange.FRESH + 1))
        stalls = state.stalls
        stalls["bank"] += bank
        stalls["wait"] += wait
        stalls["penalty"] += penalty
        stalls["straddle"] += straddle
        stalls["hold"] += held
        stalls["fresh"] += fresh + frozen
        state.beat += beats
        state.cycle += beats + bank + wait + penalty + straddle + frozen
        state.issue += int(times.sum())

    def _left_strip(self, times: np.ndarray, k: int, back: bool, often: int) -> None:
        """A strip ended in mid pass, whose rest is not run.

        ``back``: nor is context ``k``; it and the rest are run in the chain that it is a copy of.
        """
        behind = self.place >= self.place[k] if back else self.place > self.place[k]
        times[(self.chain_of == self.chain_of[k]) & behind] -= often
        if back:
            twin = self.region.twin(k)
            if self.region.chain[twin] != twin:  # a chain that is entered at its beginning is counted there
                times[(self.chain_of == self.chain_of[twin]) & (self.place >= self.place[twin])] += often

    def _halted(self, state: State, k: int) -> None:
        context, last = self.region.steps[k].context, int(self.header[exchange.LAST])
        state.at, state.within, state.waited_fresh = context.at, context.within, False
        state.halt_beat = state.beat - 1
        state.beat += last
        state.drain = max(0, last - 1)
        state.cycle += state.drain
        state.flight, state.redirects = {}, {}
