"""One coherence constant over nights: covered, with the scatter between nights, and the powers behind it."""

import numpy as np
import pytest

from planner.analysis.coherence_constant import CoherenceConstant, fit_coherence_constant
from planner.errors import InputError, NotEnoughData

CONSTANT = 1e-3  # s Er m: 1000 s Er um


def nights(seed: int, *, between: float = 0.0, count: int = 10, depth_power: float = -1.0) -> CoherenceConstant:
    """A fit to made-up nights with errors of 3 to 10 % and depths and separations that vary."""
    rng = np.random.default_rng(seed)
    depth, apart = rng.uniform(5, 20, count), rng.uniform(2e-6, 8e-6, count)
    error = rng.uniform(0.03, 0.1, count)
    truth = CONSTANT / 10 * (depth / 10) ** depth_power / apart
    time = truth * np.exp(error * rng.standard_normal(count) + between * rng.standard_normal(count))
    return fit_coherence_constant(time, time * np.exp(-1.96 * error), time * np.exp(1.96 * error), depth, apart)


@pytest.mark.parametrize("between", [0.0, 0.15])
def test_its_interval_covers(between: float) -> None:
    """Over 300 campaigns of ten nights the interval holds the constant in 95 %, within three standard errors."""
    found = [nights(seed, between=between) for seed in range(300)]
    inside = np.mean([one.low <= CONSTANT <= one.high for one in found])
    assert inside > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 300)
    if between:
        assert np.mean([one.between for one in found]) == pytest.approx(between, rel=0.15)


def test_nights_that_differ_are_said_to() -> None:
    """The test for one constant fires at 5 % where there is one, and nearly always where nights scatter by 20 %."""
    alike = np.mean([nights(seed).alike_p < 0.05 for seed in range(400)])
    assert abs(alike - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 400)
    assert np.mean([nights(seed, between=0.2).alike_p < 0.05 for seed in range(100)]) > 0.9


def test_the_powers_tell_whether_the_rule_holds() -> None:
    """Depth to the power -1 is found where it is so, and another power where it is another."""
    for power in (-1.0, -0.5):
        found = [nights(seed, depth_power=power, count=16) for seed in range(100)]
        values = np.array([(one.depth_power, one.depth_power_error) for one in found], dtype=float)
        assert values[:, 0].mean() == pytest.approx(power, abs=0.03)
        covered = np.abs(values[:, 0] - power) < 2.14 * values[:, 1]  # t of 13 degrees of freedom
        assert covered.mean() > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 100)


def test_settings_that_never_moved_have_no_power() -> None:
    """With one depth and one separation there is a constant and no power."""
    time = np.array([20.0, 22.0, 21.0])
    found = fit_coherence_constant(time, time * 0.9, time * 1.1, np.full(3, 9.0), np.full(3, 4e-6))
    assert found.depth_power is None
    assert found.separation_power is None
    assert found.low < 21 * 9 * 4e-6 < found.high


def test_what_cannot_be_fitted() -> None:
    """One night, and values that are no times, are refused in words."""
    one = np.ones(1)
    with pytest.raises(NotEnoughData, match="two at least"):
        fit_coherence_constant(one, one, one, one, one)
    two = np.ones(2)
    with pytest.raises(InputError, match="positive and finite"):
        fit_coherence_constant(two, two, np.array([1.0, np.inf]), two, two)
