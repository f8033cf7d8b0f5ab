"""The rules that a check judges, in the order in which the machine does, and when a core cannot break one."""

from __future__ import annotations

from vliwsim.description.core import Core
from vliwsim.machine.hazards import ALLOWED

WRONG_ITEM, INDIRECT = "wrong-item", "indirect-target"

RULES = (*ALLOWED, WRONG_ITEM)
"""Every rule's name: the machine's hazards, and items."""

ALLOWS = {
    **ALLOWED,
    INDIRECT: "a register that holds the same code address whatever the data, or labels behind `to`",
    WRONG_ITEM: "operands of the item that the operation works on, or of the one it names",
}

ON_DATA = ("undefined-used", "misaligned", "out-of-array", "store-twice", "bank-conflict")
"""Rules that may depend on more than the path: addresses and contents of memory."""

ALONE = ("slot-taken", "slot-class", "guard-register", "read-ports", "links")
"""Rules that a bundle keeps or breaks whatever was before it."""


def cannot_break(core: Core, rule: str) -> str:
    """Why no program of a core can break a rule; empty where one can."""
    if rule == "written-twice" and not core.interlocked:
        return "an exposed core does not ask"
    if rule == "early-read" and core.interlocked:
        return "the core waits for results"
    if rule == "early-read" and core.issue.early != "reject":
        return "the core gives the old value"
    if rule == "fresh" and all(link.fresh != "reject" for link in core.links):
        return "no link refuses what has just landed"
    if rule == "busy" and (core.interlocked or not any(slot.busy for slot in core.slots)):
        return "the core waits for units" if core.interlocked else "every unit is pipelined"
    if rule == "branch-overlap" and core.branch.overlap:
        return "branches may overlap in flight"
    if rule == "misaligned" and core.memory.misaligned != "reject":
        return "the core splits them"
    if rule == "bank-conflict" and core.memory.conflict != "reject":
        return "the core waits for banks"
    return ""
