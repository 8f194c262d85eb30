"""Profiles of the stand-in for tests: a table of text values, written as TOML, and models made from it."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from planner.arrays import FloatArray
from planner.link.stand_in.model import Counts, StandInModel
from planner.link.stand_in.profile import Profile, parse_profile

Table = dict[str, Any]

# A rig without noise, drift and faults; every number invented. What the tests compare with is written out in them.
QUIET: Table = {
    "nightfringe_stand_in": 1,
    "name": "quiet stand-in",
    "atom": "Rb-87",
    "wavelength": "866 nm",
    "settings": {
        "hold": {"unit": "s", "range": [0, 200], "plays": "hold"},
        "readout": {"unit": "deg", "plays": "readout"},
        "depth": {"unit": "Er", "range": [1, 60], "plays": "depth"},
        "separation": {"unit": "um", "range": [0.5, 100], "plays": "separation"},
        "cooling": {"unit": "ms", "range": [0, 5000], "plays": "cooling"},
        "detuning": {"unit": "kHz", "range": [-200, 200], "plays": "detuning"},
    },
    "rest": {
        "hold": "2 s",
        "readout": "0 deg",
        "depth": "9 Er",
        "separation": "4 um",
        "cooling": "400 ms",
        "detuning": "6 kHz",
    },
    "switches": {"collar": ["near", "far"], "kick": ["up", "down"]},
    "signal": {"follows": ["collar", "kick"], "acceleration": "0 m/s^2"},
    "cloud": {
        "atoms": 20000,
        "atoms_lost_cooling": "2 s",
        "cold_share": 0.8,
        "temperature_falls": "150 ms",
        "warmest": 3.0,
    },
    "contrast": {
        "short_hold": 0.62,
        "cold_constant": "1000 s Er um",
        "warm_constant": "120 s Er um",
        "best_detuning": "6 kHz",
        "detuning_width": "40 kHz",
    },
    "loss": {"vacuum": "45 s", "per_depth": "0 1/s", "spill": "0 1/s", "spill_depth": "2.5 Er"},
    "noise": {
        "phase": "0 rad",
        "acceleration": "0 m/s^2",
        "atoms": 0,
        "detection": 0,
        "background": 0,
        "saturates": 1e12,
    },
    "memory": {"strength": 0, "fades": "40 s"},
    "drift": {
        "phase": "0 rad",
        "acceleration": "0 m/s^2",
        "offset": 0,
        "contrast": 0,
        "atoms": 0,
        "air_handling": {"period": "1200 s", "phase": "0 rad", "offset": 0},
    },
    "tide": {"M2": {"period": "12.4206012 h", "amplitude": "0 nm/s^2", "phase": "0 deg"}},
    "faults": {"unlocks_per_hour": 0, "unlock_lasts": "4 min", "outliers": 0},
    "site": {"latitude": "50.93 deg", "longitude": "11.35 deg", "height": "312 m"},
    "readings": {"tilt": {"unit": "urad", "mean": 12, "walk": 0, "noise": 0}},
}
# Every kind of noise, drift and fault at once.
LOUD = {
    "signal.acceleration": "40 nm/s^2",
    "loss.per_depth": "0.0006 1/s",
    "loss.spill": "0.4 1/s",
    "noise.phase": "60 mrad",
    "noise.acceleration": "0.8 um/s^2",
    "noise.atoms": 0.06,
    "noise.detection": 40,
    "noise.background": 120,
    "noise.saturates": 9000,
    "memory.strength": 0.05,
    "drift.phase": "0.6 rad",
    "drift.acceleration": "0.15 um/s^2",
    "drift.offset": 0.015,
    "drift.contrast": 0.08,
    "drift.atoms": 0.1,
    "drift.air_handling.phase": "40 mrad",
    "drift.air_handling.offset": 0.002,
    "tide.M2.amplitude": "320 nm/s^2",
    "faults.unlocks_per_hour": 2,
    "faults.outliers": 0.1,
    "readings.tilt.walk": 6,
    "readings.tilt.noise": 0.5,
}
LEFT_OUT = object()  # as a value of a change: the key is not written


def table(changes: Mapping[str, Any], base: Table = QUIET) -> Table:
    """A copy of `base` with values at dotted keys set, added or left out."""
    copy = {name: _copy(value) for name, value in base.items()}
    for place, value in changes.items():
        *way, last = place.split(".")
        inside = copy
        for part in way:
            inside = inside.setdefault(part, {})
        if value is LEFT_OUT:
            del inside[last]
        else:
            inside[last] = value
    return copy


def _copy(value: Any) -> Any:
    return {name: _copy(one) for name, one in value.items()} if isinstance(value, dict) else value


def toml(data: Table, path: str = "") -> str:
    """The table as TOML, one value a line. Strings of these tests hold nothing that needs escaping."""
    lines = [f"[{path}]"] if path else []
    inner = []
    for name, value in data.items():
        if isinstance(value, dict):
            inner.append(toml(value, f"{path}.{name}" if path else name))
        else:
            lines.append(f"{name} = {_value(value)}")
    return "\n".join(lines) + "\n" + "".join(inner)


def _value(value: Any) -> str:
    if isinstance(value, list):
        return "[" + ", ".join(_value(one) for one in value) + "]"
    if isinstance(value, np.floating):
        value = float(value)
    if isinstance(value, bool):
        return "true" if value else "false"
    return f'"{value}"' if isinstance(value, str) else repr(value)


def profile(changes: Mapping[str, Any] | None = None) -> Profile:
    """The quiet profile with changes."""
    return parse_profile(toml(table(changes or {})), "profile.toml")


def model(changes: Mapping[str, Any] | None = None, seed: int = 0) -> StandInModel:
    """A model of the quiet profile with changes."""
    return StandInModel(profile(changes), seed)


def play(
    rig: StandInModel,
    start_s: FloatArray,
    *,
    first: int = 1,
    signs: Mapping[str, FloatArray] | None = None,
    load: FloatArray | None = None,
    **settings_si: float | FloatArray,
) -> Counts:
    """A night at given times, settings in SI (a number stands for every shot), ordinals counted from `first`."""
    n = len(start_s)
    columns = {name: np.broadcast_to(np.asarray(value, dtype=np.float64), n) for name, value in settings_si.items()}
    return rig.night(columns, signs or {}, start_s, first + np.arange(n), load=np.zeros(n) if load is None else load)


def share(counts: Counts) -> FloatArray:
    """y = a / (a + b)."""
    return np.asarray(counts.atoms_a / (counts.atoms_a + counts.atoms_b))
