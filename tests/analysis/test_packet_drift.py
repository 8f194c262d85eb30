"""A phase that walks inside packets: what it does to squared contrasts is what is worked out."""

import numpy as np
import pytest

from planner.analysis.fringe import fit_fringes
from planner.analysis.packet_drift import packet_bias


def simulated(theta: np.ndarray, time: np.ndarray, rate: float, packets: int, seed: int) -> np.ndarray:
    """Relative bias of the squared contrast of noise-free packets whose phase walks, one for each packet."""
    rng = np.random.default_rng(seed)
    steps = np.sqrt(rate * np.diff(time, prepend=time[0])) * rng.standard_normal((packets, len(time)))
    phase = rng.uniform(0, 2 * np.pi, (packets, 1)) + np.cumsum(steps, axis=1)
    y = 0.5 + 0.25 * np.cos(phase + theta)
    group = np.repeat(np.arange(packets), len(theta))
    fit = fit_fringes(np.tile(theta, packets), y.ravel(), np.ones(y.size), group, packets)
    noise = fit.chi_squared / np.maximum(fit.dof, 1)
    return 4 * (fit.amplitude_squared - 2 * noise * fit.quadrature_variance) / 0.25 - 1


@pytest.mark.parametrize(
    "steps", [[0, 1, 2, 3], [0, 2, 1, 3], [0, 2, 1, 3, 3, 1, 2, 0], [0, 0, 1, 1, 2, 2, 3, 3], [0, 1, 2]]
)
def test_the_bias_is_as_worked_out(steps: list[int]) -> None:
    """20,000 packets of a walk of 0.02 rad^2: the mean bias within four standard errors and a tenth of itself."""
    phases = max(steps) + 1
    theta = np.array(steps) * 2 * np.pi / phases
    time = 40.0 * np.arange(len(steps)) + 3.0
    rate = 0.02 / (time[-1] - time[0])
    found = simulated(theta, time, rate, 20_000, 7)
    expected = rate * packet_bias(theta, time, np.zeros(len(steps), dtype=np.int64), 1)[0]
    # beyond second order a walk of 0.02 rad^2 adds a few per cent of the bias
    assert abs(found.mean() - expected) < 4 * found.std() / np.sqrt(20_000) + 0.1 * abs(expected)


def test_many_packets_at_once() -> None:
    """Packets of different sizes in one call are each as alone; one without a fringe has no bias."""
    theta = np.array([0, 1, 2, 3, 0, 2, 1, 0, 0, 0]) * np.pi / 2
    time = np.arange(10.0)
    group = np.array([0, 0, 0, 0, 1, 1, 1, 2, 2, 2])
    found = packet_bias(theta, time, group, 3)
    for packet in (0, 1):
        mine = group == packet
        alone = packet_bias(theta[mine], time[mine], np.zeros(mine.sum(), dtype=np.int64), 1)
        assert found[packet] == pytest.approx(alone[0], rel=1e-12)
    assert np.isnan(found[2])
