"""Distributions and intervals of amplitudes, against scipy and against what an interval has to be."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from planner.analysis.amplitude import amplitude_interval, chi_squared_cdf, debiased, noise_nodes, power_cdf, zero_test
from planner.errors import InputError

DATA = Path(__file__).resolve().parent.parent / "outside" / "data"


@pytest.mark.parametrize("dof", [2.0, 18.0, 80.0])
@pytest.mark.parametrize("ncp", [0.0, 3.0, 400.0, 1900.0, 2100.0, 5e4])
def test_noncentral_chi_squared(dof: float, ncp: float) -> None:
    """The distribution function is scipy's, below and above the change of method."""
    # source: scipy.stats.ncx2 and chi2 (scipy 1.16 or newer)
    spread = 2 * np.sqrt(ncp + dof / 2)
    power = np.maximum(dof + ncp + spread * np.array([-3, -1.5, 0, 1.5, 3]), 0.01)
    expected = stats.ncx2.cdf(power, dof, ncp) if ncp else stats.chi2.cdf(power, dof)
    # Sankaran's form, used above 2000, is good to 3e-6
    np.testing.assert_allclose(chi_squared_cdf(power, dof, np.array(ncp)), expected, rtol=0, atol=3e-6)


@pytest.mark.parametrize("noise_dof", [1.0, 3.0, 12.0, 59.0, 61.0, 400.0])
def test_estimated_noise_is_exact_at_both_ends(noise_dof: float) -> None:
    """With estimated noise the distribution is F at amplitude zero, and Student's t far from zero."""
    # source: scipy.stats.f, scipy.stats.t
    power = np.array([0.3, 2.0, 7.0, 20.0])
    found = power_cdf(power, 2.0, np.zeros(4), noise_dof)
    # the average leaves out 1e-8 of the noise's distribution at each end
    np.testing.assert_allclose(found, stats.f.cdf(power / 2, 2, noise_dof), rtol=0, atol=1e-6)
    far = 4000.0
    root = far + np.array([-2.5, -1, 0, 1, 2.5])
    found = power_cdf(root**2, 2.0, np.full(5, far**2), noise_dof)
    # with one degree of freedom the noise estimate is so small that it drowns the amplitude in 3e-4 of cases
    np.testing.assert_allclose(found, stats.t.cdf(root - far, noise_dof), rtol=0, atol=5e-4)


def test_rice_moments() -> None:
    """The mean of the plain amplitude is Rice's, above the truth by the tabled bias; the debiased one is not."""
    # source: tests/outside/data/rice_moments.csv, scipy.stats.rice (computed)
    with (DATA / "rice_moments.csv").open() as file:
        rows = list(csv.DictReader(line for line in file if not line.startswith("#")))
    rng = np.random.default_rng(8)
    noise = rng.standard_normal((2, 200_000))
    checked = 0
    for row in rows:
        nu = float(next(iter(row.values())))
        plain = np.hypot(nu + noise[0], noise[1])
        mean = float(row["mean"])
        # 200,000 draws of standard deviation at most 1: four standard errors
        assert plain.mean() == pytest.approx(mean, abs=4 / np.sqrt(200_000))
        root, square = debiased(plain**2)
        assert square.mean() == pytest.approx(nu**2, abs=4 * (plain**2).std() / np.sqrt(200_000))
        if nu >= 2:
            assert abs(root.mean() - nu) < 0.05
        checked += 1
    assert checked >= 5


def test_is_there_a_fringe() -> None:
    """The zero test has Rayleigh's thresholds for a known noise and the F table's for an estimated one."""
    # source: Rayleigh points and F(2, 12), F(2, 20), F(2, 37) at 95 %, F(2, 12) at 99 %: handbook tables (computed)
    for root, p in [(2.4477468, 0.05), (3.0348543, 0.01), (3.4393323, 0.0027)]:
        assert zero_test(np.array(root**2), 2.0) == pytest.approx(p, rel=2e-6)
    for f, dof, p in [(3.885294, 12, 0.05), (3.492828, 20, 0.05), (3.251924, 37, 0.05), (6.926608, 12, 0.01)]:
        assert zero_test(np.array(2 * f), 2.0, dof) == pytest.approx(p, rel=2e-6)


def test_sinusoid_test_is_the_periodogram_one() -> None:
    """For N shots the F test equals (1 - P)^((N-3)/2), P the share of the variance that the fringe takes."""
    # source: identity checked against astropy's single-frequency false-alarm level, N = 50 (computed)
    for share, p in [(0.1, 0.0840812137), (0.3, 2.28983369e-4), (0.5, 8.42936970e-8)]:
        f = share / 2 / ((1 - share) / 47)
        assert zero_test(np.array(2 * f), 2.0, 47.0) == pytest.approx(p, rel=1e-8)


@settings(deadline=None, max_examples=60)
@given(
    st.lists(st.floats(0, 1e4), min_size=2, max_size=6),
    st.sampled_from([2.0, 6.0, 40.0]),
    st.sampled_from([2.0, 9.0, 120.0, np.inf]),
)
def test_intervals_are_never_empty_and_never_cross(powers: list[float], dof: float, noise_dof: float) -> None:
    """Every power gives an interval with its ends in order, and both ends only grow with the power."""
    low, high = amplitude_interval(np.sort(np.array(powers)), dof, noise_dof)
    assert (low >= 0).all()
    assert (high > low).all()
    assert (np.diff(low) >= -1e-6).all()
    assert (np.diff(high) >= -1e-6).all()


def test_many_fringes_and_one_agree() -> None:
    """The table that serves many fringes gives what the root search gives for one."""
    rng = np.random.default_rng(3)
    power = rng.uniform(0, 25, 1000) ** 2
    low, high = amplitude_interval(power)
    for i in range(0, 1000, 37):
        one_low, one_high = amplitude_interval(power[i : i + 1])
        # below 14 noise units interpolation, above it the Gaussian limit: 1e-3 of the noise at the change
        assert one_low[0] == pytest.approx(low[i], abs=3e-3)
        assert one_high[0] == pytest.approx(high[i], abs=3e-3)


def test_what_cannot_be_said_is_refused() -> None:
    """No degrees of freedom, and powers that are no powers, are named."""
    with pytest.raises(InputError, match="no degrees of freedom"):
        noise_nodes(0.0)
    with pytest.raises(InputError, match="not a finite number"):
        amplitude_interval(np.array([np.nan]))
