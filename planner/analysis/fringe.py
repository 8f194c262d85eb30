"""Fringe fits: offset, contrast and phase of many fringes at once, with full covariances.

A shot's population fraction is y = B + (C/2) cos(phi + theta). In terms of the readout phase theta this is linear:
y = offset + cosine cos(theta) + sine sin(theta), with cosine = (C/2) cos(phi) and sine = -(C/2) sin(phi).
"""

from dataclasses import dataclass

import numpy as np
from scipy import special

from planner.analysis.amplitude import amplitude_interval, debiased, zero_test
from planner.arrays import BoolArray, FloatArray, IntArray
from planner.errors import InputError, NotEnoughData

# Smallest determinant of the 3 x 3 information matrix over its trace cubed that still counts as three readout phases;
# rounding alone reaches 1e-16, three phases one degree apart give 1e-9.
SINGULAR = 1e-11


@dataclass(frozen=True, kw_only=True)
class Fringes:
    """Fits of n fringes. `covariance` is in units where each shot has the variance that was given for it.

    A fringe with fewer than three distinct readout phases has `solved` False and NaN elsewhere.
    """

    offset: FloatArray  # (n,) B
    cosine: FloatArray  # (n,) (C/2) cos(phi)
    sine: FloatArray  # (n,) -(C/2) sin(phi)
    covariance: FloatArray  # (n, 3, 3) of offset, cosine, sine
    chi_squared: FloatArray  # (n,) residual sum of squares over the given variance
    shots: IntArray  # (n,)
    solved: BoolArray  # (n,)

    def __len__(self) -> int:
        return len(self.offset)

    @property
    def dof(self) -> IntArray:
        """Residual degrees of freedom, (n,); 0 for what could not be solved."""
        return np.asarray(np.where(self.solved, self.shots - 3, 0), dtype=np.int64)

    @property
    def amplitude_squared(self) -> FloatArray:
        """|q|^2 = (C/2)^2 plus its noise bias, (n,)."""
        return np.asarray(self.cosine**2 + self.sine**2)

    @property
    def quadrature_variance(self) -> FloatArray:
        """Mean variance of the two quadratures, (n,); E |q|^2 = (C/2)^2 + 2 x this, whatever the phases played."""
        return np.asarray(0.5 * (self.covariance[:, 1, 1] + self.covariance[:, 2, 2]))

    @property
    def contrast_plain(self) -> FloatArray:
        """2 |q|, (n,): biased upwards near zero, as every length of a noisy vector is (Rice)."""
        return np.asarray(2 * np.sqrt(self.amplitude_squared))

    @property
    def phase_rad(self) -> FloatArray:
        """phi in (-pi, pi], (n,)."""
        return np.arctan2(-self.sine, self.cosine)


def group_sums(group: IntArray, values: FloatArray, count: int) -> FloatArray:
    """Sum of `values` (n,) over each group, (count,)."""
    return np.asarray(np.bincount(group, weights=values, minlength=count), dtype=np.float64)


def fit_fringes(theta: FloatArray, y: FloatArray, variance: FloatArray, group: IntArray, count: int) -> Fringes:
    """Weighted linear least squares of `count` fringes; linear in the number of shots.

    Args:
        theta: readout phase in rad, (n_shot,). y: population fraction, (n_shot,). variance: of y, (n_shot,), on any
        common scale. group: which fringe each shot belongs to, 0 <= group < count, (n_shot,).

    Returns:
        Fringes of length `count`.

    Raises:
        InputError: lengths differ, or a value is not finite, or a variance is not positive.
    """
    theta, y, variance = (np.asarray(column, float) for column in (theta, y, variance))
    if not theta.shape == y.shape == variance.shape == np.shape(group):
        raise InputError(f"columns of different length: {theta.shape}, {y.shape}, {variance.shape}, {np.shape(group)}")
    if not (np.isfinite(theta).all() and np.isfinite(y).all() and np.isfinite(variance).all()):
        raise InputError("a readout phase, population fraction or variance is not finite: leave such shots out first")
    if (variance <= 0).any():
        raise InputError("a variance is not positive: a shot with no noise cannot be weighted")
    weight = 1 / variance
    c, s = np.cos(theta), np.sin(theta)

    def total(values: FloatArray) -> FloatArray:
        return group_sums(group, values, count)

    wc, ws = weight * c, weight * s
    n00, n01, n02 = total(weight), total(wc), total(ws)
    n11, n12 = total(wc * c), total(wc * s)
    n22 = n00 - n11  # cos^2 + sin^2 = 1
    r0, r1, r2 = total(weight * y), total(wc * y), total(ws * y)
    # inverse of the symmetric 3 x 3 by its adjugate: an order faster than a general solver over many fringes
    a00, a01, a02 = n11 * n22 - n12**2, n02 * n12 - n01 * n22, n01 * n12 - n02 * n11
    a11, a12, a22 = n00 * n22 - n02**2, n01 * n02 - n00 * n12, n00 * n11 - n01**2
    determinant = n00 * a00 + n01 * a01 + n02 * a02
    shots = np.bincount(group, minlength=count)
    solved = (determinant > SINGULAR * n00**3) & (shots >= 3)
    safe = np.where(solved, determinant, np.nan)
    covariance = np.array([[a00, a01, a02], [a01, a11, a12], [a02, a12, a22]]).transpose(2, 0, 1) / safe[:, None, None]
    offset = (a00 * r0 + a01 * r1 + a02 * r2) / safe
    cosine = (a01 * r0 + a11 * r1 + a12 * r2) / safe
    sine = (a02 * r0 + a12 * r1 + a22 * r2) / safe
    residual = y - offset[group] - cosine[group] * c - sine[group] * s
    return Fringes(
        offset=offset,
        cosine=cosine,
        sine=sine,
        covariance=covariance,
        chi_squared=total(weight * residual**2),
        shots=shots,
        solved=solved,
    )


@dataclass(frozen=True, kw_only=True)
class Contrast:
    """Contrast of one fringe or of many, each on its own. Arrays of shape (n,)."""

    plain: FloatArray  # biased upwards near zero
    value: FloatArray  # bias taken off; 0 where the fringe does not stand out
    squared: FloatArray  # unbiased estimate of the contrast's square; may be negative
    error: FloatArray  # standard error of the contrast where it stands well out of the noise
    low: FloatArray
    high: FloatArray
    p_zero: FloatArray  # probability of so large a fringe if there is none


def contrasts(fringes: Fringes, *, noise: float = 1.0, noise_dof: float = np.inf, level: float = 0.95) -> Contrast:
    """Contrast of every fringe, with intervals that hold down to zero contrast.

    Args:
        fringes: all solved. noise: variance of a shot over the variance given to the fit: 1 where that was the true
        one, else an estimate (such as chi-squared over degrees of freedom) with `noise_dof` degrees of freedom.

    Returns:
        Contrast, arrays of shape (n,).

    Raises:
        NotEnoughData: a fringe was not solved.

    References:
        Rice distribution and its inversion: see planner.analysis.amplitude.
    """
    if not fringes.solved.all():
        raise NotEnoughData(
            f"{int((~fringes.solved).sum())} of {len(fringes)} fringes have fewer than three distinct readout phases: "
            "they have no contrast"
        )
    sigma = np.sqrt(noise * fringes.quadrature_variance)
    power = fringes.amplitude_squared / sigma**2
    root, square = debiased(power)
    low, high = amplitude_interval(power, 2.0, noise_dof, level)
    return Contrast(
        plain=fringes.contrast_plain,
        value=2 * sigma * root,
        squared=4 * sigma**2 * square,
        error=2 * sigma,
        low=2 * sigma * low,
        high=2 * sigma * high,
        p_zero=zero_test(power, 2.0, noise_dof),
    )


def phase_half_width(power: FloatArray, *, noise_dof: float = np.inf, level: float = 0.95) -> FloatArray:
    """Half width of the phase interval about the fitted phase; pi means the whole circle.

    The set of all phases for which the quadrature across that phase is compatible with zero: q . t(phi) is Gaussian
    with the noise of one quadrature whatever the contrast, so the set covers `level` at every contrast. Of the two
    opposite arcs the one that holds the fitted phase is kept.

    Args:
        power: |q|^2 / (estimated noise variance of one quadrature), any shape. noise_dof: of the noise estimate.

    Returns:
        Half width in rad, shape of `power`; pi where the fringe does not stand out enough to exclude any phase.

    References:
        Fieller, J. R. Stat. Soc. B 16, 175 (1954), intervals of ratios (from memory).
    """
    power = np.asarray(power, float)
    known = np.isinf(noise_dof)
    step = special.ndtri(0.5 + level / 2) if known else special.stdtrit(noise_dof, 0.5 + level / 2)
    ratio = step / np.sqrt(np.maximum(power, 1e-300))
    return np.where(ratio < 1, np.arcsin(np.minimum(ratio, 1.0)), np.pi)


def projection_variance(fraction: FloatArray, atoms: FloatArray) -> FloatArray:
    """Projection noise of a population fraction: p (1 - p) / N.

    Args:
        fraction: expected fraction, (n,). atoms: detected atoms, (n,).

    Returns:
        Variance of the fraction, (n,). Fractions are held one atom away from 0 and 1, where the formula gives none.

    References:
        Itano et al., Phys. Rev. A 47, 3554 (1993) (from memory).
    """
    least = 1 / (np.maximum(atoms, 1.0) + 2)
    p = np.clip(fraction, least, 1 - least)
    return np.asarray(p * (1 - p) / atoms)


def shot_noise_phase_rad(contrast: float, atoms: float) -> float:
    """Shot-noise limit of one shot's phase at mid-fringe, in rad: 1 / (C sqrt(N)).

    References:
        Itano et al., Phys. Rev. A 47, 3554 (1993) (from memory).
    """
    if not (contrast > 0 and atoms > 0):
        raise InputError(f"a phase has no shot-noise limit at contrast {contrast} with {atoms} atoms")
    return float(1 / (contrast * np.sqrt(atoms)))
