"""What a beat's accesses cost, as a function of its own: equals :meth:`vliwsim.machine.memory.Memory.charge`."""

from __future__ import annotations

from collections.abc import Sequence

from vliwsim.description.core import Memory
from vliwsim.native.text import Text


def charge_function(memory: Memory, accesses: Sequence[tuple[int, bool]], name: str) -> str:
    """The text of ``@name(i32 address, i1 on, …) -> {i64 bank, i64 wait}``; ``accesses``: (bytes, is it a store)."""
    return _Charge(memory, accesses).function(name)


class _Charge(Text):
    def __init__(self, memory: Memory, accesses: Sequence[tuple[int, bool]]) -> None:
        super().__init__()
        self.memory = memory
        self.accesses = accesses

    def function(self, name: str) -> str:
        count, banks = len(self.accesses), self.memory.banks
        self.block("entry")
        waits = [self.wait(k) for k in range(count)]
        words = [self.words(k) for k in range(count)]
        self.put("br label %bank")
        self.block("bank")
        self.put("%b = phi i64 [0, %entry], [%b.next, %bank]")
        self.put("%most = phi i64 [1, %entry], [%most.next, %bank]")
        self.put("%slow = phi i64 [1, %entry], [%slow.next, %bank]")
        number, cycles = self.bank(words, waits)
        self.put(f"%most.next = call i64 @llvm.smax.i64(i64 %most, i64 {number})")
        self.put(f"%slow.next = call i64 @llvm.smax.i64(i64 %slow, i64 {cycles})")
        self.put("%b.next = add i64 %b, 1")
        self.put(f"%more = icmp ult i64 %b.next, {banks}")
        self.put("br i1 %more, label %bank, label %done")
        self.block("done")
        conflict = self.let("sub i64 %most.next, 1")
        wait = self.let(f"sub i64 {self.let('sub i64 %slow.next, 1')}, {conflict}")
        made = self.let(f"insertvalue {{i64, i64}} undef, i64 {conflict}, 0")
        made = self.let(f"insertvalue {{i64, i64}} {made}, i64 {wait}, 1")
        parameters = ", ".join(f"i32 %a{k}, i1 %on{k}" for k in range(count))
        body = "\n".join([*self.lines, f"  ret {{i64, i64}} {made}"])
        return f"define internal {{i64, i64}} @{name}({parameters}) noinline nounwind memory(none) {{\n{body}\n}}\n"

    def wait(self, k: int) -> str:
        """Wait states of the slowest byte of access ``k``."""
        size, slowest = self.accesses[k][0], "0"
        address = self.let(f"zext i32 %a{k} to i64")
        end = self.let(f"add i64 {address}, {size}")
        for region in self.memory.waits:
            inside = self.both(
                self.compare("ult", "i64", str(region.start), end),
                self.compare("ult", "i64", address, str(region.start + region.bytes)),
            )
            assert inside is not None
            here = self.select(inside, "i64", str(region.cycles), "0")
            slowest = here if slowest == "0" else self.let(f"call i64 @llvm.smax.i64(i64 {slowest}, i64 {here})")
        return slowest

    def words(self, k: int) -> tuple[str, str]:
        """First and last word of access ``k``."""
        width = self.memory.bank_width
        address = self.let(f"zext i32 %a{k} to i64")
        last = self.let(f"add i64 {address}, {self.accesses[k][0] - 1}")
        return self.let(f"udiv i64 {address}, {width}"), self.let(f"udiv i64 {last}, {width}")

    def bank(self, words: Sequence[tuple[str, str]], waits: Sequence[str]) -> tuple[str, str]:
        """The accesses and the cycles that bank %b is charged."""
        banks = self.memory.banks
        touched: list[str] = []
        own: list[tuple[str, str]] = []
        for k, (low, high) in enumerate(words):
            # words come one after another: the first in the bank, and how many there are
            rest = self.let(f"urem i64 {low}, {banks}")
            ahead = self.let(f"sub i64 {self.let(f'add i64 %b, {banks}')}, {rest}")
            first = self.let(f"add i64 {low}, {self.let(f'urem i64 {ahead}, {banks}')}")
            here = self.both(f"%on{k}", self.compare("ule", "i64", first, high))
            assert here is not None
            touched.append(here)
            own.append((first, self.let(f"udiv i64 {self.let(f'sub i64 {high}, {first}')}, {banks}")))
        number, cycles = "0", "0"
        for k, (_, store) in enumerate(self.accesses):
            alone, wait = touched[k], waits[k]
            if self.memory.broadcast and not store:
                for j, (_, other_stores) in enumerate(self.accesses):
                    if j == k or other_stores:
                        continue
                    same = self.both(
                        touched[j],
                        self.compare("eq", "i64", own[j][0], own[k][0]),
                        self.compare("eq", "i64", own[j][1], own[k][1]),
                    )
                    assert same is not None
                    if j < k:  # counted with the other already
                        one = self.both(alone, self.invert(same))
                        assert one is not None
                        alone = one
                    else:
                        longer = self.let(f"call i64 @llvm.smax.i64(i64 {wait}, i64 {waits[j]})")
                        wait = self.select(same, "i64", longer, wait)
            number = self.let(f"add i64 {number}, {self.let(f'zext i1 {alone} to i64')}")
            cost = self.select(alone, "i64", self.let(f"add i64 {wait}, 1"), "0")
            cycles = self.let(f"add i64 {cycles}, {cost}")
        return number, cycles
