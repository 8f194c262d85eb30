"""A modulation of contrast with hold: false alarms as stated, and found where there is one."""

import numpy as np
import pytest

from planner.analysis.amplitude import zero_test
from planner.analysis.contrast_decay import fit_contrast_decay
from planner.analysis.holds import HoldContrast
from planner.analysis.modulation import Modulation, search_modulation
from planner.errors import InputError, NotEnoughData

GRID = np.linspace(0.5, 30, 24)


def contrasts(contrast: np.ndarray, hold_s: np.ndarray, seed: int, sigma: float = 0.02) -> HoldContrast:
    """Contrast per hold drawn from its exact distribution: six packets of four shots of noise `sigma` a hold."""
    packets = np.full(len(hold_s), 6)
    weight = packets * 2 / sigma**2
    power = np.random.default_rng(seed).noncentral_chisquare(12.0, contrast**2 / 4 * weight)
    nothing = np.full(len(hold_s), np.nan)
    return HoldContrast(
        hold_s=hold_s,
        fringes=packets,
        held_back=0 * packets,
        unchecked=0 * packets,
        power=power,
        noise=np.ones(len(hold_s)),
        noise_dof=np.full(len(hold_s), np.inf),
        weight=weight,
        squared=4 * (power - 12) / weight,
        squared_scatter=nothing,
        value=nothing,
        plain=nothing,
        low=nothing,
        high=nothing,
        p_zero=zero_test(power, 12.0),
    )


def searched(seed: int, depth: float, **options: float) -> Modulation:
    """A search over a fall of 15 s with a modulation of 7 s."""
    contrast = 0.5 * np.exp(-GRID / 15) * (1 + depth * np.cos(2 * np.pi * GRID / 7 + 1.0))
    holds = contrasts(contrast, GRID, seed)
    return search_modulation(holds, fit_contrast_decay(holds), **options)  # type: ignore[arg-type]


def test_false_alarms_at_a_known_period() -> None:
    """Of 200 nights without a modulation 5 % have p < 0.05, within three standard errors."""
    p = np.array([searched(seed, 0.0, period_s=7.0).p for seed in range(200)])
    assert abs(np.mean(p < 0.05) - 0.05) < 3 * np.sqrt(0.05 * 0.95 / 200)
    assert 0.4 < np.median(p) < 0.6


def test_false_alarms_over_a_range() -> None:
    """The largest of many periods is judged as the largest: of 30 nights without a modulation few have p < 0.05."""
    p = np.array([searched(seed, 0.0).p for seed in range(30)])
    assert np.mean(p < 0.05) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 30)
    assert 0.25 < np.median(p) < 0.75


def test_a_modulation_is_found() -> None:
    """A depth of 0.2 at 7 s stands out, at its period, with its depth, in 10 nights of 10."""
    found = [searched(seed, 0.2) for seed in range(10)]
    assert all(one.p < 0.01 for one in found)
    assert np.median([one.period_s for one in found]) == pytest.approx(7.0, rel=0.03)
    # the best of many periods gives a little more than the truth
    assert np.mean([one.depth for one in found]) == pytest.approx(0.2, rel=0.12)
    assert all(one.depth_limit > one.depth for one in found)


def test_the_upper_limit_holds() -> None:
    """At a known period the 95 % upper limit lies above the true depth in 95 % of 100 nights, within three errors."""
    above = np.mean([searched(seed, 0.06, period_s=7.0).depth_limit > 0.06 for seed in range(100)])
    assert above > 0.95 - 3 * np.sqrt(0.95 * 0.05 / 100)


def test_the_gain_is_astropys() -> None:
    """With the fall held fixed but for its height, the gain is the generalised periodogram's of a floating mean."""
    lombscargle = pytest.importorskip("astropy.timeseries").LombScargle
    from planner.analysis import modulation

    rng = np.random.default_rng(3)
    error = rng.uniform(0.5, 1.5, len(GRID))
    value = rng.standard_normal(len(GRID)) * error
    known, _ = np.linalg.qr((1 / error)[:, None])
    periods = np.array([3.0, 5.5, 12.0])
    basis = modulation._basis(GRID, error, known, periods)
    scaled = value / error
    rest = scaled - known @ (known.T @ scaled)
    gain = modulation._gains(basis, rest[None, :], 21)[0]
    # source: astropy.timeseries.LombScargle, normalization "model": the fall of chi-squared over what is left
    theirs = lombscargle(GRID, value, error, fit_mean=True, center_data=True, normalization="model")
    np.testing.assert_allclose(gain / 21, theirs.power(1 / periods, method="slow"), rtol=1e-9, atol=0)


def test_scatter_beyond_the_packets_noise_is_no_modulation() -> None:
    """Holds that scatter by three times their errors (a contrast that drifts) raise no more false alarms."""
    p = []
    for seed in range(60):
        rng = np.random.default_rng([seed, 2])
        contrast = 0.5 * np.exp(-GRID / 15) * (1 + 0.06 * rng.standard_normal(len(GRID)))
        holds = contrasts(contrast, GRID, seed, sigma=0.005)
        p.append(search_modulation(holds, fit_contrast_decay(holds), period_s=7.0).p)
    assert np.mean(np.array(p) < 0.05) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 60)


def test_what_cannot_be_searched() -> None:
    """Too few holds, a range that is none, and too many periods are refused in words."""
    holds = contrasts(0.5 * np.exp(-GRID[:4] / 15), GRID[:4], 1)
    with pytest.raises(NotEnoughData, match="needs 5 at least"):
        search_modulation(holds, fit_contrast_decay(holds))
    with pytest.raises(InputError, match="shortest must be positive"):
        searched(1, 0.0, shortest_s=9.0, longest_s=3.0)
    with pytest.raises(InputError, match="raise the shortest period"):
        searched(1, 0.0, shortest_s=1e-6)
    with pytest.raises(InputError, match="positive time"):
        searched(1, 0.0, period_s=-1.0)
