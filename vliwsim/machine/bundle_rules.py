"""Rules a bundle keeps or breaks whatever its data: round one of step 3, and who cares for freshness."""

from __future__ import annotations

from vliwsim.description.core import Core, Link
from vliwsim.machine.parts import Part

ROUND_ONE = ("slot-taken", "slot-class", "guard-register", "busy", "read-ports", "links")
"""Round one, in the order it is judged for each operation."""
BUSY = ROUND_ONE.index("busy")


def static_hazard(core: Core, parts: tuple[Part, ...]) -> tuple[int, int, str] | None:
    """The first complaint of round one of step 3 that needs no run: (instruction, rank in ROUND_ONE, found)."""
    slots: set[int] = set()
    read: list[set[int]] = [set() for _ in core.clusters]
    crossed: dict[tuple[int, int], list[int]] = {}
    for k, part in enumerate(parts):
        instruction, slot = part.instruction, core.slots[part.instruction.slot]
        name = part.operation.name
        if instruction.slot in slots:
            return k, ROUND_ONE.index("slot-taken"), f"{name} is a second operation in {slot.name}"
        slots.add(instruction.slot)
        if part.operation.operation_class not in slot.classes:
            return (
                k,
                ROUND_ONE.index("slot-class"),
                f"{name} is of class {part.operation.operation_class}; {slot.name} executes {', '.join(slot.classes)}",
            )
        guard = instruction.guard
        if guard and guard.register not in core.guard_numbers:
            return k, ROUND_ONE.index("guard-register"), f"{core.register_names[guard.register]} guards {name}"
        for access in part.effects.reads:
            read[core.register_clusters[access.register]].add(access.register)
        for cluster, registers in zip(core.clusters, read, strict=True):
            if len(registers) > cluster.read_ports:
                return (
                    k,
                    ROUND_ONE.index("read-ports"),
                    f"{len(registers)} registers of cluster {cluster.name} read, {cluster.read_ports} read ports",
                )
        complaint = _links(core, part, crossed)
        if complaint:
            return k, ROUND_ONE.index("links"), complaint
    return None


def _links(core: Core, part: Part, crossed: dict[tuple[int, int], list[int]]) -> str | None:
    """What ``part`` does to the links, given the crossing registers of the operations before it (updated)."""
    slot = core.slots[part.instruction.slot]
    home = core.slot_clusters[part.instruction.slot]
    names = core.register_names
    for write in part.effects.writes:
        if write.crossing:
            return f"{part.operation.name} in {slot.name} writes {names[write.register]}"
    for access in part.effects.reads:
        if not access.crossing:
            continue
        link = core.link_table.get((core.register_clusters[access.register], home))
        if link is None:
            return f"{part.operation.name} in {slot.name} reads {names[access.register]}, and no link leads there"
        if access.operand not in slot.crossing:
            register = names[access.register]
            return f"operand {access.operand} of {part.operation.name} in {slot.name} comes over a link ({register})"
        key = core.register_clusters[access.register], home
        crossed.setdefault(key, []).append(access.register)
    for (source, reader), registers in crossed.items():
        link = core.link_table[source, reader]
        used = len(set(registers)) if link.shared else len(registers)
        if used > link.operands:
            return f"{used} operands cross from {link.source} to {link.reader}, the link carries {link.operands}"
    return None


def fresh_operands(core: Core, parts: tuple[Part, ...]) -> tuple[tuple[int, int, Link], ...]:
    """(instruction, register, link) of every crossing operand whose link stalls or rejects freshness."""
    found = []
    for k, part in enumerate(parts):
        home = core.slot_clusters[part.instruction.slot]
        for access in part.effects.reads:
            link = core.link_table.get((core.register_clusters[access.register], home)) if access.crossing else None
            if link and link.fresh != "ok":
                found.append((k, access.register, link))
    return tuple(found)
