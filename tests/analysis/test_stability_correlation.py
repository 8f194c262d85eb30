"""Correlations: their size against scipy's, their chances against exact counts, false discoveries against scipy's."""

from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from planner.analysis.correlation import correlate, false_discovery, sign_chances
from planner.errors import NotEnoughData


@given(st.lists(st.floats(0, 1), min_size=1, max_size=40))
def test_false_discovery_is_scipys(p: list[float]) -> None:
    """Equal to scipy.stats.false_discovery_control (Benjamini and Hochberg)."""
    np.testing.assert_allclose(false_discovery(np.array(p)), stats.false_discovery_control(p), rtol=1e-12, atol=1e-300)


def test_false_discovery_of_the_papers_example() -> None:
    """The fifteen p values of Benjamini and Hochberg (1995), section 3.2: four discoveries at 0.05 (from memory)."""
    p = [0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262, 0.5719, 0.6528]
    assert (false_discovery(np.array([*p, 0.7590, 1.0000])) <= 0.05).sum() == 4


def test_sizes_are_scipys() -> None:
    """Pearson's and Spearman's coefficients equal scipy's, with packets missing on either side."""
    rng = np.random.default_rng(1)
    x, y = rng.standard_normal((2, 60))
    y += 0.5 * x
    x[5], y[9] = np.nan, np.inf
    (row,) = correlate({"phase": x}, {"tilt": y}).rows
    both = np.isfinite(x) & np.isfinite(y)
    assert row.packets == 58
    np.testing.assert_allclose(row.pearson, stats.pearsonr(x[both], y[both]).statistic, rtol=1e-12)
    np.testing.assert_allclose(row.spearman, stats.spearmanr(x[both], y[both]).statistic, rtol=1e-12)


def test_sign_chances_against_all_patterns() -> None:
    """Within 4 standard errors of the exact share over all 2^12 sign patterns."""
    rng = np.random.default_rng(2)
    terms = [rng.standard_normal(12) * 0.7 ** np.arange(12) for _ in range(6)]
    signs = np.array(list(product([-1, 1], repeat=12)))
    chances = sign_chances(terms, seed=5)
    for own, chance in zip(terms, chances, strict=True):
        exact = np.mean(np.abs(signs @ own) >= abs(own.sum()) - 1e-9)
        assert abs(chance - exact) < 4 * np.sqrt(exact * (1 - exact) / 19_999) + 1e-4


def test_white_series_have_the_textbooks_chance() -> None:
    """For white series the chance is near Student's t of the correlation, which supposes independent values."""
    rng = np.random.default_rng(3)
    ratios = []
    for _ in range(40):
        x, y = rng.standard_normal((2, 120))
        (row,) = correlate({"x": x}, {"y": y + 0.15 * x}).rows
        ratios.append(np.log10(row.p / stats.pearsonr(x, y + 0.15 * x).pvalue))
    # the larger of two chances, so a little above
    assert 0 <= np.median(ratios) < 0.3


def test_a_coupling_is_found_and_shared_drift_is_not() -> None:
    """A reading that drives the phase in all its wiggles has q below 0.01; two smooth drifts together do not."""
    rng = np.random.default_rng(4)
    at = np.arange(100) / 100
    walk = np.cumsum(rng.standard_normal(100))
    phase = 0.8 * walk + rng.standard_normal(100)
    other = 5 * at**2 + 0.3 * rng.standard_normal(100)
    table = correlate({"phase": phase, "atoms": 4 * at + 0.3 * rng.standard_normal(100)}, {"tilt": walk, "warm": other})
    by_pair = {(row.series, row.reading): row for row in table.rows}
    assert table.rows[0].series == "phase"
    assert table.rows[0].reading == "tilt"
    assert by_pair["phase", "tilt"].q < 0.01
    shared = by_pair["atoms", "warm"]
    assert shared.pearson > 0.9
    assert shared.q > 0.05
    assert shared.independent < 3


def test_order_and_repeatability() -> None:
    """Rows come by q; the same night gives the same table."""
    rng = np.random.default_rng(6)
    series = {name: rng.standard_normal(50) for name in "abcd"}
    readings = {name: rng.standard_normal(50) for name in "xyz"}
    first, again = correlate(series, readings), correlate(series, readings)
    assert first == again
    q = [row.q for row in first.rows]
    assert q == sorted(q)
    assert len(q) == 12


def test_no_number_without_data() -> None:
    """Constant, empty and short columns are named with a reason, and nothing at all is an error."""
    rng = np.random.default_rng(7)
    good = rng.standard_normal(40)
    few = np.where(np.arange(40) < 9, good, np.nan)
    table = correlate(
        {"phase": good},
        {"tilt": rng.standard_normal(40), "still": np.full(40, 296.15), "few": few, "none": np.full(40, np.nan)},
    )
    assert [row.reading for row in table.rows] == ["tilt"]
    assert table.missing["still"] == "constant"
    assert "9 packets" in table.missing["few"]
    assert table.missing["none"] == "no value"
    halves = correlate(
        {"phase": good, "atoms": np.where(np.arange(40) < 20, good, np.nan)},
        {"tilt": np.where(np.arange(40) < 18, np.nan, good)},
    )
    assert "2 packets" in halves.missing["atoms, tilt"]
    with pytest.raises(NotEnoughData, match="nothing can be correlated"):
        correlate({"phase": good}, {"still": np.ones(40)})
    with pytest.raises(NotEnoughData, match="no reading was logged"):
        correlate({"phase": good}, {})
