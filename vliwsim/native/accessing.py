"""Memory accesses of a beat: judged, loaded, charged, stored."""

from __future__ import annotations

from vliwsim.machine.memory import ALL_DEFINED, ALL_OWNED
from vliwsim.machine.parts import Part
from vliwsim.native.text import UNLIKELY, number
from vliwsim.native.variables import Access, Held, Variables
from vliwsim.program.code import Mode


class Accessing(Variables):
    """The memory's share of step 4; equals :mod:`vliwsim.machine.memory`."""

    guard_bits: list[str | None]
    accesses: list[Access]
    loaded: dict[int, tuple[str, str | None, str | None]]
    bases: dict[int, Held]
    stored: dict[int, Held]

    def reach(self, k: int, part: Part) -> None:
        """An address operand: its access, and what its base becomes."""
        reach, on = part.reach, self.guard_bits[k]
        assert reach is not None
        base, step = self.operand(reach.base), self.operand(reach.step)
        moved = base.bits if step.bits == "0" else self.let(f"add i32 {base.bits}, {step.bits}")
        unknown = self.either([t for t in (self.undefined(base), self.undefined(step)) if self.following and t])
        address, address_unknown = moved, unknown
        if reach.mode is Mode.AFTER:
            address, address_unknown = base.bits, self.undefined(base) if self.following else None
        if address_unknown is not None:
            self.doubt(on, address_unknown)
        if reach.update is not None:
            if reach.ring:
                inside = self.let(f"and i32 {moved}, {number(reach.ring - 1, 32)}")
                outside = self.let(f"and i32 {base.bits}, {number(~(reach.ring - 1), 32)}")
                moved = self.let(f"or i32 {outside}, {inside}")
            mask = None
            if unknown is not None:
                moved, mask = self.select(unknown, "i32", "0", moved), self.select(unknown, "i8", "15", "0")
            self.bases[reach.update] = Held(moved, mask)
        access = part.operation.access
        if access:
            self.access(k, access.bytes, access.store, address, on)

    def access(self, k: int, size: int, store: bool, address: str, on: str | None) -> None:
        """Judge an access, and load."""
        if (self.k, k) in self.region.trusted:
            if not store:  # whether the guard is on or off: the address is good either way
                self.loaded[k] = self.load(size, address, "")
            self.accesses.append(Access(k, size, store, address, on, ""))
            return
        done, before = "", ""
        if on is not None:
            self.settle()
            inside, done = self.label("inside"), self.label("done")
            before = self.here
            self.put(f"br i1 {on}, label %{inside}, label %{done}")
            self.block(inside)
        status = self.judge_access(size, store, address)
        found: tuple[str, str | None, str | None] = ("0", None, None)
        kinds = (f"i{8 * size}", "i8", "i1")
        if not store:
            found = self.load(size, address, status)
        if on is not None:
            last = self.here
            self.put(f"br label %{done}")
            self.block(done)
            status = self.let(f"phi i{8 * size} [{status}, %{last}], [0, %{before}]")
            merged = [
                None if code is None else self.let(f"phi {kind} [{code}, %{last}], [0, %{before}]")
                for kind, code in zip(kinds, found, strict=True)
            ]
            found = merged[0] or "0", merged[1], merged[2]
        if not store:
            self.loaded[k] = found
        self.accesses.append(Access(k, size, store, address, on, status))

    def judge_access(self, size: int, store: bool, address: str) -> str:
        """Alignment, bounds and ownership; the status bytes."""
        memory = self.core.memory
        if memory.misaligned == "reject":  # turned right, an odd address is a great number
            shift = size.bit_length() - 1
            place = address
            if shift:
                place = self.let(f"call i32 @llvm.fshr.i32(i32 {address}, i32 {address}, i32 {shift})")
            wide = self.let(f"zext i32 {place} to i64")
            self.leave_if(self.compare("uge", "i64", wide, str(memory.size // size)))
        else:
            wide = self.let(f"zext i32 {address} to i64")
            self.leave_if(self.compare("ugt", "i64", self.let(f"add i64 {wide}, {size}"), str(memory.size)))
        kind = f"i{8 * size}"
        status = self.let(f"load {kind}, ptr {self.byte_of('%status', address)}, align 1")
        if store:
            owned = number(ALL_OWNED[size], 8 * size)
            self.leave_if(self.compare("ne", kind, self.let(f"and {kind} {status}, {owned}"), owned))
        elif self.following:
            some = self.let(f"or {kind} {status}, {self.let(f'lshr {kind} {status}, 1')}")
            ones = number(ALL_DEFINED[size] // 3, 8 * size)
            self.leave_if(self.compare("ne", kind, self.let(f"and {kind} {some}, {ones}"), ones))
        else:
            self.leave_if(self.compare("ne", kind, status, number(ALL_DEFINED[size], 8 * size)))
        return status

    def byte_of(self, array: str, address: str) -> str:
        wide = self.let(f"zext i32 {address} to i64")
        return self.let(f"getelementptr inbounds i8, ptr {array}, i64 {wide}")

    def swapped(self, size: int, code: str) -> str:
        """Bytes in the core's order from the host's, and back. The host is little-endian."""
        if self.core.memory.endianness == "little" or size == 1:
            return code
        return self.let(f"call i{8 * size} @llvm.bswap.i{8 * size}(i{8 * size} {code})")

    def load(self, size: int, address: str, status: str) -> tuple[str, str | None, str | None]:
        """(loaded bits, undefined bytes, whether a byte is undefined that no ``over`` declares)."""
        kind = f"i{8 * size}"
        value = self.swapped(size, self.let(f"load {kind}, ptr {self.byte_of('%mem', address)}, align 1"))
        if not self.following:
            return value, None, None
        status = self.swapped(size, status)
        mask, owned = "0", "false"
        for byte in range(size):
            one = self.let(f"and {kind} {self.let(f'lshr {kind} {status}, {8 * byte}')}, 3")
            missing = self.compare("ne", kind, one, "3")
            bit = self.select(missing, "i8", number(1 << byte, 8), "0")
            mask = self.let(f"or i8 {mask}, {bit}")
            owned = self.let(f"or i1 {owned}, {self.compare('eq', kind, one, '2')}")
            kept = self.let(f"and {kind} {value}, {number(~(255 << 8 * byte), 8 * size)}")
            value = self.select(missing, kind, kept, value)
        return value, mask, owned

    def judge_stores(self) -> None:
        """``store-twice``: two stores to one byte."""
        stores = [a for a in self.accesses if a.store]
        for k, one in enumerate(stores):
            for other in stores[:k]:
                a = self.let(f"zext i32 {one.address} to i64")
                b = self.let(f"zext i32 {other.address} to i64")
                first = self.compare("ult", "i64", a, self.let(f"add i64 {b}, {other.size}"))
                second = self.compare("ult", "i64", b, self.let(f"add i64 {a}, {one.size}"))
                self.doubt(one.on, other.on, first, second)

    def charge(self) -> tuple[str, str] | None:
        """Bank and wait cycles (i64) of the accesses; None where there are none for sure."""
        memory, accesses = self.core.memory, self.accesses
        if not accesses or (len(accesses) == 1 and not memory.waits):
            return None
        within = all(memory.bank_width % a.size == 0 for a in accesses)
        if len(accesses) != 2 or not within or memory.waits:
            bank, wait = self.charge_by_call()
        elif memory.misaligned == "reject":
            bank, wait = self.let(f"zext i1 {self.meet()} to i64"), "0"
        else:
            bank, wait = self.charge_unless_aligned(), "0"
        if memory.conflict == "reject":
            self.doubt(self.compare("ne", "i64", bank, "0"))
            return None if wait == "0" else ("0", wait)
        return bank, wait

    def meet(self) -> str:
        """Whether two accesses, each within a word, make a bank serve one after the other."""
        memory, (one, other) = self.core.memory, self.accesses
        a, b = (self.let(f"udiv i32 {x.address}, {memory.bank_width}") for x in self.accesses)
        if memory.banks & memory.banks - 1 == 0:
            apart = self.let(f"and i32 {self.let(f'xor i32 {a}, {b}')}, {memory.banks - 1}")
            same = self.compare("eq", "i32", apart, "0")
        else:
            same = self.compare(
                "eq", "i32", self.let(f"urem i32 {a}, {memory.banks}"), self.let(f"urem i32 {b}, {memory.banks}")
            )
        loads = not one.store and not other.store
        differ = self.compare("ne", "i32", a, b) if memory.broadcast and loads else None
        return self.both(same, differ, one.on, other.on) or "true"

    def charge_unless_aligned(self) -> str:
        """Bank cycles of two accesses that are hardly ever misaligned."""
        odd = self.either(
            [
                self.compare("ne", "i32", self.let(f"and i32 {a.address}, {a.size - 1}"), "0")
                for a in self.accesses
                if a.size > 1 and (self.k, a.part) not in self.region.trusted
            ]
        )
        plain = self.let(f"zext i1 {self.meet()} to i64")
        if odd is None:
            return plain
        before, apart, done = self.here, self.label("odd"), self.label("charged")
        self.put(f"br i1 {odd}, label %{apart}, label %{done}{UNLIKELY}")
        self.block(apart)
        bank, _ = self.charge_by_call()
        self.put(f"br label %{done}")
        self.block(done)
        return self.let(f"phi i64 [{plain}, %{before}], [{bank}, %{apart}]")

    def charge_by_call(self) -> tuple[str, str]:
        key = tuple((a.size, a.store) for a in self.accesses)
        name = self.charges.setdefault(key, f"{self.prefix}charge{len(self.charges)}")
        arguments = ", ".join(f"i32 {a.address}, i1 {a.on or 'true'}" for a in self.accesses)
        made = self.let(f"call {{i64, i64}} @{name}({arguments})")
        bank = self.let(f"extractvalue {{i64, i64}} {made}, 0")
        return bank, self.let(f"extractvalue {{i64, i64}} {made}, 1")

    def store_all(self) -> None:
        for access in self.accesses:
            if not access.store:
                continue
            done = ""
            if access.on is not None:
                inside, done = self.label("store"), self.label("stored")
                self.put(f"br i1 {access.on}, label %{inside}, label %{done}")
                self.block(inside)
            size, kind = access.size, f"i{8 * access.size}"
            made = self.stored[access.part]
            value = self.swapped(size, made.bits)
            self.put(f"store {kind} {value}, ptr {self.byte_of('%mem', access.address)}, align 1")
            status = number(ALL_DEFINED[size], 8 * size)
            if self.following and made.mask is not None:
                for byte in range(size):
                    missing = self.compare("ne", "i8", self.let(f"and i8 {made.mask}, {number(1 << byte, 8)}"), "0")
                    one = self.let(f"sub {kind} {status}, {number(1 << 8 * byte, 8 * size)}")
                    status = self.select(missing, kind, one, status)
                status = self.swapped(size, status)
            self.put(f"store {kind} {status}, ptr {self.byte_of('%status', access.address)}, align 1")
            if access.on is not None:
                self.put(f"br label %{done}")
                self.block(done)
