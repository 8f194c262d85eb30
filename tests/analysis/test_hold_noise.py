"""The noise of each hold, steadied by the other holds."""

import numpy as np
import pytest
from scipy import stats

from planner.analysis.hold_noise import steady_noise

HOLDS = np.geomspace(0.25, 64, 10)


def drawn(true: np.ndarray, dof: float, seed: int) -> np.ndarray:
    """Residual sums of squares of holds with `true` noise variances."""
    return true * np.random.default_rng(seed).chisquare(dof, len(true))


def test_smooth_noise_is_known_better_together() -> None:
    """Where noise changes smoothly with hold, the steadied one errs by at most two thirds of each hold alone."""
    true = 2.0 * (HOLDS + 1) ** -0.3
    errors = np.empty((400, 2))
    for seed in range(400):
        residual = drawn(true, 20.0, seed)
        found, _ = steady_noise(residual, np.full(10, 20.0), HOLDS)
        errors[seed] = [np.mean((np.log(one / true)) ** 2) for one in (found, residual / 20)]
    together, alone = np.sqrt(errors.mean(axis=0))
    assert together < 2 / 3 * alone


def test_a_hold_that_differs_keeps_its_own_noise() -> None:
    """With hundreds of degrees of freedom a hold of ten times the noise is believed, whatever the others say."""
    true = np.ones(10)
    true[4] = 10.0
    found, _ = steady_noise(drawn(true, 400.0, 1), np.full(10, 400.0), HOLDS)
    assert found[4] == pytest.approx(10, rel=0.25)
    assert np.delete(found, 4) == pytest.approx(np.ones(9), rel=0.35)


def test_what_it_is_worth() -> None:
    """The spread of the steadied variance is that of a chi-squared of the stated freedom, and no wider."""
    worth, values = [], []
    for seed in range(600):
        found, dof = steady_noise(drawn(np.ones(10), 20.0, seed), np.full(10, 20.0), HOLDS)
        worth.append(dof[5])
        values.append(found[5])
    # a variance of freedom f scatters by 2/f; 600 draws know that to 6 %, and the stated freedom itself wanders
    assert np.var(values) < 1.25 * 2 * np.mean(1 / np.array(worth))
    assert abs(np.mean(values) - 1) < 4 * np.std(values) / np.sqrt(600) + 0.01


def test_holds_without_freedom_take_the_others() -> None:
    """A hold with no residual of its own gets the curve's noise; a single hold with some lends it to all."""
    dof = np.full(10, 30.0)
    dof[3] = 0.0
    residual = drawn(np.full(10, 4.0), 30.0, 2) * (dof > 0)
    found, _ = steady_noise(residual, dof, HOLDS)
    assert stats.chi2.ppf(1e-4, 30) / 30 * 4 < found[3] < stats.chi2.ppf(1 - 1e-4, 30) / 30 * 4
    only = np.zeros(10)
    only[0] = 12.0
    found, freedom = steady_noise(np.where(only > 0, 24.0, 0.0), only, HOLDS)
    assert found == pytest.approx(np.full(10, 2.0))
    assert freedom == pytest.approx(np.full(10, 12.0))
