"""Is there a fringe at all? One fringe's test has the exact test's power; over a scan the combined test beats the best
single hold with its look-elsewhere correction.

A scan is twelve holds of a decaying contrast, one packet each. `rows()` runs 100,000 scans, the test 10,000.
"""

from typing import Any

import numpy as np
from scipy import stats

from planner.analysis.amplitude import zero_test
from planner.analysis.night_fringes import scan_test

HOLDS = 12
FULL, SHORT = 100_000, 10_000
LEVEL = 0.01


def powers(ratio: np.ndarray, count: int, seed: int) -> np.ndarray:
    """Power of `count` scans, (count, hold): (q1^2 + q2^2) / variance of one quadrature, with contrasts of `ratio`
    (hold,) times their error."""
    rng = np.random.default_rng(seed)
    noise = rng.standard_normal((count, len(ratio), 2))
    noise[:, :, 0] += ratio
    return (noise**2).sum(axis=2)


def fires(p: np.ndarray) -> tuple[float, float]:
    """How often the combined test and the largest single hold fire at LEVEL; p (scan, hold)."""
    combined = np.array([scan_test(one) for one in p])
    single = 1 - (1 - p.min(axis=1)) ** p.shape[1]  # Sidak's correction for the best of independent holds
    return float((combined < LEVEL).mean()), float((single < LEVEL).mean())


def measure(count: int) -> list[tuple[str, float, float, float, float | None]]:
    """(what, value, lowest, highest, reference) of each promise."""
    null, _ = fires(zero_test(powers(np.zeros(HOLDS), count, 1), 2.0))
    # noise estimated from 20 residual degrees of freedom of each hold
    rng = np.random.default_rng(2)
    noise = rng.chisquare(20, (count, HOLDS)) / 20
    estimated, _ = fires(zero_test(powers(np.zeros(HOLDS), count, 3) / noise, 2.0, 20.0))
    decaying = 2.4 * np.exp(-np.arange(HOLDS) / 6.0)
    combined, single = fires(zero_test(powers(decaying, count, 4), 2.0))
    ratio = 3.0
    power = float((zero_test(powers(np.array([ratio]), count, 5), 2.0) < LEVEL).mean())
    # source: the noncentral chi-squared distribution of scipy.stats; the likelihood-ratio test of a known noise
    exact = float(stats.ncx2.sf(stats.chi2.isf(LEVEL, 2), 2, ratio**2))
    slack = 0.0 if count >= FULL else 3.0
    alarm = slack * np.sqrt(LEVEL * (1 - LEVEL) / count)
    scatter = 3 * np.sqrt(exact * (1 - exact) / count)
    return [
        ("zero-contrast test of a scan at 1 % fires on nothing", null, 0.008 - alarm, 0.012 + alarm, None),
        ("the same, noise estimated at every hold", estimated, 0.008 - alarm, 0.012 + alarm, None),
        ("power of one fringe's test, contrast 3 x its error", power, exact - scatter, exact + scatter, exact),
        ("power of the combined test of a decaying scan", combined, single, 1.0, single),
    ]


def test_scans() -> None:
    for what, value, lowest, highest, _ in measure(SHORT):
        assert lowest <= value <= highest, f"{what}: {value}"


def rows() -> list[dict[str, Any]]:
    return [
        {
            "name": what,
            "value": value,
            "unit": "",
            "bound": f"{lowest:.4g} to {highest:.4g}",
            "reference": reference,
            "ratio": None if not reference else value / reference,
            "ok": bool(lowest <= value <= highest),
        }
        for what, value, lowest, highest, reference in measure(FULL)
    ]
