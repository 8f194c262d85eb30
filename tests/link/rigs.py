"""A rig for tests: plays nothing, remembers everything, and makes the intents that suit it."""

from collections import Counter
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from typing import Any

from planner.link.adapter import Adapter, Capabilities, Result, Shot
from planner.link.messages import Description, Intent, SettingRange

EVENING = datetime(2026, 12, 1, 20, 0, tzinfo=UTC)


class BenchRig(Adapter):
    """Counts how often each key was played; `act` can replace what a shot gives."""

    def __init__(self, act: Callable[[Shot], Result] | None = None) -> None:
        self.played: Counter[str] = Counter()
        self.why_not: str | None = None
        self._act = act

    def describe(self) -> Capabilities:
        return Capabilities(
            rig="bench rig",
            settings={
                "hold": SettingRange(unit="s", low=0.1, high=75.0),
                "readout": SettingRange(unit="deg", low=None, high=None),
            },
            switches={"collar": ("near", "far")},
            readings={"vacuum": "Pa"},
        )

    def play(self, shot: Shot) -> Result:
        self.played[shot.key] += 1
        if self._act is not None:
            return self._act(shot)
        return Result(
            atoms_a=12034.5,
            atoms_b=None,
            background=3.0,
            applied={**shot.settings, **shot.switches},
            readings={"vacuum": 2e-9},
            flags=("unlocked",),
        )

    def not_ready(self) -> str | None:
        return self.why_not

    def objection(self, settings: Mapping[str, float], switches: Mapping[str, str]) -> str | None:
        return "no such fringe here" if settings.get("readout") == 13.0 else None


def make_intent(of: Description, **changes: Any) -> Intent:
    """A sound ten-second shot for the bench rig, with `changes`."""
    fields: dict[str, Any] = {
        "driver": "dispatcher-a",
        "epoch": 1,
        "description": of.description,
        "settings": {"hold": 7.0, "readout": 90.0},
        "switches": {"collar": "near"},
        "settle_s": 0.0,
        "duration_s": 10.0,
        "timeline": {"tick_s": 1e-6, "lines": {"lattice": [[0, 9.0], [7_000_000, 0.0]]}},
    }
    return Intent.sealed(**(fields | changes))
