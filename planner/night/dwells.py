"""How long each slow switch has stayed put, so that it never moves sooner than its dwell allows.

The running order keeps dwells as planned; a night whose shots failed early or were taken back may run ahead of it.
"""

import numpy as np

from planner.logbook.driving import Driving
from planner.night.shots import ShotMaker

SECOND_US = 1_000_000


class Dwells:
    """Since when each slow switch stands as it does, on the rig's clock. Read from the logbook when first asked."""

    def __init__(self, maker: ShotMaker, driving: Driving, night_id: int) -> None:
        self._maker = maker
        self._driving = driving
        self._night_id = night_id
        self._stands: dict[str, tuple[int, int | None]] | None = None  # switch -> (sign, since)

    def forget(self) -> None:
        """Something was taken back: look it up again."""
        self._stands = None

    def not_before_us(self, position: int) -> int | None:
        """The earliest start of a position that its switches allow; None where none has to wait."""
        if self._stands is None:
            self._stands = self._look_up(position)
        earliest: int | None = None
        for name, sign in self._slow(position).items():
            before, since = self._stands.get(name, (sign, None))
            if sign != before:
                if since is not None:
                    allowed = since + round(self._maker.dwell_s(position, name) * SECOND_US)
                    earliest = allowed if earliest is None else max(earliest, allowed)
                since = None  # known once a shot in the new state has started
            self._stands[name] = (sign, since)
        return earliest

    def started(self, position: int, started_us: int) -> None:
        """A shot of this position started."""
        if self._stands is not None:
            for name, sign in self._slow(position).items():
                stands, since = self._stands.get(name, (sign, None))
                if stands == sign and since is None:
                    self._stands[name] = (sign, started_us)

    def _slow(self, position: int) -> dict[str, int]:
        signs = self._maker.signs(position)
        return {name: sign for name, sign in signs.items() if self._maker.dwell_s(position, name) > 0}

    def _look_up(self, position: int) -> dict[str, tuple[int, int | None]]:
        found: dict[str, tuple[int, int | None]] = {}
        for name in self._maker.slow_switches():
            before = self._maker.signs_along(name)[:position]
            said = np.flatnonzero(before)  # shots that say nothing of it leave it as it stands
            if not len(said):
                continue
            sign = int(before[said[-1]])
            changes = np.flatnonzero(before == -sign)
            after = said[said > changes[-1]] if len(changes) else said
            found[name] = (sign, self._driving.first_start_us(self._night_id, int(after[0])))
        return found
