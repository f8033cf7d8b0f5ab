"""Recording what a machine does, a beat at a time: installed around ``Machine.step`` and removed again.

While a recorder is installed the machine steps by definition; once removed it runs as if it had never been there.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

from vliwsim.description.values import Value
from vliwsim.machine.issued import Issued
from vliwsim.machine.parts import WriteSite
from vliwsim.machine.state import State
from vliwsim.machine.stepper import Machine


class Landing(NamedTuple):
    """One register that received ``value``, sent by ``site`` in beat ``sent``."""

    register: int
    value: Value
    site: WriteSite
    sent: int


class Record(NamedTuple):
    """One beat. ``bundle`` and ``within`` name the bundle at the point of issue; ``cause`` says why it did not issue.

    ``on``: which of its instructions had their guard on (empty if it did not issue). ``stores``: (address, bytes,
    value). ``freezes``: (cause, cycles) passed behind the beat.
    """

    cycle: int
    beat: int
    bundle: int
    within: int
    cause: str | None
    landings: tuple[Landing, ...]
    on: tuple[bool, ...]
    stores: tuple[tuple[int, int, Value], ...]
    freezes: tuple[tuple[str, int], ...]


def record(machine: Machine, listen: Callable[[Record], None]) -> Callable[[], None]:
    """Call ``listen`` with a :class:`Record` after every beat from now on; returns the undo.

    Landings of the drain are not beats of the program and are not recorded. Recorders stack: undo them in reverse.
    """
    step = machine.step
    installed_here = vars(machine).get("step")

    def recording(state: State) -> Issued | str:
        cycle, beat, bundle, within = state.cycle, state.beat, state.at, state.within
        due = [(n, v) for numbers, values in state.flight.get(beat, ()) for n, v in zip(numbers, values, strict=True)]
        did = step(state)
        listen(
            Record(
                cycle,
                beat,
                bundle,
                within,
                did if isinstance(did, str) else None,
                tuple(_landing(machine, n, value, beat) for n, value in due),
                () if isinstance(did, str) else did.on,
                () if isinstance(did, str) else tuple(did.stores),
                tuple((str(cause), int(cycles)) for cause, cycles in state.frozen),
            )
        )
        return did

    machine.step = recording  # type: ignore[method-assign]

    def undo() -> None:
        if installed_here is None:
            del machine.step
        else:
            machine.step = installed_here  # type: ignore[method-assign]

    return undo


def _landing(machine: Machine, number: int, value: Value, beat: int) -> Landing:
    site = machine.ready.sites[number]
    return Landing(site.write.register, value, site, beat - site.write.latency)
