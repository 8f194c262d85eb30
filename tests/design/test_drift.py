"""Added variance by sums that take time linear in the number of shots, against the covariance matrix itself."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.design.drift import Prior, added_variance, coupled_variance, drifts_of, period_grid, reference_prior
from planner.errors import PlanImpossible
from planner.sequence.model import Expected
from tests.design.nights import night

PRIOR = Prior(rate=2e-3, periods_s=(86164.0, 1200.0), amplitudes=(5.0, 0.7))


def covariance(mid_s: np.ndarray, prior: Prior) -> np.ndarray:
    """K at some times, written down from its definition."""
    lag = mid_s[:, None] - mid_s
    k = prior.rate * np.minimum(mid_s[:, None], mid_s)
    for period, amplitude in zip(prior.periods_s, prior.amplitudes, strict=True):
        k = k + amplitude**2 * np.cos(2 * np.pi * lag / period)
    return k


@given(st.integers(1, 60), st.integers(0, 2**32 - 1))
def test_linear_sums_equal_the_quadratic_form(shots: int, seed: int) -> None:
    """w'Kw by suffix sums and Fourier sums equals w'Kw with K of n by n."""
    # source: covariance of a Wiener process min(s, t), of a random-phase sinusoid a^2 cos: definitions
    rng = np.random.default_rng(seed)
    times, w = np.sort(rng.uniform(0, 36000, shots)), rng.normal(size=shots)
    expected = w @ covariance(times, PRIOR) @ w
    # K's entries reach 100 and cancel: absolute error of n^2 roundings of them
    assert added_variance(w, times, PRIOR) == pytest.approx(expected, rel=1e-9, abs=1e-9 * shots)


def test_coupled_variance_is_the_worst_over_the_fringe_phase() -> None:
    """A scan over phi never exceeds the top eigenvalue, and reaches it."""
    rng = np.random.default_rng(2)
    times, (u, v) = np.sort(rng.uniform(0, 36000, 40)), rng.normal(size=(2, 40))
    phi = np.linspace(0, np.pi, 2001)[:, None]
    scanned = added_variance(np.cos(phi) * u + np.sin(phi) * v, times, PRIOR)
    worst = float(coupled_variance(u, v, times, PRIOR))
    assert scanned.max() <= worst * (1 + 1e-12)
    # the scan's step of 1.6 mrad misses the top by at most its square
    assert scanned.max() == pytest.approx(worst, rel=3e-6)


def test_simulated_drift_has_the_stated_variance() -> None:
    """Random walks and random-phase rhythms, drawn shot by shot, give an effect the variance that is computed."""
    rng = np.random.default_rng(8)
    times, w = np.sort(rng.uniform(0, 3600, 30)), rng.normal(size=30)
    draws = 40_000
    walk = np.cumsum(rng.normal(size=(draws, 30)) * np.sqrt(PRIOR.rate * np.diff(times, prepend=0.0)), axis=1)
    for period, amplitude in zip(PRIOR.periods_s, PRIOR.amplitudes, strict=True):
        a, b = rng.normal(size=(2, draws, 1)) * amplitude
        walk += a * np.cos(2 * np.pi * times / period) + b * np.sin(2 * np.pi * times / period)
    # standard error of a variance of 40,000 normal draws: sqrt(2/40000) = 0.7 %; four of them
    assert np.var(walk @ w) == pytest.approx(float(added_variance(w, times, PRIOR)), rel=0.03)


def test_declared_drift_becomes_the_prior_and_missing_kinds_the_reference() -> None:
    """Phase and contrast drift add up; a kind that is not declared is taken as the reference."""
    table, sequence = night("reference-night-a.toml")
    drifts = drifts_of(sequence, table)
    assert drifts.additive == drifts.coupled
    assert drifts.additive.rate == pytest.approx(25.0 / sequence.drift[0].wander_over_s)
    bare = drifts_of(replace(sequence, drift=()), table)
    assert bare.additive == reference_prior(float(table.duration_s.sum()))
    assert bare.per_acceleration is None


def test_acceleration_moves_a_shot_by_its_scale_factor() -> None:
    """A small acceleration at mid-fringe moves the fraction by as many single-shot noises as the factor says."""
    # source: mass of Rb-87 86.909180531 u and the constants of CODATA 2018, from memory; trapezoid of separation
    table, sequence = night("signal.toml")
    factor = drifts_of(sequence, table).per_acceleration
    assert factor is not None
    mass, hbar = 86.909180531 * 1.66053906660e-27, 1.054571817e-34
    separation = table.settings[sequence.roles["separation"]]
    kappa = mass / hbar * separation * (table.hold_s + table.settings[sequence.roles["split"]])
    expected = sequence.expected
    assert expected.contrast
    assert expected.atoms
    assert expected.lifetime_s
    assert expected.coherence_constant
    coherence = expected.coherence_constant[0] / (table.settings[sequence.roles["depth"]] * separation)
    contrast = expected.contrast[0] * np.exp(-table.hold_s / coherence)
    atoms = expected.atoms[0] * np.exp(-table.hold_s / expected.lifetime_s[0])
    assert expected.excess_noise is not None
    sigma = np.sqrt(expected.excess_noise[0] * (1 - contrast**2 / 2) / (4 * atoms))
    small = 1e-12
    moved = contrast / 2 * (np.sin(kappa * small) - np.sin(-kappa * small)) / (2 * small)
    # sqrt2 is the coupled response's own peak; sin is straight to 1e-9 here
    assert factor * np.sqrt(2) * sigma == pytest.approx(moved, rel=1e-7)


def test_acceleration_needs_something_to_weigh_it_by() -> None:
    """Without contrast and atoms an acceleration is no multiple of a shot's noise; the message names what to say."""
    table, sequence = night("signal.toml")
    bare = replace(sequence, expected=Expected())
    with pytest.raises(PlanImpossible, match=r"expected\.contrast"):
        drifts_of(bare, table)


def test_the_period_grid_covers_twelve_hours_to_two_minutes() -> None:
    """First and last frequency, and a step of a quarter of the night's."""
    grid = period_grid(34700.0)
    assert (1 / grid[0], 1 / grid[-1]) == pytest.approx((43200.0, 120.0))
    assert np.diff(grid).max() <= 1 / (4 * 34700.0) * 1.001
    assert len(period_grid(1e7)) == 4000
