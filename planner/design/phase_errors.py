"""Errors of a fringe's phase, small or not: weak fringes are off by half a turn more often than a normal law says.

A full fringe gives a vector (C cos phi, C sin phi) with an equal normal error on both components. With s the phase
error of a strong fringe (its contrast error over its contrast), the error delta of the phase has the density

    p(delta) = exp(-1 / (2 s^2)) / (2 pi) + cos(delta) / (s sqrt(2 pi)) Phi(cos(delta) / s) exp(-sin(delta)^2 / (2 s^2))

on (-pi, pi), Phi the normal distribution function: the integral over the length of a plane normal law with mean
(1, 0), done in closed form. Small s gives a normal law of width s; at s = 0.6 one phase in 20 is off by more than a
quarter turn.
"""

import numpy as np

from planner.arrays import FloatArray

POINTS = 2001  # of the grid: trapezoids of a smooth density, relative error below 1e-6 (tests compare with quadrature)
REACH = 12.0  # standard errors in which the points are densest


def density(delta_rad: FloatArray, sigma_rad: float) -> FloatArray:
    """p(delta) for |delta| <= pi, per rad; sigma_rad > 0 is the phase error of a strong fringe."""
    from scipy.special import ndtr

    cosine, sine = np.cos(delta_rad), np.sin(delta_rad)
    floor = np.exp(-0.5 / sigma_rad**2) / (2 * np.pi)
    peak = cosine / (sigma_rad * np.sqrt(2 * np.pi)) * ndtr(cosine / sigma_rad) * np.exp(-0.5 * (sine / sigma_rad) ** 2)
    return np.asarray(np.maximum(floor + peak, 0.0))


def wrong_turn(ratio: float, sigma_low: float, sigma_high: float, *, normal_low: bool = False) -> float:
    """Chance that the turns of a phase are miscounted from one whose scale is `ratio` times smaller.

    Wrong if |delta_high - ratio delta_low| > pi. Both errors have the law above; with normal_low the lower one is
    normal, as knowledge from before is.
    """
    low, weight = _grid(sigma_low)
    if normal_low:
        chance = np.exp(-0.5 * (low / sigma_low) ** 2) / (sigma_low * np.sqrt(2 * np.pi))
    else:
        chance = density(low, sigma_low)
    high, step = _grid(sigma_high)
    mass = density(high, sigma_high) * step
    beyond = np.r_[np.cumsum(mass[::-1])[::-1], 0.0]  # chance of the points from k on
    # by symmetry P(delta_high < ratio delta_low - pi) for delta_low is P(delta_high > pi - ratio delta_low) for it
    above = np.interp(np.pi - ratio * low, high, (beyond[:-1] + beyond[1:]) / 2, left=1.0, right=0.0)
    return float(min(1.0, 2 * np.sum(chance * weight * above)))


def _grid(sigma: float) -> tuple[FloatArray, FloatArray]:
    """Points in [-pi, pi], dense near zero where sigma is small, and their trapezoid weights."""
    core = min(1.0, REACH * sigma / np.pi)
    u = np.linspace(-1.0, 1.0, POINTS)
    points = np.pi * (core * u + (1 - core) * u**5)
    return points, np.gradient(points)
