"""Expected error of the wanted parity, by the information of the shots, and what drift adds to it along the order.

At a fringe that is followed, so that theta counts from its top, a shot moves with the phase by q = -(C/2) sin(theta)
and has the noise sigma^2 = excess y (1 - y) / N. The phase common to both signs of the parity is free at each point of
the sweeps. With I+ and I- the sums of q^2 / sigma^2 over the shots of either sign, a point tells

    kappa^2 4 I+ I- / (I+ + I-)

of the signal: nothing before both signs were seen. The estimate is the weighted sum that reaches this,
w = q kappa (p - mean p) / sigma^2, scaled; drift adds w'Kw (design/drift.py), exactly, for this estimate and order.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.drift import added_variance
from planner.design.forecast.night import Night, drifts


@dataclass(frozen=True, kw_only=True)
class Points:
    """Shots complete by each time, counted: counts (n_time, n_point, n_phase, 2), the last axis p = +1 and -1.

    hold_s, stretch, kappa and settings (n_setting, n_point) belong to the points, phase_rad (n_phase,) to the phases;
    `of_shot` (n_shot,) is each shot's point. drift (n_time,): variance that drift adds, over that of noise.
    """

    hold_s: FloatArray
    stretch: FloatArray
    kappa: FloatArray
    settings: FloatArray
    phase_rad: FloatArray
    counts: IntArray
    of_shot: IntArray
    drift: FloatArray


def points_of(night: Night, rig: Knowledge, time_s: FloatArray) -> Points:
    """The points of a night, and what drift adds at the best guess of its rig."""
    columns = np.stack([night.hold_s, night.stretch, night.kappa, *night.settings.values()])
    points, of_shot = np.unique(columns, axis=1, return_inverse=True)
    phase, of_phase = np.unique(np.round(night.phase_rad, 12), return_inverse=True)
    of_shot, of_phase = of_shot.reshape(-1), of_phase.reshape(-1)
    counts = np.zeros((len(time_s), points.shape[1], len(phase), 2), dtype=np.int64)
    when = np.searchsorted(time_s, night.done_s)
    inside = when < len(time_s)
    sign = (night.parity < 0).astype(np.int64)
    np.add.at(counts, (when[inside], of_shot[inside], of_phase[inside], sign[inside]), 1)
    return Points(
        hold_s=points[0],
        stretch=points[1],
        kappa=points[2],
        settings=points[3:],
        phase_rad=phase,
        counts=np.cumsum(counts, axis=0),
        of_shot=of_shot,
        drift=np.array([_drift_by(night, rig, of_shot, time) for time in time_s])
        if night.drift.any
        else np.zeros(len(time_s)),
    )


def information(rig: Knowledge, points: Points) -> FloatArray:
    """What each point tells of the signal by each time, (n_time, n_point), in 1/(m/s^2)^2."""
    contrast = rig.contrast_at(points.hold_s / points.stretch)[:, None]
    q2 = (contrast / 2 * np.sin(points.phase_rad)) ** 2
    each = q2 / shot_variance(rig, points.hold_s[:, None], contrast, points.phase_rad)
    plus, minus = np.moveaxis(np.einsum("tpks,pk->tps", points.counts, each), 2, 0)
    with np.errstate(invalid="ignore"):
        return np.asarray(points.kappa**2 * np.nan_to_num(4 * plus * minus / (plus + minus)))


def signal_errors(
    rig: Knowledge, points: Points, *, offset: FloatArray | None = None, fixed: float = 0.0
) -> dict[str, FloatArray]:
    """Standard error (n_time,) of the signal in m/s^2; with offsets (n_setting,) also that of all told.

    offset: how far each swept setting may stand from where its effect vanishes. "signal, all told" adds the error of
    the slope against each setting, bridged over its offset, as the budget does, and `fixed`, what no rig time mends.
    """
    told = information(rig, points)
    total = told.sum(axis=1)
    wider = 1 + points.drift
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = np.asarray(wider / total)
        out = {"signal": np.sqrt(variance)}
        if offset is not None:
            for setting, distance in zip(points.settings, offset, strict=True):
                mean = told @ setting / total
                spread = (told * (setting - mean[:, None]) ** 2).sum(axis=1)
                variance = variance + wider * distance**2 / spread
            out["signal, all told"] = np.sqrt(np.where(np.isnan(variance), np.inf, variance) + fixed**2)
    return out


def shot_variance(rig: Knowledge, hold_s: FloatArray, contrast: FloatArray, phase_rad: FloatArray) -> FloatArray:
    """Variance of a shot's fraction at its phase: excess y (1 - y) / N."""
    y = np.clip(0.5 + contrast / 2 * np.cos(phase_rad), 1e-6, 1 - 1e-6)
    return np.asarray(rig.excess * y * (1 - y) / rig.atoms_at(hold_s))


def estimate_weights(night: Night, rig: Knowledge, of_shot: IntArray) -> tuple[FloatArray, float]:
    """Weights (n_shot,) of the estimate in m/s^2, and its variance by noise; infinite where it cannot be told."""
    contrast = night.contrast(rig)
    q = -contrast / 2 * np.sin(night.phase_rad)
    sigma2 = shot_variance(rig, night.hold_s, contrast, night.phase_rad)
    told = q**2 / sigma2
    total = np.bincount(of_shot, weights=told)
    mean = np.bincount(of_shot, weights=told * night.parity) / np.maximum(total, np.finfo(float).tiny)
    weights = q / sigma2 * night.kappa * (night.parity - mean[of_shot])
    reached = float(weights @ (q * night.kappa * night.parity))
    if reached <= 0.0:
        return np.zeros(len(q)), np.inf
    return weights / reached, 1 / reached


def drift_reach(night: Night, rig: Knowledge) -> list[tuple[str, FloatArray]]:
    """How one unit of each kind of drift that is declared moves each shot's fraction: (kind, (n_shot,))."""
    sigma = np.sqrt(2.0 * night.noise(rig))
    cosine, sine = sigma * np.cos(night.phase_rad), sigma * np.sin(night.phase_rad)
    reach = {
        "additive": sigma / np.sqrt(2.0),
        "phase": -sine,
        "contrast": cosine,
        "acceleration": -sine * night.per_acceleration,
    }
    return [(kind, response) for kind, response in reach.items() if drifts(getattr(night.drift, kind))]


def _drift_by(night: Night, rig: Knowledge, of_shot: IntArray, time: float) -> float:
    """Variance that drift adds to the estimate from the packets complete by a time, over that of noise."""
    keep = night.done_s <= time
    mine = night.until(time)
    weights, noise = estimate_weights(mine, rig, of_shot[keep]) if keep.any() else (np.zeros(0), np.inf)
    if not np.isfinite(noise):
        return 0.0
    return (
        sum(
            float(added_variance(weights * response, mine.mid_s, getattr(mine.drift, kind)))
            for kind, response in drift_reach(mine, rig)
        )
        / noise
    )
