"""Operations are computed."""

from __future__ import annotations

from vliwsim.machine.parts import Input, Part
from vliwsim.native.accessing import Accessing
from vliwsim.native.contexts import always_taken
from vliwsim.native.meanings import result_type
from vliwsim.native.text import number
from vliwsim.native.values import widths
from vliwsim.native.variables import Held


class Executing(Accessing):
    """Step 4 of a beat; equals :mod:`vliwsim.machine.executing`."""

    taken: dict[int, str]

    def judge_operands(self, k: int, part: Part) -> None:
        """In plain code a part that is on has no undefined operand."""
        if self.following:
            return
        indices = [i for wanted in part.inputs for i in _places(wanted)]
        if part.reach:
            indices += [part.reach.base, part.reach.step]
        if part.target_register is not None:
            indices.append(part.target_register)
        for index in dict.fromkeys(indices):
            unknown = self.undefined(self.operand(index))
            if unknown is not None:
                self.doubt(self.guard_bits[k], unknown)

    def execute(self, k: int, part: Part, results: dict[int, Held], bits: dict[int, str | None]) -> None:
        """Compute what a part does; ``bits``: whether each result lands (None: for sure)."""
        on = self.guard_bits[k]
        outputs = self.computed(k, part)
        taken = None
        if part.branches:
            taken = "true" if always_taken(part) else outputs[-1].bits
            if outputs and not always_taken(part) and outputs[-1].mask is not None:
                self.doubt(on, self.undefined(outputs[-1]))
            self.taken[k] = self.both(on, taken if taken != "true" else None) or "true"
            if part.target_register is not None:
                self.doubt(self.taken[k])
            if part.uses_link and part.link is None:
                self.doubt(on)
        if part.operation.access and part.operation.access.store:
            self.stored[k] = outputs[-1]
        for numbers, made in zip(part.results, outputs, strict=False):
            halves = self.halved(made) if len(numbers) == 2 else (made,)
            for n, value in zip(numbers, halves, strict=True):
                results[n] = value
                bits[n] = self.taken[k] if part.operation.count else on
        if part.reach and part.reach.update is not None:
            results[part.reach.update] = self.bases[part.reach.update]
            bits[part.reach.update] = on

    def halved(self, made: Held) -> tuple[Held, Held]:
        """The even and odd register of 64 bits."""
        low = self.let(f"trunc i64 {made.bits} to i32")
        high = self.let(f"trunc i64 {self.let(f'lshr i64 {made.bits}, 32')} to i32")
        if made.mask is None:
            return Held(low), Held(high)
        return (
            Held(low, self.let(f"and i8 {made.mask}, 15")),
            Held(high, self.let(f"lshr i8 {made.mask}, 4")),
        )

    def computed(self, k: int, part: Part) -> list[Held]:
        """The outputs of a part's operation."""
        operation = part.operation
        if not operation.outputs:
            return []
        # in a strip what makes a NaN goes back to the judged copy, so that every sum need not wait for the choice
        bare = self.strip is not None and any(t.floating for t in operation.meaning.output_types.values())
        key = operation, part.halves, bare
        name = self.functions.setdefault(key, f"{self.prefix}op{len(self.functions)}")
        given, made = widths(operation)
        values = [self.input(k, wanted, part, width) for wanted, width in zip(part.inputs, given, strict=True)]
        arguments = [f"i{width} {value.bits}" for value, width in zip(values, given, strict=True)]
        if self.following:
            arguments += [f"i8 {value.mask or '0'}" for value in values]
        kind = result_type(operation, self.following, bare)
        result = self.let(f"call {kind} @{name}({', '.join(arguments)})")
        outputs = []
        for j in range(len(made)):
            bits = self.let(f"extractvalue {kind} {result}, {j}")
            mask = self.let(f"extractvalue {kind} {result}, {j + len(made)}") if self.following else None
            outputs.append(Held(bits, mask))
        if bare:
            self.doubt(self.guard_bits[k], self.let(f"extractvalue {kind} {result}, {len(made)}"))
        if self.following:
            self.judge_note(k, part, values, outputs)
        return outputs

    def judge_note(self, k: int, part: Part, values: list[Held], outputs: list[Held]) -> None:
        """The note that something was computed with undefined bytes, where it has not been made."""
        inside = self.either([t for v in values if (t := self.undefined(v)) is not None])
        outside = self.either([t for v in outputs if (t := self.undefined(v)) is not None])
        if inside is None or outside is None:
            return
        owned = self.loaded[k][2] if k in self.loaded else None
        self.doubt(self.guard_bits[k], inside, outside, owned, self.invert(self.noted("undefined-read", k, None)))

    def input(self, k: int, wanted: Input, part: Part, width: int) -> Held:
        if wanted.index < 0:
            if wanted.name == "loaded":
                return Held(*self.loaded[k][:2])
            return Held(number(part.link or 0, 32))
        if not wanted.pair:
            return self.operand(wanted.index)
        low, high = self.operand(wanted.index), self.operand(wanted.index + 1)
        wide = self.let(f"zext i32 {high.bits} to i64")
        bits = self.let(f"or i64 {self.let(f'zext i32 {low.bits} to i64')}, {self.let(f'shl i64 {wide}, 32')}")
        if not self.following:
            return Held(bits)
        upper = self.let(f"shl i8 {high.mask or '0'}, 4")
        return Held(bits, self.let(f"or i8 {low.mask or '0'}, {upper}"))


def _places(wanted: Input) -> tuple[int, ...]:
    """Operand-file places of an input."""
    if wanted.index < 0:
        return ()
    return (wanted.index, wanted.index + 1) if wanted.pair else (wanted.index,)
