"""Rehearsals by the thousand: whole nights drawn at random along a running order, and what an analyst would find.

A rehearsal draws the noise of every shot and, at the order's own times, each declared kind of drift; then it estimates
what the night is for. The forecast works by formula; this is the same night played out, and the one checks the other.

    y = 1/2 + (C/2 + sqrt2 sigma c(t)) cos(theta + phi + sqrt8 sigma b(t) / C + p kappa s) + sigma a(t) + noise

a, b, c are additive, phase and contrast drift in single-shot noise sigma, b with the drift of the acceleration; p is
the parity, s the signal. Single precision: a fraction is known to a thousandth at best.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import ATOM_SCATTER, Knowledge
from planner.design.drift import Prior
from planner.design.forecast.decays import packet_information
from planner.design.forecast.night import Night, drifts
from planner.design.forecast.progress import Progress, progress_of, times_of
from planner.design.forecast.signals import drift_reach, estimate_weights, points_of, shot_variance

SingleArray = NDArray[np.float32]

CHUNK = 1_000_000  # shots in memory at once
STEPS = 12  # of the fit
STRIDE = 0.7  # of a step of the fit: a factor of two at most


def draw_drift(rng: np.random.Generator, prior: Prior, mid_s: FloatArray, trials: int) -> SingleArray:
    """Paths (trials, n_shot) of a prior at rising times: the walk's steps summed, and rhythms of random phase."""
    out = np.zeros((trials, len(mid_s)), dtype=np.float32)
    if prior.rate > 0.0:
        step = np.sqrt(prior.rate * np.diff(mid_s, prepend=0.0)).astype(np.float32)
        np.cumsum(rng.standard_normal(out.shape, dtype=np.float32) * step, axis=1, out=out)
    for omega, power in zip(prior.omega, prior.power, strict=True):
        size = rng.standard_normal((trials, 2), dtype=np.float32) * np.float32(np.sqrt(power))
        out += size @ np.stack([np.cos(omega * mid_s), np.sin(omega * mid_s)]).astype(np.float32)
    return out


@dataclass(frozen=True, kw_only=True)
class Rehearsal:
    """What every trial of a night shares. `rig` is the rig as it is; the analyst weighs with it too."""

    night: Night
    rig: Knowledge

    @cached_property
    def progress(self) -> Progress:
        """The whole night's packets."""
        return progress_of(self.night, times_of(self.night, points=1))

    def time_scales(self, rng: np.random.Generator, trials: int) -> FloatArray:
        """Coherence times and population lifetimes that `trials` nights would find, (trials, 2), s.

        Each packet has a phase of its own. The coherence time is fitted to the mean squared contrasts of the holds,
        the lifetime to the logarithms of their mean atom numbers.
        """
        out = np.empty((trials, 2))
        step = max(1, CHUNK // len(self.night))
        for first in range(0, trials, step):
            part = slice(first, min(first + step, trials))
            out[part, 0] = self.fit_coherence(self.squared_contrasts(rng, part.stop - first))
            out[part, 1] = self.draw_lifetimes(rng, part.stop - first)
        return out

    def squared_contrasts(self, rng: np.random.Generator, trials: int) -> FloatArray:
        """Unbiased squared contrast of each hold in each trial, (trials, n_hold): the mean over its packets of
        4 (a^2 + b^2), a and b the fitted quadratures, less the part that noise alone gives."""
        night, rig = self.night, self.rig
        fitted, noise = _quadratures(night)
        start = rng.random((trials, int(night.packet[-1]) + 1), dtype=np.float32) * np.float32(2 * np.pi)
        y = self._fractions(rng, start[:, night.packet])
        first = np.flatnonzero(np.diff(night.packet, prepend=-1))
        a, b = (np.add.reduceat(y * weights.astype(np.float32), first, axis=1) for weights in fitted)
        lone = 4 * (night.noise(rig) * noise)[first]
        squared = 4 * (a.astype(np.float64) ** 2 + b.astype(np.float64) ** 2) - lone
        _, which = np.unique(night.hold_s[first], return_inverse=True)
        belongs = which.reshape(-1)[:, None] == np.arange(int(which.max()) + 1)
        return np.asarray(squared @ (belongs / belongs.sum(axis=0)))

    def _fractions(self, rng: np.random.Generator, phase: SingleArray) -> SingleArray:
        """Population fractions at fringe phases (trials, n_shot), no signal."""
        night, rig = self.night, self.rig
        trials, contrast, sigma = len(phase), night.contrast(rig), np.sqrt(night.noise(rig))
        angle = phase + night.phase_rad.astype(np.float32)
        half = (contrast / 2).astype(np.float32)
        for prior, unit in (
            (night.drift.phase, np.sqrt(8) * sigma / contrast),
            (night.drift.acceleration, night.per_acceleration * np.sqrt(8) * sigma / contrast),
        ):
            if drifts(prior):
                angle += draw_drift(rng, prior, night.mid_s, trials) * unit.astype(np.float32)
        if drifts(night.drift.contrast):
            moved = draw_drift(rng, night.drift.contrast, night.mid_s, trials)
            half = half + moved * (np.sqrt(2) * sigma).astype(np.float32)
        y = np.float32(0.5) + half * np.cos(angle, out=angle)
        scale = (rig.excess / rig.atoms_at(night.hold_s)).astype(np.float32)
        wide = np.sqrt(scale * np.clip(y * (1 - y), 0.0, None))
        y += wide * rng.standard_normal(y.shape, dtype=np.float32)
        if drifts(night.drift.additive):
            y += draw_drift(rng, night.drift.additive, night.mid_s, trials) * sigma.astype(np.float32)
        return np.asarray(y)

    def fit_coherence(self, squared: FloatArray) -> FloatArray:
        """Coherence times (trials,) from squared contrasts (trials, n_hold): weighted fit of C_0^2 exp(-2 T / tau).

        Gauss and Newton from the expected values, weights from the expected variances, which are 4 C^2 over what the
        packets tell of C.
        """
        rig, progress = self.rig, self.progress
        hold = progress.hold_s
        told, _ = packet_information(rig, progress)
        weight = progress.counts[-1] * told / (4 * rig.contrast_at(hold) ** 2)
        log_start = np.full(len(squared), 2 * np.log(rig.contrast))
        log_tau = np.full(len(squared), np.log(rig.coherence_s))
        for _ in range(STEPS):
            turn = 2 * hold[None] / np.exp(log_tau)[:, None]
            a = np.exp(log_start[:, None] - turn)
            b = a * turn  # slopes about log C_0^2 and log tau
            rest = squared - a
            aa, ab, bb = ((weight * x * y).sum(axis=1) for x, y in ((a, a), (a, b), (b, b)))
            ra, rb = (weight * a * rest).sum(axis=1), (weight * b * rest).sum(axis=1)
            determinant = aa * bb - ab**2
            log_start += np.clip((bb * ra - ab * rb) / determinant, -STRIDE, STRIDE)
            log_tau += np.clip((aa * rb - ab * ra) / determinant, -STRIDE, STRIDE)
        return np.asarray(np.exp(log_tau))

    def draw_lifetimes(self, rng: np.random.Generator, trials: int) -> FloatArray:
        """Population lifetimes (trials,): a straight line through the logarithms of the holds' mean atom numbers.

        The mean of n shots is drawn at once: a normal number of variance (N + (scatter N)^2) / n.
        """
        progress = self.progress
        atoms, hold = self.rig.atoms_at(progress.hold_s), progress.hold_s
        relative = np.sqrt((1 / atoms + ATOM_SCATTER**2) / (progress.counts[-1] * progress.shots))
        logs = np.log(atoms) + np.log1p(relative * rng.standard_normal((trials, len(hold))))
        weight = relative**-2
        centred = hold - weight @ hold / weight.sum()
        return np.asarray(-(weight @ (centred * hold)) / (logs @ (weight * centred)))

    def signals(self, rng: np.random.Generator, trials: int, signal: float = 0.0) -> FloatArray:
        """Signals (trials, 1) in m/s^2 that nights with a true `signal` would find, the contrast taken as known.

        The fringe is taken as followed. The estimate is a weighted sum of the shots' fractions (signals.py), so only
        the sums are kept; drift reaches a shot as its kind does to first order.
        """
        night, rig = self.night, self.rig
        points = points_of(night.without_drift(), rig, self.progress.time_s)
        weights, _ = estimate_weights(night, rig, points.of_shot)
        contrast = night.contrast(rig)
        angle = night.phase_rad + night.parity * night.kappa * signal
        noise = weights * np.sqrt(shot_variance(rig, night.hold_s, contrast, angle))
        out = np.full(trials, float(weights @ (0.5 + contrast / 2 * np.cos(angle))))
        reach = drift_reach(night, rig)
        step = max(1, CHUNK // len(night))
        for first in range(0, trials, step):
            count = min(step, trials - first)
            part = rng.standard_normal((count, len(night)), dtype=np.float32) @ noise.astype(np.float32)
            for kind, response in reach:
                path = draw_drift(rng, getattr(night.drift, kind), night.mid_s, count)
                part += path @ (weights * response).astype(np.float32)
            out[first : first + count] += part
        return out[:, None]


def _quadratures(night: Night) -> tuple[FloatArray, FloatArray]:
    """Weights (2, n_shot) that fit a fringe's cosine and sine parts to each packet, and (n_shot,) the sum of the
    squares of both over the packet."""
    columns = np.stack([np.ones(len(night)), np.cos(night.phase_rad), np.sin(night.phase_rad)], axis=1)
    first = np.flatnonzero(np.diff(night.packet, prepend=-1))
    squares = np.add.reduceat(columns[:, :, None] * columns[:, None, :], first, axis=0)
    inverse = np.linalg.inv(squares)
    fitted = np.einsum("np,npq->nq", columns, inverse[night.packet])[:, 1:]
    noise = inverse[:, 1, 1] + inverse[:, 2, 2]
    return fitted.T, noise[night.packet]
