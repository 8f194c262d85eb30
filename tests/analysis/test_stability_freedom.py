"""Degrees of freedom and kinds of noise: handbook, reference package, exact covariances, and bands that cover."""

import numpy as np
import pytest
from scipy import stats

from planner.analysis.allan import allan
from planner.analysis.stability_freedom import (
    averages,
    band,
    degrees_of_freedom,
    noise_kind,
    total_degrees_of_freedom,
)
from planner.errors import InputError
from tests.proof.test_stability import coverage, power_law


def test_error_bars_of_the_handbook() -> None:
    """NIST SP 1065, Table 32: 1,000 points at 10 slots: 981 terms, alpha 0, 146.177 degrees of freedom, 95 % limits
    8.223942e-02 and 1.035201e-01 (values as an open package quotes that table in its tests).

    The handbook's degrees of freedom come from a fitted form for white noise, 0.07 % above the exact 146.072, and its
    limits from an approximate chi-squared: 1e-3 is what they allow.
    """
    from tests.analysis.test_stability_deviations import handbook_series

    series, m = handbook_series(), 10
    assert noise_kind(series, m) == 0
    found = allan(series, np.array([m]))
    assert found.terms[0] == 981
    freedom = degrees_of_freedom(0, 2, m, 1000)
    np.testing.assert_allclose(freedom, 146.177, rtol=1e-3)
    low, high = band(found.value, np.array([freedom]))
    np.testing.assert_allclose([low[0], high[0]], [8.223942e-02, 1.035201e-01], rtol=1e-3)


@pytest.mark.parametrize("order", [2, 3])
@pytest.mark.parametrize("m", [1, 2, 10, 70])
def test_white_noise_is_exact(order: int, m: int) -> None:
    """For white values the freedom equals 2 mean^2 / variance from the covariance of all terms, by linear algebra."""
    weights = [-1.0, 1.0] if order == 2 else [1.0, -2.0, 1.0]
    kernel = np.repeat(weights, m)
    count = 300 - order * m + 1
    rows = np.zeros((count, 300))
    for start in range(count):
        rows[start, start : start + order * m] = kernel
    covariance = rows @ rows.T
    exact = np.trace(covariance) ** 2 / np.sum(covariance**2)
    np.testing.assert_allclose(degrees_of_freedom(0, order, m, 300), exact, rtol=1e-9)


def test_sampled_walk_over_one_slot() -> None:
    """Hadamard's terms of a sampled walk over one slot are first differences of white noise: n / (1 + 1/2) nearly."""
    np.testing.assert_allclose(degrees_of_freedom(-2, 3, 1, 1000), 998 / (1 + 0.5 * (1 - 1 / 998)), rtol=1e-9)


@pytest.mark.parametrize("order", [2, 3])
@pytest.mark.parametrize(("kind", "rtol"), [(2, 1e-3), (1, 3e-2), (-1, 2e-3), (-2, 1e-2)])
def test_against_the_reference_package(order: int, kind: int, rtol: float) -> None:
    """Within its tables' accuracy of allantools' form of the same algorithm, at 32 and 100 of 1,000 slots."""
    import allantools

    for m in (32, 100):
        theirs = allantools.edf_greenhall(kind, order, m, 1001, overlapping=True, modified=False)
        np.testing.assert_allclose(degrees_of_freedom(kind, order, m, 1000), theirs, rtol=rtol)


@pytest.mark.parametrize("kind", [2, 1, 0, -1, -2])
def test_modified_against_the_reference_package(kind: int) -> None:
    """The modified variance's freedom equals allantools' to 1e-3 at 4, 10 and 32 slots."""
    import allantools

    for m in (4, 10, 32):
        theirs = allantools.edf_greenhall(kind, 2, m, 1001, overlapping=True, modified=True)
        np.testing.assert_allclose(degrees_of_freedom(kind, 2, m, 1000, modified=True), theirs, rtol=1e-3)


def test_total_against_the_reference_package() -> None:
    """The total variance's freedom equals allantools' published form."""
    import allantools

    for kind in (0, -1, -2):
        np.testing.assert_allclose(
            total_degrees_of_freedom(kind, 50, 1000), allantools.edf_totdev(1000, 50, kind), rtol=1e-9
        )
    assert np.isnan(total_degrees_of_freedom(2, 50, 1000))


@pytest.mark.parametrize("alpha", [0, -1, -2])
def test_kind_of_noise_is_told(alpha: int) -> None:
    """Of 200 series of 500 values, at least 95 in 100 are named rightly by single values.

    By averages of 4 (125 values) the lag-1 autocorrelation scatters by a quarter of a kind and its mean is biased low,
    so flicker passes for white now and then: at least 99 in 100 are at most one kind off.
    """
    rng = np.random.default_rng(8)
    series = [power_law(rng, 500, alpha) for _ in range(200)]
    assert np.mean([noise_kind(own, 1) == alpha for own in series]) >= 0.95
    assert np.mean([abs((noise_kind(own, 4) or 0) - alpha) <= 1 for own in series]) >= 0.99


def test_kind_agrees_with_the_reference_package() -> None:
    """The same alpha as allantools' lag-1 estimate on differenced, white and walking series."""
    import allantools

    rng = np.random.default_rng(9)
    white = rng.standard_normal(900)
    for series in (np.diff(white), white, np.cumsum(white)):
        for m in (1, 4, 16):
            theirs = allantools.autocorr_noise_id(series, m, data_type="freq", dmin=0, dmax=2)[0]
            assert noise_kind(series, m) == np.clip(theirs, -2, 2)


def test_few_averages_name_nothing() -> None:
    """Below 30 averages there is no kind; empty slots do not count as averages."""
    series = np.random.default_rng(1).standard_normal(64)
    assert noise_kind(series, 2) is not None
    assert noise_kind(series, 4) is None
    series[::2] = np.nan
    assert noise_kind(series[:58], 1) is None
    assert np.isnan(averages(np.full(6, np.nan), 3)).all()
    with pytest.raises(InputError, match="no degrees of freedom"):
        degrees_of_freedom(-4, 2, 4, 100)
    assert np.isnan(degrees_of_freedom(0, 2, 60, 100))


def test_band_is_chi_squared() -> None:
    """Limits at 10 degrees of freedom from a printed chi-squared table: 3.247 and 20.483 (2.5 and 97.5 %)."""
    low, high = band(np.array([1.0]), np.array([10.0]))
    np.testing.assert_allclose([low[0], high[0]], np.sqrt([10 / 20.483, 10 / 3.247]), rtol=1e-4)
    assert stats.chi2.cdf(10 / low[0] ** 2, 10) == pytest.approx(0.975)


@pytest.mark.parametrize("alpha", [0, -1, -2])
def test_bands_cover_the_truth(alpha: int) -> None:
    """95 % bands of Allan's deviation cover in 200 series at every time, less 3.5 standard errors; proof has 2,000."""
    share = coverage(alpha, 2, 200, 128)
    assert share.min() > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / 200)
