"""Rehearsals by the thousand: the counts of whole nights drawn at random, and what an analyst would make of them.

A rehearsal draws every shot of the night and estimates the goal quantities from it: contrast of a hold from the mean
squared contrast of its packets (phases may differ from packet to packet), the coherence time by a weighted fit through
the holds. The same model as the forecast's, worked out shot by shot instead of by formula: the one checks the other.
Signals are rehearsed in whole_nights.py, along a running order and with drift.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from planner.arrays import FloatArray, IntArray
from planner.design.allocation.knowledge import Knowledge

SingleArray = NDArray[np.float32]

CHUNK = 4_000_000  # shots in memory at once
STEPS = 12  # of the fit


@dataclass(frozen=True, kw_only=True)
class Night:
    """What is rehearsed: packets (n_hold,) of full fringes with `phases` readout phases at each hold (n_hold,)."""

    hold_s: FloatArray
    packets: IntArray
    phases: int


def draw_fractions(
    rng: np.random.Generator, phase_rad: SingleArray, contrast: float, atoms: float, excess: float
) -> SingleArray:
    """Population fractions, one for each phase: the fringe plus normal noise of variance excess y (1 - y) / atoms.

    Single precision: a fraction is known to a thousandth at best.
    """
    y = np.float32(0.5) + np.float32(contrast / 2) * np.cos(phase_rad, dtype=np.float32)
    sigma = np.sqrt(np.float32(excess / atoms) * y * (1 - y))
    return np.asarray(y + sigma * rng.standard_normal(y.shape, dtype=np.float32))


def squared_contrasts(rng: np.random.Generator, rig: Knowledge, night: Night, trials: int) -> FloatArray:
    """Unbiased squared contrast of each hold in each trial, (trials, n_hold).

    Each packet has a phase of its own; its squared contrast is 4 (a^2 + b^2) less the part that noise alone gives,
    8 sigma_y^2 / n twice over.
    """
    out = np.zeros((trials, len(night.hold_s)))
    theta = 2 * np.pi * np.arange(night.phases) / night.phases
    cosine, sine = (
        (2 / night.phases * np.cos(theta)).astype(np.float32),
        (2 / night.phases * np.sin(theta)).astype(np.float32),
    )
    for h, hold in enumerate(night.hold_s):
        one = np.array([hold])
        contrast, atoms = float(rig.contrast_at(one)[0]), float(rig.atoms_at(one)[0])
        noise = 8 * float(rig.variance_at(one)[0]) / night.phases
        step = max(1, CHUNK // (int(night.packets[h]) * night.phases))
        for first in range(0, trials, step):
            count = min(step, trials - first)
            start = rng.random((count, int(night.packets[h])), dtype=np.float32) * np.float32(2 * np.pi)
            y = draw_fractions(rng, start[..., None] + theta.astype(np.float32), contrast, atoms, rig.excess)
            squared = 4 * ((y @ cosine) ** 2 + (y @ sine) ** 2)
            out[first : first + count, h] = squared.mean(axis=1) - 2 * noise
    return out


def fit_coherence(rig: Knowledge, night: Night, squared: FloatArray) -> FloatArray:
    """Coherence times (trials,) from squared contrasts (trials, n_hold): weighted fit of C_0^2 exp(-2 T / tau).

    Gauss and Newton from the expected values, weights from the expected variances; a step never changes either number
    by more than a factor of two.
    """
    # a squared contrast has the variance 4 C^2 over what a packet tells of C
    packet = replace(rig, phases=night.phases, states=1)
    weight = night.packets * packet.contrast_information(night.hold_s) / (4 * rig.contrast_at(night.hold_s) ** 2)
    log_start = np.full(len(squared), 2 * np.log(rig.contrast))
    log_tau = np.full(len(squared), np.log(rig.coherence_s))
    for _ in range(STEPS):
        turn = 2 * night.hold_s[None] / np.exp(log_tau)[:, None]
        value = np.exp(log_start[:, None] - turn)
        rest = squared - value
        a, b = value, value * turn  # slopes about log C_0^2 and log tau
        aa, ab, bb = ((weight * x * y).sum(axis=1) for x, y in ((a, a), (a, b), (b, b)))
        ra, rb = (weight * a * rest).sum(axis=1), (weight * b * rest).sum(axis=1)
        determinant = aa * bb - ab**2
        log_start += np.clip((bb * ra - ab * rb) / determinant, -0.7, 0.7)
        log_tau += np.clip((aa * rb - ab * ra) / determinant, -0.7, 0.7)
    return np.asarray(np.exp(log_tau))


def rehearse_coherence(rng: np.random.Generator, rig: Knowledge, night: Night, trials: int) -> FloatArray:
    """Coherence times that `trials` nights would find, (trials,)."""
    return fit_coherence(rig, night, squared_contrasts(rng, rig, night, trials))
