"""One beat, by definition: the phases of design section 3.2, in their order, a module each.

    land → (service) → wait → read → execute → commit → redirect

Each phase judges its hazards in the order the design gives and raises :class:`HazardMet` at the first. Nothing is
changed before :func:`commit`, so a bundle that meets a hazard in wait, read or execute has no effect. This is the slow
and readable way, taken by every bundle while a recorder is installed, by bundles that rows cannot express, and whenever
the hot loop of :mod:`vliwsim.machine.hurry` meets anything out of the ordinary.
"""

from vliwsim.machine.executing import commit, execute
from vliwsim.machine.landing import judge_landing, land
from vliwsim.machine.reading import read
from vliwsim.machine.redirecting import branch_in_flight, redirect, redirect_freezes
from vliwsim.machine.waiting import wait

__all__ = [
    "branch_in_flight",
    "commit",
    "execute",
    "judge_landing",
    "land",
    "read",
    "redirect",
    "redirect_freezes",
    "wait",
]
