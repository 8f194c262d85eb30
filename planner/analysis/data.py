"""The columns of a night as analysis takes them, and which shots count."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from planner.analysis.fringe import projection_variance
from planner.arrays import BoolArray, FloatArray, IntArray, SignArray
from planner.design.running_order import Kind
from planner.errors import InputError

TextArray = NDArray[np.str_]

WHOLE = ("position", "request", "shot", "kind", "packet", "cell", "repeat", "unit")
REAL = (
    "hold_s",
    "phase_rad",
    "start_s",
    "mid_s",
    "duration_s",
    "atoms_a",
    "atoms_b",
    "background",
    "saturated",
)
TEXT = ("key", "state", "flags")
# Holds that differ by less are one hold: a rig's clock and unit conversion, never two points of a sweep.
SAME_HOLD = 1e-5


@dataclass(frozen=True, kw_only=True)
class NightData:
    """What a night measured, one row per attempt that has ended, in time order. Columns of shape (n_attempt,).

    Times in s from the night's start on the rig's axis, as it truly ran; NaN means not measured. `switches` are +1 or
    -1, `settings` SI, `readings` in the rig's unit.
    """

    key: TextArray
    position: IntArray
    request: IntArray
    shot: IntArray
    kind: IntArray
    packet: IntArray
    cell: IntArray
    repeat: IntArray
    unit: IntArray
    hold_s: FloatArray
    phase_rad: FloatArray
    start_s: FloatArray
    mid_s: FloatArray
    duration_s: FloatArray
    state: TextArray
    atoms_a: FloatArray
    atoms_b: FloatArray
    background: FloatArray
    saturated: FloatArray
    flags: TextArray
    switches: Mapping[str, SignArray]
    settings: Mapping[str, FloatArray]
    readings: Mapping[str, FloatArray]

    def __post_init__(self) -> None:
        size = len(self.key)
        for name in (*WHOLE, *REAL, *TEXT):
            if len(getattr(self, name)) != size:
                raise InputError(f"column {name} has {len(getattr(self, name))} rows, column key has {size}")

    def __len__(self) -> int:
        return len(self.key)

    @classmethod
    def from_columns(cls, columns: Mapping[str, Any]) -> "NightData":
        """Build it from named columns, as the logbook hands them over.

        Args:
            columns: the names of this class; switches as `switch_NAME`, settings as `setting_NAME` (SI), readings as
            `reading_NAME`. `background`, `saturated` and `flags` may be missing: then they were not measured.

        Raises:
            InputError: a needed column is missing, has another length, or cannot be read as numbers.
        """
        given = dict(columns)
        size = len(given["key"]) if "key" in given else 0
        given.setdefault("background", np.full(size, np.nan))
        given.setdefault("saturated", np.full(size, np.nan))
        given.setdefault("flags", np.full(size, ""))
        needed = (*WHOLE, *REAL, *TEXT)
        missing = [name for name in needed if name not in given]
        if missing:
            raise InputError(f"columns missing: {', '.join(missing)}; present: {', '.join(sorted(columns)) or 'none'}")
        kinds: dict[str, Any] = dict.fromkeys(WHOLE, np.int64) | dict.fromkeys(REAL, np.float64)
        values: dict[str, Any] = {}
        for name in needed:
            try:
                values[name] = np.asarray(given[name], dtype=kinds.get(name, np.str_))
            except (TypeError, ValueError) as error:
                raise InputError(f"column {name} cannot be read as numbers: {error}") from error
        groups: dict[str, dict[str, Any]] = {"switch_": {}, "setting_": {}, "reading_": {}}
        for name, column in given.items():
            for prefix, group in groups.items():
                if name.startswith(prefix):
                    group[name.removeprefix(prefix)] = np.asarray(column, np.int8 if prefix == "switch_" else float)
        return cls(**values, switches=groups["switch_"], settings=groups["setting_"], readings=groups["reading_"])

    def rows(self, which: BoolArray | IntArray) -> "NightData":
        """The chosen rows, in their order."""
        values: dict[str, Any] = {}
        for column in fields(self):
            value = getattr(self, column.name)
            values[column.name] = (
                {name: inner[which] for name, inner in value.items()} if isinstance(value, Mapping) else value[which]
            )
        return NightData(**values)

    @property
    def atoms(self) -> FloatArray:
        """Detected atoms a + b, (n_attempt,)."""
        return self.atoms_a + self.atoms_b


@dataclass(frozen=True, kw_only=True)
class Chosen:
    """The shots that count, and how many do not, each under the first reason that applies."""

    data: NightData
    left_out: Mapping[str, int]
    total: int


def choose(data: NightData, *, cut_flags: Sequence[str] = ()) -> Chosen:
    """The measuring shots that carry a population fraction.

    Nothing is left out for the size of its result; only for what happened to the shot. Warm-up, checking and sounding
    shots are not part of the measurement and are counted under their own names.

    Args:
        cut_flags: flags of the rig that exclude a shot, declared before the data are looked at.

    Returns:
        Chosen; `left_out` maps a reason in plain words to a number of shots.
    """
    flags = [set(filter(None, text.split(","))) for text in data.flags.tolist()]
    with np.errstate(invalid="ignore"):
        reasons: list[tuple[str, BoolArray]] = [
            ("warm-up shots", data.kind == Kind.WARM_UP),
            ("checking shots", data.kind == Kind.CHECK),
            ("soundings", data.kind == Kind.SOUNDING),
            ("the rig says failed", data.state == "failed"),
            ("withdrawn before they ran", data.state == "withdrawn"),
            ("lost: may have run, no result", data.state == "lost"),
            ("no end on record", data.state != "done"),
            ("the detector was saturated", data.saturated > 0),
            ("atom counts missing or not finite", ~(np.isfinite(data.atoms_a) & np.isfinite(data.atoms_b))),
            ("no atoms detected", ~(data.atoms > 0)),
            ("hold or readout phase not on record", ~(np.isfinite(data.hold_s) & np.isfinite(data.phase_rad))),
        ]
        reasons += [
            (f"flagged {name} (declared cut)", np.array([name in here for here in flags], dtype=bool))
            for name in cut_flags
        ]
    keep = np.ones(len(data), dtype=bool)
    left_out: dict[str, int] = {}
    for reason, applies in reasons:
        hit = keep & applies
        if hit.any():
            left_out[reason] = int(hit.sum())
        keep &= ~applies
    return Chosen(data=data.rows(keep), left_out=left_out, total=len(data))


def fractions(data: NightData) -> FloatArray:
    """Population fraction y = a / (a + b), (n_shot,); counts are taken as the rig corrected them for background."""
    return np.asarray(data.atoms_a / data.atoms)


def shot_variance(
    data: NightData, *, expected: FloatArray | float = 0.5, detection_noise_atoms: float = 0.0
) -> FloatArray:
    """Variance of y from projection noise and, where it is known, detection noise.

    Args:
        expected: expected fraction, (n_shot,) or one number; 0.5 gives equal weights to equal atom numbers.
        detection_noise_atoms: standard deviation that the detector adds to each output's count.

    Returns:
        Variance, (n_shot,). With y = a/(a+b) and independent noise s in a and b the detector adds
        s^2 (1 - 2y + 2y^2) / N^2 (error propagation).
    """
    p = np.broadcast_to(np.asarray(expected, float), (len(data),))
    detector = detection_noise_atoms**2 * (1 - 2 * p + 2 * p**2) / data.atoms**2
    return np.asarray(projection_variance(p, data.atoms) + detector)


def distinct_holds(hold_s: FloatArray) -> tuple[FloatArray, IntArray]:
    """The holds of a night, those alike to 1e-5 counted as one.

    Returns:
        Holds in s, ascending, (n_hold,), and which one each shot has, (n_shot,).
    """
    order = np.argsort(hold_s, kind="stable")
    ordered = hold_s[order]
    steps = np.diff(ordered, prepend=ordered[:1]) > SAME_HOLD * np.maximum(np.abs(ordered), 1e-6)
    label = np.cumsum(steps)
    which = np.empty(len(hold_s), dtype=np.int64)
    which[order] = label
    count = int(label[-1]) + 1 if len(label) else 0
    return np.bincount(label, weights=ordered, minlength=count) / np.bincount(label, minlength=count), which
