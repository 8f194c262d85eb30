"""Noise of a fringe: projection noise, the shot-noise limit of the phase, the Cramer-Rao bounds of a fit.

Projection noise: each of N atoms falls into one of two outputs (Itano et al., PRA 47, 3554 (1993), from memory).
"""

import numpy as np

from planner.arrays import FloatArray


def projection_variance(fraction: FloatArray, atoms: FloatArray) -> FloatArray:
    """Variance of the measured fraction: y (1 - y) / N."""
    y = np.asarray(fraction, dtype=np.float64)
    return np.asarray(y * (1 - y) / np.asarray(atoms, dtype=np.float64))


def shot_noise_limit(contrast: FloatArray | float, atoms: FloatArray | float) -> FloatArray:
    """sigma_phi = 1 / (C sqrt(N)), rad: one shot at mid-fringe, where dy/dphi = C/2 and y = 1/2."""
    return np.asarray(1.0 / (np.asarray(contrast, dtype=np.float64) * np.sqrt(np.asarray(atoms, dtype=np.float64))))


def phase_noise(contrast: float, atoms: float, phase_rad: FloatArray | float) -> FloatArray:
    """sigma_phi = sqrt(y (1 - y) / N) / |dy/dphi| at any place of the fringe, rad; infinite at its top and bottom."""
    phase = np.asarray(phase_rad, dtype=np.float64)
    y = 0.5 + contrast / 2 * np.cos(phase)
    with np.errstate(divide="ignore"):
        return np.asarray(np.sqrt(y * (1 - y) / atoms) / np.abs(contrast / 2 * np.sin(phase)))


def fringe_bounds(shots: int, sigma: float, contrast: float) -> tuple[float, float, float]:
    """Cramer-Rao bounds (variances) of contrast, phase and offset for y = B + (C/2) cos(phi + theta).

    `shots` equally spaced phases over whole turns, each with standard deviation sigma: var C = 8 sigma^2 / n,
    var phi = 8 sigma^2 / (n C^2), var B = sigma^2 / n (Kay, Estimation Theory (1993), from memory; with amplitude C/2).
    """
    return 8 * sigma**2 / shots, 8 * sigma**2 / (shots * contrast**2), sigma**2 / shots


def contrast_under_phase_noise(contrast: FloatArray | float, phase_sigma: FloatArray | float) -> FloatArray:
    """Mean fringe contrast when the phase jitters from shot to shot: C exp(-s^2 / 2), s its standard deviation (rad).

    The characteristic function of a normal distribution. The atoms are as coherent as before; the fringe is blurred.
    """
    return np.asarray(np.asarray(contrast) * np.exp(-(np.asarray(phase_sigma, dtype=np.float64) ** 2) / 2))
