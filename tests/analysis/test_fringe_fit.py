"""The linear fringe fit: right numbers, right covariance, linear in time, nothing made up."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.analysis.fringe import (
    contrasts,
    fit_fringes,
    phase_half_width,
    projection_variance,
    shot_noise_phase_rad,
)
from planner.errors import InputError, NotEnoughData


def test_fit_equals_a_reference_solver() -> None:
    """Parameters, covariance and residual of ragged, unequally weighted fringes equal numpy's least squares."""
    rng = np.random.default_rng(11)
    sizes = rng.integers(3, 12, 50)
    group = rng.permutation(np.repeat(np.arange(50), sizes))
    theta, y = rng.uniform(0, 2 * np.pi, len(group)), rng.uniform(0.2, 0.8, len(group))
    variance = rng.uniform(0.5, 2.0, len(group))
    fit = fit_fringes(theta, y, variance, group, 50)
    for f in np.flatnonzero(fit.solved):
        here = group == f
        root = 1 / np.sqrt(variance[here])
        design = np.stack([np.ones(here.sum()), np.cos(theta[here]), np.sin(theta[here])], axis=1) * root[:, None]
        expected, residual, *_ = np.linalg.lstsq(design, y[here] * root, rcond=None)
        covariance = np.linalg.inv(design.T @ design)
        # random phases of three shots can lie close together: rounding grows with the condition number, up to 1e4 here
        np.testing.assert_allclose([fit.offset[f], fit.cosine[f], fit.sine[f]], expected, rtol=1e-6, atol=1e-7)
        np.testing.assert_allclose(fit.covariance[f], covariance, rtol=1e-5, atol=1e-6 * np.abs(covariance).max())
        if here.sum() > 3:
            np.testing.assert_allclose(fit.chi_squared[f], residual[0], rtol=1e-6, atol=1e-12)
    assert fit.solved.sum() >= 45


def test_covariance_is_the_cramer_rao_bound() -> None:
    """N equally spaced phases with noise sigma give var A = 2 s^2/N and var B = s^2/N, and unbiased scatter of that."""
    # source: Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993) (from memory);
    # N = 16, sigma = 0.2, A = 1 gives 5e-3, 5e-3, 2.5e-3, and 2e5 simulated fits gave it to 1 % (computed)
    count, sigma = 20000, 0.2
    theta = np.tile(np.arange(16) * np.pi / 8, count)
    rng = np.random.default_rng(5)
    y = np.cos(0.7 + theta) + sigma * rng.standard_normal(theta.shape)
    fit = fit_fringes(theta, y, np.full(theta.shape, sigma**2), np.repeat(np.arange(count), 16), count)
    np.testing.assert_allclose(np.diag(fit.covariance[0]), [2.5e-3, 5e-3, 5e-3], rtol=1e-12, atol=0)
    amplitude = np.sqrt(fit.amplitude_squared)
    # a variance of 20,000 draws is known to 1 %; four of those
    for values, bound in [(amplitude, 5e-3), (fit.phase_rad, 5e-3), (fit.offset, 2.5e-3)]:
        assert abs(values.var() / bound - 1) < 0.04
    assert abs(fit.phase_rad.mean() - 0.7) < 4 * np.sqrt(5e-3 / count)


def test_shot_noise_of_a_phase() -> None:
    """sigma_phi = 1/(C sqrt N), and a simulated mid-fringe shot scatters by it."""
    # source: Itano et al., Phys. Rev. A 47, 3554 (1993) (from memory); values computed from the formula
    assert shot_noise_phase_rad(0.5, 1000) == pytest.approx(63.2456e-3, rel=1e-5)
    assert shot_noise_phase_rad(0.3, 2e5) == pytest.approx(7.45356e-3, rel=1e-5)
    rng = np.random.default_rng(2)
    y = rng.binomial(1000, 0.5, 40000) / 1000
    # slope of y at mid-fringe is C/2; a standard deviation of 40,000 draws is known to 0.35 %; four of those
    assert y.std() / 0.25 == pytest.approx(shot_noise_phase_rad(0.5, 1000), rel=0.015)
    np.testing.assert_allclose(projection_variance(np.array([0.5]), np.array([1000.0])), [0.25 / 1000], rtol=1e-12)


@given(st.floats(-np.pi, np.pi), st.floats(0.05, 1.0), st.floats(0.3, 0.7))
def test_a_perfect_fringe_comes_back(phi: float, contrast: float, offset: float) -> None:
    """Without noise the fit returns the contrast, phase and offset that went in."""
    theta = np.array([0.0, 0.5, 1.7, 3.0, 4.4]) * np.pi / 2
    y = offset + contrast / 2 * np.cos(phi + theta)
    fit = fit_fringes(theta, y, np.ones(5), np.zeros(5, dtype=int), 1)
    # five well spread phases: a few rounding errors of 1e-16 over the smallest contrast
    np.testing.assert_allclose(fit.contrast_plain, contrast, rtol=1e-11, atol=0)
    np.testing.assert_allclose(fit.offset, offset, rtol=1e-11, atol=0)
    assert abs(np.angle(np.exp(1j * (fit.phase_rad[0] - phi)))) < 1e-11


@pytest.mark.parametrize("theta", [[0, 0, 0, 0], [0, np.pi / 2, 0, np.pi / 2], [1.0, 1.0 + 2 * np.pi, 2.0, 2.0]])
def test_too_few_phases_give_no_number(theta: list[float]) -> None:
    """Fewer than three distinct readout phases leave the fringe unsolved, and its contrast is refused."""
    fit = fit_fringes(np.array(theta), np.full(4, 0.5), np.ones(4), np.zeros(4, dtype=int), 1)
    assert not fit.solved[0]
    assert np.isnan(fit.cosine[0])
    with pytest.raises(NotEnoughData, match="fewer than three distinct readout phases"):
        contrasts(fit)


def test_bad_columns_are_refused() -> None:
    """Lengths that differ, values that are not finite and variances that are not positive are named."""
    one = np.ones(3)
    zero = np.zeros(3, dtype=int)
    with pytest.raises(InputError, match="different length"):
        fit_fringes(one, np.ones(4), one, zero, 1)
    with pytest.raises(InputError, match="not finite"):
        fit_fringes(one, np.array([1, np.nan, 1]), one, zero, 1)
    with pytest.raises(InputError, match="not positive"):
        fit_fringes(one, one, 0 * one, zero, 1)
    with pytest.raises(InputError, match="no shot-noise limit"):
        shot_noise_phase_rad(0.0, 100)


def test_phase_interval_opens_to_the_whole_circle() -> None:
    """Where the fringe does not stand out no phase is excluded; far out the half width is the usual error."""
    half = phase_half_width(np.array([0.0, 3.0, 1e6]))
    assert half[0] == half[1] == np.pi
    assert half[2] == pytest.approx(1.959964e-3, rel=1e-6)  # source: standard normal 97.5 % point, any table
