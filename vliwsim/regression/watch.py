"""Which targets a saved file touches: the files each was judged by, looked at now and then."""

from __future__ import annotations

import os
import time
from collections.abc import Sequence

from vliwsim.problems import OptionError
from vliwsim.regression.keep import Keep
from vliwsim.regression.sources import Target, targets

PAUSE = 0.3
"""Seconds between two looks."""

Stamp = tuple[int, int, int] | None


class Watch:
    """Watches the sources below ``paths`` and everything that ``keep`` knows was read for them."""

    def __init__(self, paths: Sequence[str], core: str | None, keep: Keep) -> None:
        self.paths, self.core, self.keep = paths, core, keep
        self.targets = targets(paths, core)
        self.held: dict[Target, bool] = {}
        self.stamps = self._stamps()

    def _targets(self) -> list[Target]:
        try:
            return targets(self.paths, self.core)
        except OptionError:  # the last source is gone, for now
            return []

    def _files(self, target: Target) -> set[str]:
        beside = os.path.join(os.path.dirname(target.source), "reference.py")
        return {target.source, beside, *self.keep.files.get(target, ())}

    def _stamps(self) -> dict[str, Stamp]:
        return {name: _stamp(name) for target in self.targets for name in self._files(target)}

    def wait(self) -> list[Target]:
        """The targets that a saved, new or removed file touches, as soon as there are any."""
        while True:
            if touched := self.look():
                return touched
            time.sleep(PAUSE)

    def look(self) -> list[Target]:
        """The targets touched since the last look."""
        before = set(self.targets)
        self.targets = self._targets()
        stamps = self._stamps()
        changed = {name for name, stamp in stamps.items() if self.stamps.get(name, "new") != stamp}
        self.stamps = stamps
        touched = [t for t in self.targets if t not in before or self._files(t) & changed]
        if touched:
            self.keep.look_again()
        return touched

    def judged(self, target: Target, held: bool) -> None:
        """Remember a verdict; what was read for it is watched from now on."""
        self.held[target] = held
        for name in self._files(target):
            self.stamps.setdefault(name, _stamp(name))

    @property
    def all_held(self) -> bool:
        return all(self.held.get(target, True) for target in self.targets)


def _stamp(name: str) -> Stamp:
    """What changes when a file is saved: time, size, identity; None if it is not there."""
    try:
        found = os.stat(name)
    except (OSError, ValueError):
        return None
    return found.st_mtime_ns, found.st_size, found.st_ino
