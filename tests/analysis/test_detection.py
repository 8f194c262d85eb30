"""Efficiency ratio and cross-talk of the two outputs: found, covered, corrected."""

import numpy as np
import pytest

from planner.analysis.detection import Detector, efficiency_ratio, from_pure_shots
from planner.errors import InputError, NotEnoughData


def shots(seed: int, ratio: float, *, packets: int = 40, outliers: float = 0.0) -> tuple[np.ndarray, ...]:
    """Counts a and b, fitted fringe places and packets of a made-up hold whose load scatters by 6 %."""
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(packets), 4)
    phi = rng.uniform(0, 2 * np.pi, packets)[group] + np.tile(np.arange(4), packets) * np.pi / 2
    atoms = rng.poisson(8000 * (1 + 0.06 * rng.standard_normal(len(group))))
    in_a = rng.binomial(atoms, 0.5 + 0.25 * np.cos(phi))
    a, b = ratio * in_a + 20 * rng.standard_normal(len(phi)), atoms - in_a + 20 * rng.standard_normal(len(phi))
    spoilt = rng.random(len(phi)) < outliers
    a[spoilt] *= 0.1
    return a, b, np.cos(phi + 0.02 * rng.standard_normal(packets)[group]), group


@pytest.mark.parametrize("ratio", [0.9, 1.0, 1.15])
def test_the_ratio_is_found_and_covered(ratio: float) -> None:
    """Over 200 nights the ratio is unbiased and its interval covers 95 % less three standard errors."""
    found = [efficiency_ratio(*shots(seed, ratio)) for seed in range(200)]
    logs = np.log([one.value for one in found])
    assert abs(logs.mean() - np.log(ratio)) < 3 * logs.std() / np.sqrt(200)
    inside = np.mean([one.low <= ratio <= one.high for one in found])
    assert 0.95 - 3 * np.sqrt(0.95 * 0.05 / 200) <= inside


def test_outliers_do_not_carry_it() -> None:
    """One spoilt shot in a hundred moves the ratio by less than half its error, on average."""
    shift = [
        (np.log(efficiency_ratio(*shots(seed, 1.1, outliers=0.01)).value) - np.log(1.1))
        / efficiency_ratio(*shots(seed, 1.1)).error
        for seed in range(60)
    ]
    assert abs(np.mean(shift)) < 0.5


def test_correcting_undoes_the_detector() -> None:
    """Counts through a known detector come back exactly, on the scale of output b."""
    p = np.linspace(0, 1, 11)
    atoms = np.full(11, 5000.0)
    g, x = 1.2, 0.03
    a = g * atoms * (p * (1 - x) + (1 - p) * x)
    b = atoms * ((1 - p) * (1 - x) + p * x)
    back_a, back_b = Detector(ratio=g, cross_talk=x).correct(a, b)
    # a few roundings
    np.testing.assert_allclose(back_a, atoms * p, rtol=0, atol=1e-8)
    np.testing.assert_allclose(back_b, atoms * (1 - p), rtol=0, atol=1e-8)


def test_pure_shots_calibrate_both() -> None:
    """From shots with all atoms in one output: both numbers within four of the errors stated."""
    rng = np.random.default_rng(5)
    g, x, count = 0.93, 0.04, 60

    def kind(in_a: float) -> tuple[np.ndarray, np.ndarray]:
        atoms = 9000 * (1 + 0.05 * rng.standard_normal(count))
        a = g * atoms * (in_a * (1 - x) + (1 - in_a) * x) + 20 * rng.standard_normal(count)
        return a, atoms * ((1 - in_a) * (1 - x) + in_a * x) + 20 * rng.standard_normal(count)

    found = from_pure_shots(kind(1.0), kind(0.0))
    assert abs(found.ratio - g) < 4 * found.ratio_error < 0.1
    assert abs(found.cross_talk - x) < 4 * found.cross_talk_error < 0.02


def test_what_cannot_be_calibrated() -> None:
    """Too few shots, one place of the fringe, exchanged kinds and impossible numbers are refused in words."""
    a, b, place, group = shots(1, 1.0)
    with pytest.raises(NotEnoughData, match="needs 30 at least"):
        efficiency_ratio(a[:8], b[:8], place[:8], group[:8])
    with pytest.raises(NotEnoughData, match="one place of the fringe"):
        efficiency_ratio(a, b, np.ones(len(a)), group)
    pure = (np.full(5, 9000.0), np.full(5, 100.0))
    with pytest.raises(NotEnoughData, match="exchanged"):
        from_pure_shots((pure[1], pure[0]), pure)
    with pytest.raises(NotEnoughData, match="three are needed"):
        from_pure_shots((pure[0][:2], pure[1][:2]), pure)
    with pytest.raises(InputError, match="between 0 and 1/2"):
        Detector(cross_talk=0.6)
    with pytest.raises(InputError, match="positive number"):
        Detector(ratio=-1.0)
