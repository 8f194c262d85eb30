"""Phase noise told from lost contrast by where on the fringe shots scatter."""

import numpy as np
import pytest

from planner.analysis.fringe import fit_fringes, projection_variance
from planner.analysis.phase_noise import PhaseNoise, phase_noise

ATOMS = 8000.0


def measured(seed: int, sigma: float, *, shots: int = 16, packets: int = 12, technical: float = 0.0) -> PhaseNoise:
    """Phase noise found in a hold of made-up packets of contrast 0.5 before the phase noise."""
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(packets), shots)
    theta = np.tile(np.arange(shots) * 2 * np.pi / shots, packets)
    phi = rng.uniform(-np.pi, np.pi, packets)[group]
    p = 0.5 + 0.25 * np.cos(phi + theta + sigma * rng.standard_normal(len(theta)))
    noise = projection_variance(p, np.full(len(p), ATOMS))
    y = p + np.sqrt(noise * (1 + technical)) * rng.standard_normal(len(p))
    flat = fit_fringes(theta, y, np.full(len(y), 0.25 / ATOMS), group, packets)
    expected = flat.offset[group] + flat.contrast_plain[group] / 2 * np.cos(flat.phase_rad[group] + theta)
    variance = projection_variance(expected, np.full(len(p), ATOMS))
    fringes = fit_fringes(theta, y, variance, group, packets)
    noise_ratio = fringes.chi_squared.sum() / fringes.dof.sum()
    contrast = np.sqrt([np.mean(fringes.contrast_plain**2 - 8 * noise_ratio * fringes.quadrature_variance)])
    (found,) = phase_noise(
        theta, y, variance, group, fringes, np.zeros(packets, dtype=np.int64), np.array([10.0]), contrast
    )
    return found


@pytest.mark.parametrize(("sigma", "technical"), [(0.1, 0.0), (0.1, 1.0), (0.4, 1.0)])
def test_its_size_is_found_and_its_interval_covers(sigma: float, technical: float) -> None:
    """Over 60 holds the mean is right to 5 %, and the intervals hold the truth in 95 % less three standard errors."""
    found = [measured(seed, sigma, technical=technical) for seed in range(60)]
    assert all(one.told_apart for one in found)
    # squared, since that is what averages
    assert np.sqrt(np.mean([one.sigma_rad**2 for one in found])) == pytest.approx(sigma, rel=0.06)
    inside = np.mean([one.low_rad <= sigma <= one.high_rad for one in found])
    assert inside >= 0.95 - 3 * np.sqrt(0.95 * 0.05 / 60)


def test_no_phase_noise_is_not_found() -> None:
    """Technical noise alone is not taken for phase noise: nearly all intervals begin at zero."""
    found = [measured(seed, 0.0, technical=2.0) for seed in range(60)]
    # with the truth at the edge an interval of 95 % leaves it out on one side only: 2.5 % of the time
    assert np.mean([one.low_rad == 0.0 for one in found]) >= 0.975 - 3 * np.sqrt(0.025 * 0.975 / 60)


def test_four_phases_cannot_tell() -> None:
    """Four equal phases leave one residual, the same at every fringe phase: an upper value, said to be one."""
    found = measured(1, 0.2, shots=4, packets=60, technical=1.0)
    assert not found.told_apart
    assert found.low_rad == 0.0
    assert found.sigma_rad > 0.19  # technical noise counted in


def test_the_contrast_it_cost_comes_back() -> None:
    """The fitted contrast times the factor is the contrast before the noise (0.5), to a percent."""
    found = [measured(seed, 0.5, packets=40) for seed in range(8)]
    assert np.exp(-0.125) * np.mean([one.contrast_factor for one in found]) == pytest.approx(1.0, rel=0.01)
