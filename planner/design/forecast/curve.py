"""Expected error of each goal quantity against time through the night, with a band from what is uncertain.

Packets tell when they are complete. By a time t the night holds so many packets of each hold, and their information
adds up (knowledge.py says what one packet tells). Drift widens the error by the variance that the order lets through
(quality.py). The band comes from other rigs that are as likely: log-normal draws of what is known with an uncertainty.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.signal import Scale, signal_variance_rate
from planner.design.running_order import Kind, RunningOrder
from planner.sequence.table import ShotTable

POINTS = 48  # times at which the errors are given
DRAWS = 600  # rigs behind the band
BAND = (0.05, 0.95)
SINGULAR = 1e-9  # smallest eigenvalue of a scaled information matrix that counts as knowing
UNITS = {
    "modulation depth": "relative",
    "plateau": "contrast",
    "contrast at the worst hold": "relative",
    "coherence time": "s",
    "population lifetime": "s",
    "signal": "m/s^2",
}
ALTERNATIVES = (0.5, 0.7, 0.85, 1.15, 1.4, 2.0)  # of the hold, looked at beside it


@dataclass(frozen=True, kw_only=True)
class Progress:
    """Packets complete by each time: counts (n_time, n_hold) at holds (n_hold,) and times (n_time,) in s."""

    time_s: FloatArray
    hold_s: FloatArray
    counts: IntArray
    shots: IntArray  # shots of one packet at each hold


@dataclass(frozen=True, kw_only=True)
class Forecast:
    """One quantity. Arrays of shape (n_time,): expected standard error and its band. inf before anything is known."""

    name: str
    unit: str
    time_s: FloatArray
    error: FloatArray
    low: FloatArray
    high: FloatArray

    def reached_s(self, target: float) -> float | None:
        """When the expected error falls to the target, s from the night's start; None if it never does."""
        below = np.flatnonzero(self.error <= target)
        return float(self.time_s[below[0]]) if len(below) else None


def progress_of(order: RunningOrder, table: ShotTable, points: int = POINTS) -> Progress:
    """How many packets of each hold are complete by evenly spaced times of an order."""
    measured = order.kind == int(Kind.MEASURE)
    packet, row = order.packet[measured], order.shot[measured]
    end = (order.start_s + order.settle_s + order.duration_s)[measured]
    first = np.flatnonzero(np.diff(packet, prepend=-2))
    size = np.diff(np.r_[first, len(packet)])
    done = np.maximum.reduceat(end, first)
    hold, which = np.unique(table.hold_s[row[first]], return_inverse=True)
    time = np.linspace(0.0, float(end.max()), points + 1)[1:]
    counts = np.zeros((points, len(hold)), dtype=np.int64)
    np.add.at(counts, (np.minimum(np.searchsorted(time, done), points - 1), which.reshape(-1)), 1)
    shots = np.array([int(size[which.reshape(-1) == k].max()) for k in range(len(hold))])
    return Progress(time_s=time, hold_s=hold, counts=np.cumsum(counts, axis=0), shots=shots)


def known_to(information: FloatArray, slopes: FloatArray, counts: IntArray, wanted: FloatArray) -> FloatArray:
    """Sum of the variances of the wanted combinations by each time, (n_time,); inf while they cannot be told.

    information (n_hold,): what a packet tells of the curve at each hold; slopes (n_hold, n_parameter): of the curve by
    its parameters; counts (n_time, n_hold); wanted (n_parameter, n_combination).
    """
    each = information[:, None, None] * slopes[:, :, None] * slopes[:, None, :]
    matrix = np.einsum("th,hpq->tpq", counts.astype(np.float64), each)
    scale = np.sqrt(np.maximum(np.diagonal(matrix, axis1=1, axis2=2), np.finfo(float).tiny))
    matrix /= scale[:, :, None] * scale[:, None, :]
    known = np.linalg.eigvalsh(matrix)[:, 0] > SINGULAR
    out = np.full(len(counts), np.inf)
    scaled = wanted[None] / scale[known][:, :, None]
    out[known] = (scaled * np.linalg.solve(matrix[known], scaled)).sum(axis=(1, 2))
    return out


def decay_errors(rig: Knowledge, progress: Progress, widen: float = 0.0) -> dict[str, FloatArray]:
    """Standard errors (n_time,) of coherence time and population lifetime, s; `widen`: variance that drift adds."""
    contrast, atoms = _packets(rig, progress)
    wanted = np.array([[0.0], [1.0]])
    out = {}
    for name, start, time_s, information in (
        ("coherence time", rig.contrast_at(progress.hold_s), rig.coherence_s, contrast),
        ("population lifetime", rig.atoms_at(progress.hold_s), rig.lifetime_s, atoms),
    ):
        slopes = np.stack([start, start * progress.hold_s / time_s], axis=1)
        out[name] = time_s * np.sqrt(known_to(information, slopes, progress.counts, wanted) * (1 + widen))
    return out


def modulation_error(rig: Knowledge, progress: Progress, period_s: float, widen: float = 0.0) -> FloatArray:
    """Standard error (n_time,) of the relative depth of a contrast modulation of known period and unknown phase."""
    hold = progress.hold_s
    contrast, turn = rig.contrast_at(hold), 2 * np.pi * hold / period_s
    slopes = contrast[:, None] * np.stack(
        [np.ones(len(hold)), hold / rig.coherence_s, np.cos(turn), np.sin(turn)], axis=1
    )
    information, _ = _packets(rig, progress)
    return np.asarray(np.sqrt(known_to(information, slopes, progress.counts, np.eye(4)[:, 2:]) / 2 * (1 + widen)))


def level_error(rig: Knowledge, progress: Progress, plateau: float, widen: float = 0.0) -> FloatArray:
    """Standard error (n_time,) of the contrast at which a decay levels off, if it does so at `plateau`."""
    falling = np.exp(-progress.hold_s / rig.coherence_s)
    height = rig.contrast - plateau
    slopes = np.stack([falling, height * falling * progress.hold_s / rig.coherence_s, np.ones(len(falling))], axis=1)
    information, _ = _packets(rig, progress, plateau + height * falling)
    return np.asarray(np.sqrt(known_to(information, slopes, progress.counts, np.eye(3)[:, 2:]) * (1 + widen)))


def worst_contrast_error(rig: Knowledge, progress: Progress, widen: float = 0.0) -> FloatArray:
    """Relative standard error (n_time,) of the contrast at the hold where it is largest."""
    information, _ = _packets(rig, progress)
    with np.errstate(divide="ignore"):
        each = np.sqrt((1 + widen) / (progress.counts * information)) / rig.contrast_at(progress.hold_s)
    return np.asarray(each.max(axis=1))


def _packets(rig: Knowledge, progress: Progress, contrast: FloatArray | None = None) -> tuple[FloatArray, FloatArray]:
    """Information of one packet about contrast and about atoms at each hold, for packets of the order's own size."""
    about_contrast, about_atoms = np.empty(len(progress.hold_s)), np.empty(len(progress.hold_s))
    for size in np.unique(progress.shots):
        mine = progress.shots == size
        one = replace(rig, phases=int(size), states=1)
        about_contrast[mine] = one.contrast_information(
            progress.hold_s[mine], None if contrast is None else contrast[mine]
        )
        about_atoms[mine] = one.atom_information(progress.hold_s[mine])
    return about_contrast, about_atoms


def signal_error(
    rig: Knowledge, scale: Scale, progress: Progress, information: float, widen: float = 0.0
) -> FloatArray:
    """Standard error (n_time,) of the wanted parity in m/s^2. `information`: what a shot of the order's phases tells of
    the phase against one at mid-fringe (1 for +-90 degrees, a half for four equally spaced phases)."""
    rate = signal_variance_rate(rig, scale, progress.hold_s)  # (m/s^2)^2 s
    seconds = progress.counts * progress.shots * (progress.hold_s + rig.dead_s)
    total = (seconds * information / rate).sum(axis=1)
    with np.errstate(divide="ignore"):
        return np.asarray(np.sqrt((1 + widen) / total))


def phase_information(phases_rad: FloatArray) -> float:
    """Mean of sin^2 over the readout phases, the fringe followed so that 0 is its top."""
    return float(np.mean(np.sin(phases_rad) ** 2))


def forecasts(
    rig: Knowledge,
    progress: Progress,
    *,
    scale: Scale | None,
    information: float,
    widen: Mapping[str, float],
    goal: str = "",
    details: Mapping[str, float] | None = None,
    seed: int = 0,
) -> list[Forecast]:
    """All quantities that the night can know: what the goal asks for, time scales if it has two holds, the signal if
    `scale` is given.

    widen: variance that drift adds, by quantity ("signal", "decay"). goal and details: as in `Sequence.goal`.
    """
    asked, decay = details or {}, widen.get("decay", 0.0)

    def errors(one: Knowledge) -> dict[str, FloatArray]:
        found: dict[str, FloatArray] = {}
        if goal == "revival" and "period_s" in asked:
            found["modulation depth"] = modulation_error(one, progress, asked["period_s"], decay)
        if goal == "plateau" and "plateau" in asked:
            found["plateau"] = level_error(one, progress, asked["plateau"], decay)
        if goal == "curve":
            found["contrast at the worst hold"] = worst_contrast_error(one, progress, decay)
        if len(progress.hold_s) > 1:
            found |= decay_errors(one, progress, decay)
        if scale is not None:
            found["signal"] = signal_error(one, scale, progress, information, widen.get("signal", 0.0))
        return found

    centre = errors(rig)
    others = [errors(one) for one in (rig.draws(seed, DRAWS) if rig.spread else [rig])]
    out = []
    for name, error in centre.items():
        band = np.array([other[name] for other in others])
        finite = np.isfinite(band).all(axis=0)
        low, high = np.full(len(error), np.inf), np.full(len(error), np.inf)
        low[finite], high[finite] = np.quantile(band[:, finite], BAND, axis=0)
        out.append(Forecast(name=name, unit=UNITS[name], time_s=progress.time_s, error=error, low=low, high=high))
    return out


def alternatives(rig: Knowledge, scale: Scale, hold_s: float) -> list[tuple[float, float]]:
    """Other holds for the signal and how the hours change: (hold in s, hours over the present hours), best first."""
    holds = np.array([hold_s * factor for factor in ALTERNATIVES])
    holds = holds[(holds >= rig.shortest_s) & (holds <= rig.longest_s)]
    now = float(signal_variance_rate(rig, scale, np.array([hold_s]))[0])
    changes = signal_variance_rate(rig, scale, holds) / now
    return sorted(zip(holds.tolist(), changes.tolist(), strict=True), key=lambda pair: pair[1])
