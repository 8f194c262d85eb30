"""Whole nights along a running order, drift drawn with them: what would the wanted parity come out as?

Every rehearsal draws the noise of every shot and, at the order's own times, each declared kind of drift; then it
estimates the signal as a weighted sum of the shots' fractions. The forecast adds the variance of drift by formula; this
is the same night played out.

    y = 1/2 + (C/2) cos(theta + p kappa s) + noise + sigma [a(t) - sqrt2 sin(theta) b(t) + sqrt2 cos(theta) c(t)]

p is the product of the wanted switches, kappa the scale factor, sigma a shot's noise; a, b, c are additive, phase and
contrast drift in its units (effects.py), b with the drift of the acceleration. The fringe is taken as followed: theta
counts from its top.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.signal import Scale
from planner.design.drift import Prior, added_variance, drifts_of, prior_of
from planner.design.forecast.rehearsal import SingleArray
from planner.design.running_order import Kind, RunningOrder
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

CHUNK = 2_000_000  # shots in memory at once


@dataclass(frozen=True, kw_only=True)
class Played:
    """The measured shots of an order in running order; arrays of shape (n_shot,).

    parity: +1 or -1; additive, phase, contrast, acceleration: priors, the last in m/s^2; per_acceleration turns that
    into noise of a shot (None: no such drift).
    """

    mid_s: FloatArray
    hold_s: FloatArray
    phase_rad: FloatArray
    parity: FloatArray
    additive: Prior
    phase: Prior
    contrast: Prior
    acceleration: Prior
    per_acceleration: FloatArray | None


def played(order: RunningOrder, table: ShotTable, sequence: Sequence, *, drift: bool = True) -> Played:
    """What a rehearsal needs of an order: its measured shots, the wanted parity, and its drift (or none).

    Drift is the declared one; for a kind that is not declared the reference walk, as in the order's own figures.
    """
    measured = order.kind == int(Kind.MEASURE)
    rows = order.shot[measured]
    parity = np.ones(len(rows))
    for name in sequence.goal.wanted:
        parity = parity * table.switches[name][rows]
    drifts = drifts_of(sequence, table)
    none = Prior(rate=0.0)
    phase, contrast = drifts.coupled, none
    if any(one.kind in ("phase", "contrast") for one in sequence.drift):
        phase, contrast = prior_of(sequence, "phase"), prior_of(sequence, "contrast")
    moved = drift and drifts.per_acceleration is not None
    return Played(
        mid_s=(order.start_s + order.settle_s + order.duration_s / 2)[measured],
        hold_s=table.hold_s[rows],
        phase_rad=table.phase_rad[rows],
        parity=parity,
        additive=drifts.additive if drift else none,
        phase=phase if drift else none,
        contrast=contrast if drift else none,
        acceleration=drifts.acceleration if drift else none,
        per_acceleration=drifts.per_acceleration[rows] if moved and drifts.per_acceleration is not None else None,
    )


def draw_drift(rng: np.random.Generator, prior: Prior, mid_s: FloatArray, trials: int) -> SingleArray:
    """Paths (trials, n_shot) of a prior at rising times: the walk's steps summed, and rhythms of random phase."""
    out = np.zeros((trials, len(mid_s)), dtype=np.float32)
    if prior.rate > 0.0:
        step = np.sqrt(prior.rate * np.diff(mid_s, prepend=0.0)).astype(np.float32)
        out += np.cumsum(rng.standard_normal(out.shape, dtype=np.float32) * step, axis=1)
    for omega, power in zip(prior.omega, prior.power, strict=True):
        size = rng.standard_normal((trials, 2), dtype=np.float32) * np.float32(np.sqrt(power))
        out += size @ np.stack([np.cos(omega * mid_s), np.sin(omega * mid_s)]).astype(np.float32)
    return out


@dataclass(frozen=True, kw_only=True)
class _Estimate:
    """The signal as a weighted sum of the fractions; arrays of shape (n_shot,)."""

    weight: FloatArray
    noise: FloatArray  # weight times the shot's noise
    reach: list[tuple[Prior, FloatArray]]  # drift, and what a unit of it moves the signal by at each shot


def _estimate(rig: Knowledge, scale: Scale, night: Played, mean: FloatArray) -> _Estimate:
    """Best weights for the wanted parity, the fringe followed and its contrast known."""
    contrast, sigma2 = rig.contrast_at(night.hold_s), rig.variance_at(night.hold_s)
    slope = -contrast / 2 * np.sin(night.phase_rad) * night.parity * scale.at(night.hold_s)  # dy/ds
    weight = slope / sigma2
    weight /= weight @ slope
    unit = weight * np.sqrt(sigma2)
    turning = -np.sqrt(2.0) * np.sin(night.phase_rad) * unit
    reach = [
        (night.additive, unit),
        (night.phase, turning),
        (night.contrast, np.sqrt(2.0) * np.cos(night.phase_rad) * unit),
    ]
    if night.per_acceleration is not None:
        reach.append((night.acceleration, turning * night.per_acceleration))
    noise = weight * np.sqrt(rig.excess * mean * (1 - mean) / rig.atoms_at(night.hold_s))
    return _Estimate(weight=weight, noise=noise, reach=reach)


def signal_widening(rig: Knowledge, scale: Scale, night: Played) -> float:
    """Variance that drift adds to the signal, over its variance from noise."""
    mean = 0.5 + rig.contrast_at(night.hold_s) / 2 * np.cos(night.phase_rad)
    estimate = _estimate(rig, scale, night, mean)
    drift = sum(float(added_variance(share, night.mid_s, prior)) for prior, share in estimate.reach)
    return drift / float(estimate.noise @ estimate.noise)


def rehearse_signal(
    rng: np.random.Generator, rig: Knowledge, scale: Scale, night: Played, signal: float, trials: int
) -> FloatArray:
    """Signals (trials,) in m/s^2 that nights with a true `signal` would find, the contrast taken as known."""
    turn = night.phase_rad + night.parity * scale.at(night.hold_s) * signal
    mean = 0.5 + rig.contrast_at(night.hold_s) / 2 * np.cos(turn)
    estimate = _estimate(rig, scale, night, mean)
    by_noise, steady = estimate.noise.astype(np.float32), float(estimate.weight @ mean)
    out = np.full(trials, steady)
    step = max(1, CHUNK // len(by_noise))
    for first in range(0, trials, step):
        count = min(step, trials - first)
        part = out[first : first + count]
        part += rng.standard_normal((count, len(by_noise)), dtype=np.float32) @ by_noise
        for prior, share in estimate.reach:
            if prior.rate > 0.0 or prior.periods_s:
                part += draw_drift(rng, prior, night.mid_s, count) @ share.astype(np.float32)
    return out
