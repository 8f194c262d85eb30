"""The stand-in rig as an adapter: units at the edge, the memory of earlier shots, and the pace of a real clock."""

import threading
from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Protocol

from planner.link.adapter import Adapter, Capabilities, Result, Shot, ShotFailed
from planner.link.messages import SettingRange
from planner.link.stand_in.profile import Profile
from planner.quantities import from_unit

# Shots of which the load is felt. Of one-second shots back to back, a load that fades in 40 s would keep a fifth after
# 64 of them; after 512 it keeps three millionths.
REMEMBERED = 512


@dataclass(frozen=True, kw_only=True)
class Past:
    """An earlier shot, as far as later ones can feel it. SI, on the rig's time axis."""

    start_s: float
    duration_s: float
    settings_si: Mapping[str, float]


class ModelOutcome(Protocol):
    """What the model gives for one shot; None means not measured."""

    @property
    def atoms_a(self) -> float | None: ...

    @property
    def atoms_b(self) -> float | None: ...

    @property
    def background(self) -> float | None: ...

    @property
    def saturated(self) -> float | None: ...

    @property
    def readings(self) -> Mapping[str, float | None]: ...

    @property
    def flags(self) -> Sequence[str]: ...


class Model(Protocol):
    """The physics behind the stand-in. Pure: the same arguments give the same outcome."""

    def shot(
        self,
        settings_si: Mapping[str, float],
        switches: Mapping[str, str],
        start_s: float,
        ordinal: int,
        history: Sequence[Past],
    ) -> ModelOutcome:
        """One shot that starts `start_s` after the origin of the rig's drifts; `history` is oldest first."""
        ...


def capabilities_of(profile: Profile) -> Capabilities:
    """What a rig with this profile says of itself."""
    return Capabilities(
        rig=profile.name,
        settings={
            name: SettingRange(unit=setting.unit, low=setting.low, high=setting.high)
            for name, setting in profile.settings.items()
        },
        switches=dict(profile.switches),
        readings={name: reading.unit for name, reading in profile.readings.items()},
    )


class StandInRig(Adapter):
    """Plays shots with a model. `origin` is where the model's drifts begin; `paced` makes a shot take its time.

    Readings are in the units that `capabilities` names.
    """

    def __init__(self, model: Model, capabilities: Capabilities, *, origin: datetime, paced: bool) -> None:
        self._model = model
        self._capabilities = capabilities
        self._origin = origin
        self._paced = paced
        self._ending = threading.Event()
        self._history: deque[Past] = deque(maxlen=REMEMBERED)

    def describe(self) -> Capabilities:
        return self._capabilities

    def play(self, shot: Shot) -> Result:
        ranges = self._capabilities.settings
        settings_si = {name: from_unit(value, ranges[name].unit) for name, value in shot.settings.items()}
        start_s = (shot.started - self._origin) / timedelta(seconds=1)
        outcome = self._model.shot(settings_si, shot.switches, start_s, shot.ordinal, tuple(self._history))
        self._history.append(Past(start_s=start_s, duration_s=shot.duration_s, settings_si=settings_si))
        if self._paced and self._ending.wait(shot.duration_s):
            raise ShotFailed("cut short: the stand-in rig was ended during the shot")
        return Result(
            atoms_a=outcome.atoms_a,
            atoms_b=outcome.atoms_b,
            background=outcome.background,
            saturated=outcome.saturated,
            applied={**shot.settings, **shot.switches},
            readings=dict(outcome.readings),
            flags=tuple(outcome.flags),
        )

    def close(self) -> None:
        """End a paced shot at once."""
        self._ending.set()
