"""From a position of the order to what is sent to the rig: settings in the rig's units, states, timeline.

Everything that the rig would refuse is refused here before the first shot is sent.
"""

import json
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from typing import Any

import numpy as np

from planner.arrays import FloatArray, SignArray
from planner.errors import InputError, LimitExceeded
from planner.link.messages import Description, Intent
from planner.logbook.plans import NightPlan, RequestPlan
from planner.quantities import to_unit, unit

ROUNDING = 1e-9  # relative; a limit given in another unit must not refuse the value that equals it
TIMELINES_KEPT = 64  # parsed timelines in memory: a packet's worth and more, whatever the night's size


class ShotMaker:
    """Makes the intents of one night for one description of the rig.

    Raises (at birth):
        InputError: the rig lacks a setting or switch that the plan needs, or gives it another dimension or states.
        LimitExceeded: a shot is beyond the rig's limits; the message names the first such position.
    """

    def __init__(self, plan: NightPlan, description: Description, document: Callable[[str], bytes]) -> None:
        self._plan = plan
        self._order = plan.order.columns
        self.description = description
        self._document = document
        self._timelines: dict[str, Mapping[str, Any]] = {}
        self._settings = [_in_rig_units(request, description) for request in plan.requests]
        for request in plan.requests:
            _check_switches(request, description)
        self._check_limits()
        busy_s = self._order["duration_s"] + self._order["settle_s"]
        self._remaining_s = np.cumsum(busy_s[::-1])[::-1]

    def __len__(self) -> int:
        return len(self._plan.order)

    def request(self, position: int) -> RequestPlan:
        """The request that a position belongs to."""
        return self._plan.requests[int(self._order["request"][position])]

    def revision(self, position: int) -> int:
        """The revision that a position comes from."""
        return int(self._plan.order.revision[position])

    def kind(self, position: int) -> int:
        """Why the shot is in the order."""
        return int(self._order["kind"][position])

    def shot(self, position: int) -> int:
        """Its row in the request's shot table."""
        return int(self._order["shot"][position])

    def length_s(self, position: int, settle_s: float) -> float:
        """How long the shot takes with that settle wait."""
        return settle_s + float(self._order["duration_s"][position])

    def planned_s(self, position: int) -> float:
        """When its cycle begins by the order, settle wait first: s from the night's start."""
        return float(self._order["start_s"][position])

    def opens_packet(self, position: int) -> bool:
        """Whether a packet may be left here: the position is in another packet than the one before, or in none."""
        packet = self._order["packet"]
        return position == 0 or int(packet[position]) < 0 or int(packet[position]) != int(packet[position - 1])

    def remaining_s(self, position: int) -> float:
        """Planned time of the order from `position` on, waits between shots left out."""
        return float(self._remaining_s[position]) if position < len(self) else 0.0

    def states(self, position: int) -> dict[str, str]:
        """The switch states of a position; a switch that stands as it does, for a check shot, is left out."""
        states = self.request(position).details["switches"]
        return {name: states[name]["states"][0 if sign > 0 else 1] for name, sign in self.signs(position).items()}

    def signs(self, position: int) -> dict[str, int]:
        """The same as +1 (first state) or -1."""
        request, row = self.request(position), self.shot(position)
        return {name: int(signs[row]) for name, signs in request.table.switches.items() if signs[row]}

    def signs_along(self, switch: str) -> SignArray:
        """+1 or -1 of one switch at every position, 0 where nothing is said of it; (n_position,)."""
        along = np.zeros(len(self), dtype=np.int8)
        for request in self._plan.requests:
            if switch in request.table.switches:
                here = self._order["request"] == request.number
                along[here] = request.table.switches[switch][self._order["shot"][here]]
        return along

    def slow_switches(self) -> list[str]:
        """Names of the switches with a dwell, of all requests."""
        details = [request.details["switches"] for request in self._plan.requests]
        return list(dict.fromkeys(name for one in details for name, switch in one.items() if switch["dwell_s"] > 0))

    def dwell_s(self, position: int, switch: str) -> float:
        """The shortest time that a switch stays put."""
        return float(self.request(position).details["switches"][switch]["dwell_s"])

    def settle_s(self, position: int, *, unsure: bool) -> float:
        """The settle wait; where nobody knows how the rig stands (`unsure`), long enough for everything that moves."""
        planned = float(self._order["settle_s"][position])
        if not unsure:
            return planned
        details = self.request(position).details
        parts = [*details["switches"].values(), *details["settings"].values()]
        return max([planned, *(float(part["settle_s"]) for part in parts)])

    def intent(
        self,
        position: int,
        *,
        driver: str,
        epoch: int,
        settle_s: float,
        not_before_us: int | None,
        start_by_us: int | None,
    ) -> Intent:
        """What is sent for a position. Times in microseconds since 1970 UTC on the rig's clock."""
        request, row = self.request(position), self.shot(position)
        settings = self._settings[request.number]
        return Intent.sealed(
            driver=driver,
            epoch=epoch,
            description=self.description.description,
            settings={name: float(values[row]) for name, values in settings.items()},
            switches=self.states(position),
            settle_s=settle_s,
            duration_s=self.length_s(position, settle_s),
            not_before=None if not_before_us is None else from_us(not_before_us),
            start_by=None if start_by_us is None else from_us(start_by_us),
            timeline=self._timeline(request.timelines[int(request.table.timeline[row])]),
        )

    def _timeline(self, name: str) -> Mapping[str, Any]:
        found = self._timelines.get(name)
        if found is None:
            if len(self._timelines) >= TIMELINES_KEPT:
                self._timelines.pop(next(iter(self._timelines)))
            found = self._timelines[name] = json.loads(self._document(name))
        return found

    def _check_limits(self) -> None:
        for request, settings in zip(self._plan.requests, self._settings, strict=True):
            positions = np.flatnonzero(self._order["request"] == request.number)
            rows = self._order["shot"][positions]
            for name, values in settings.items():
                limits = self.description.settings[name]
                low = -np.inf if limits.low is None else limits.low
                high = np.inf if limits.high is None else limits.high
                room = ROUNDING * np.maximum(np.abs(values), 1e-300)
                outside = ((values < low - room) | (values > high + room))[rows]
                if outside.any():
                    first = int(positions[np.argmax(outside)])
                    value = values[self._order["shot"][first]]
                    raise LimitExceeded(
                        f"position {first} of the order ({request.title}): {name} = {value:g} {limits.unit} lies "
                        f"outside the rig's limits {low:g} to {high:g} {limits.unit}; {int(outside.sum())} positions "
                        "do. Change the sweep in the sequence file, or the rig's limits if they are wrong"
                    )
                np.clip(values, low, high, out=values)


def _in_rig_units(request: RequestPlan, description: Description) -> dict[str, FloatArray]:
    found = {}
    for name, values in request.table.settings.items():
        there = description.settings.get(name)
        if there is None:
            known = ", ".join(sorted(description.settings)) or "none"
            raise InputError(
                f"{request.title}: the rig {description.rig} has no setting {name}; it has: {known}. Rename the "
                "setting in the sequence file, or teach the rig's program"
            )
        ours = str(request.details["settings"][name]["unit"])
        if unit(there.unit).dimension != unit(ours).dimension:
            raise InputError(
                f"{request.title}: setting {name} is in {ours or 'plain numbers'} here and in "
                f"{there.unit or 'plain numbers'} at the rig {description.rig}; one of them is wrong"
            )
        found[name] = np.array(to_unit(values, there.unit), dtype=np.float64)
    return found


def _check_switches(request: RequestPlan, description: Description) -> None:
    for name in request.table.switches:
        there = description.switches.get(name)
        ours = tuple(request.details["switches"][name]["states"])
        if there is None or set(there) != set(ours):
            known = "; ".join(f"{other} ({' / '.join(states)})" for other, states in description.switches.items())
            raise InputError(
                f"{request.title}: the rig {description.rig} has no switch {name} with the states {' / '.join(ours)}; "
                f"it has: {known or 'none'}"
            )


def from_us(time_us: int) -> datetime:
    """Microseconds since 1970 UTC as a time."""
    return datetime.fromtimestamp(time_us // 1_000_000, UTC).replace(microsecond=time_us % 1_000_000)


def to_us(time: datetime) -> int:
    """A time as microseconds since 1970 UTC, exactly."""
    return int((time - datetime(1970, 1, 1, tzinfo=UTC)).total_seconds()) * 1_000_000 + time.microsecond
