"""What a lab writes to put its rig on the link: a class that describes the rig and plays one shot.

    class OurRig(Adapter):
        def describe(self) -> Capabilities:
            return Capabilities(rig="our rig", settings={"hold": SettingRange(unit="s", low=0.1, high=75)})

        def play(self, shot: Shot) -> Result:
            self.box.load(shot.timeline, **shot.settings)
            counts = self.box.run()
            return Result(atoms_a=counts.a, atoms_b=counts.b)

The host (host.py) does everything else: keys, the queue, times, withdrawal, fencing, the journal.
"""

from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any

from planner.link.messages import SettingRange


@dataclass(frozen=True, kw_only=True)
class Capabilities:
    """What the rig can do: settings with unit and limits, switches with their two states, readings with units."""

    rig: str
    settings: Mapping[str, SettingRange] = field(default_factory=dict)
    switches: Mapping[str, tuple[str, str]] = field(default_factory=dict)
    readings: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True)
class Shot:
    """One shot to be played now. Settings in the rig's own units; `duration_s` counts the settling."""

    key: str
    ordinal: int
    settings: Mapping[str, float]
    switches: Mapping[str, str]
    settle_s: float
    duration_s: float
    timeline: Mapping[str, Any]
    started: datetime


@dataclass(frozen=True, kw_only=True)
class Result:
    """What one shot gave. None means not measured; `applied` what was truly set, where the rig can tell."""

    atoms_a: float | None = None
    atoms_b: float | None = None
    background: float | None = None
    saturated: float | None = None
    data: str | None = None
    applied: Mapping[str, float | str | None] = field(default_factory=dict)
    readings: Mapping[str, float | None] = field(default_factory=dict)
    flags: tuple[str, ...] = ()


class ShotFailed(Exception):
    """Raised by `play` when the shot started and gave no result; the text becomes the report's `why`."""


class Adapter(ABC):
    """A rig behind the host. `play` is never called twice at once, nor twice with one key."""

    @abstractmethod
    def describe(self) -> Capabilities:
        """What the rig can do; read once, when the host starts."""

    @abstractmethod
    def play(self, shot: Shot) -> Result:
        """Set the switches, wait `shot.settle_s`, play, count.

        On a real clock this takes as long as the shot takes. On a simulated one it returns at once, and the host lets
        `duration_s` pass.
        """

    def not_ready(self) -> str | None:
        """Why no shot can start now, or None. Called often: look at a flag, do not measure."""
        return None

    def objection(self, settings: Mapping[str, float], switches: Mapping[str, str]) -> str | None:
        """Why this rig will not play such a shot (beyond the limits of each setting by itself), or None."""
        return None

    def close(self) -> None:
        """The host's program is ending: leave the rig safe, and let a shot under way return soon."""
        return
