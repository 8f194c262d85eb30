"""Interferometer phase, noise limits, contrast and loss: closed forms against simulation and integration."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.physics.atoms import atom
from planner.physics.constants import HBAR
from planner.physics.contrast import coherence_time, one_class, two_classes
from planner.physics.interferometer import (
    fraction,
    hold_phase_rate,
    scale_factor,
    scale_factor_sampled,
    separation,
)
from planner.physics.loss import fraction_lost, parametric_heating_rate, population, scattering_rate
from planner.physics.noise import (
    contrast_under_phase_noise,
    fringe_bounds,
    phase_noise,
    projection_variance,
    shot_noise_limit,
)
from planner.physics.recoil import recoil_energy, recoil_velocity

RB = atom("Rb-87").mass_kg


@given(st.floats(1e-7, 1e-4), st.floats(0.0, 70.0), st.floats(1e-5, 0.1))
def test_trapezoid_of_separation_by_integration(apart: float, hold: float, split: float) -> None:
    """m dz (T + t_s) / hbar is the integral of the separation over split, hold and recombination."""
    time = np.array([0.0, split, split + hold, 2 * split + hold])
    path = np.array([0.0, apart, apart, 0.0])
    # the trapezoidal rule is exact for straight pieces: rounding alone
    assert scale_factor(RB, apart, hold, split) == pytest.approx(float(scale_factor_sampled(RB, time, path)), rel=1e-12)


def test_hold_phase_runs_fast() -> None:
    """Tens of thousands of radians a second at some micrometres."""
    assert hold_phase_rate(RB, 4e-6) == pytest.approx(RB * 9.80665 * 4e-6 / HBAR, rel=1e-12)
    assert 1e4 < hold_phase_rate(RB, 4e-6) < 1e6


def test_separation_is_velocity_times_time() -> None:
    """Two photon recoils for 340 us."""
    assert separation(2, RB, 780.24e-9, 340e-6) == pytest.approx(2 * recoil_velocity(RB, 780.24e-9) * 340e-6, rel=1e-14)


@pytest.mark.parametrize(("contrast", "atoms", "limit"), [(0.5, 1000, 63.2456e-3), (0.3, 2e5, 7.45356e-3)])
def test_shot_noise_limit(contrast: float, atoms: float, limit: float) -> None:
    """sigma_phi = 1 / (C sqrt N), rad."""
    # source: derived from projection noise (Itano et al., PRA 47, 3554 (1993), from memory); computed, six digits
    assert shot_noise_limit(contrast, atoms) == pytest.approx(limit, rel=1e-5)


@pytest.mark.parametrize(("angle", "factor"), [(60, 1.1180), (45, 1.3229), (30, 1.8028)])
def test_off_mid_fringe(angle: float, factor: float) -> None:
    """C = 0.5: what a phase error grows by towards the top of the fringe."""
    # source: computed from sqrt(p (1 - p) / N) over the slope
    found = phase_noise(0.5, 1000, np.deg2rad(angle)) / shot_noise_limit(0.5, 1000)
    assert found == pytest.approx(factor, abs=1e-4)


def test_cramer_rao_of_a_fringe_is_reached() -> None:
    """Linear fits of 40,000 simulated fringes have the variances of the bounds."""
    # source: Kay, Estimation Theory (1993), from memory: var A = 2 s^2/N, var phi = 2 s^2/(N A^2), var B = s^2/N
    shots, sigma, contrast, trials = 16, 0.02, 0.5, 40_000
    rng = np.random.default_rng(7)
    theta = 2 * np.pi * np.arange(shots) / shots
    y = fraction(0.7 + theta, contrast) + sigma * rng.standard_normal((trials, shots))
    a, b = 2 * (y @ np.cos(theta)) / shots, 2 * (y @ np.sin(theta)) / shots
    bounds = fringe_bounds(shots, sigma, contrast)
    found = (np.var(2 * np.hypot(a, b)), np.var(np.arctan2(-b, a)), np.var(y.mean(axis=1)))
    # a variance of 40,000 draws is known to sqrt(2/40000) = 0.7 %; four of those, and the fringe's own bias of 1e-3
    assert found == pytest.approx(bounds, rel=0.03)


def test_projection_noise_is_binomial() -> None:
    """y (1 - y) / N by simulation."""
    rng = np.random.default_rng(1)
    drawn = rng.binomial(2000, 0.3, 100_000) / 2000
    assert projection_variance(np.array([0.3]), np.array([2000.0]))[0] == pytest.approx(drawn.var(), rel=0.02)


def test_jitter_lowers_contrast() -> None:
    """exp(-s^2/2) by simulation."""
    rng = np.random.default_rng(2)
    for sigma in (0.1, 0.5, 1.0):
        seen = np.mean(np.cos(sigma * rng.standard_normal(400_000)))
        assert contrast_under_phase_noise(1.0, sigma) == pytest.approx(seen, abs=4e-3)


@given(st.floats(4, 40), st.floats(1e-6, 4e-5), st.floats(1.1, 4))
def test_coherence_time_scales_as_one_over_depth_times_separation(depth: float, apart: float, factor: float) -> None:
    """Common practice, no source: an empirical scaling."""
    base = coherence_time(1e-3, depth, apart)
    assert coherence_time(1e-3, factor * depth, apart) == pytest.approx(base / factor, rel=1e-12)
    assert coherence_time(1e-3, depth, factor * apart) == pytest.approx(base / factor, rel=1e-12)


def test_two_classes_meet_their_limits() -> None:
    """All cold is one class; contrast starts at its short-hold value."""
    hold = np.array([0.0, 5.0, 30.0])
    assert np.allclose(two_classes(hold, 0.6, 1.0, 20.0, 2.0), one_class(hold, 0.6, 20.0), rtol=1e-14, atol=0)
    assert two_classes(hold, 0.6, 0.7, 20.0, 2.0)[0] == pytest.approx(0.6)


def test_loss_forms() -> None:
    """Rates add; scattering grows with depth and falls with detuning; heating with the square of the frequency."""
    assert population(np.array([10.0]), 100.0, 0.05)[0] == pytest.approx(100 * np.exp(-0.5))
    assert fraction_lost(0.05, 10.0) == pytest.approx(1 - np.exp(-0.5))
    line = atom("Rb-87").lines["D2"]
    depth = 9 * recoil_energy(RB, 866e-9)
    near = scattering_rate(depth, 866e-9, line.wavelength_m, line.linewidth_hz)
    assert scattering_rate(2 * depth, 866e-9, line.wavelength_m, line.linewidth_hz) == pytest.approx(2 * near)
    assert scattering_rate(depth, 1064e-9, line.wavelength_m, line.linewidth_hz) < near
    assert parametric_heating_rate(2e4, 1e-12) == pytest.approx(4 * parametric_heating_rate(1e4, 1e-12))
