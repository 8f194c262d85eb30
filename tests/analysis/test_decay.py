"""Decay of contrast and of atom number: right on clean data, honest where the data cannot answer."""

import dataclasses

import numpy as np
import pytest
from scipy import stats

from planner.analysis.contrast_decay import fit_contrast_decay, power_log_density
from planner.analysis.fringe import fit_fringes
from planner.analysis.holds import HoldContrast, combine
from planner.analysis.loading import HoldAtoms, atoms_per_hold, fit_atom_decay
from planner.errors import NotEnoughData

HOLDS = np.geomspace(0.25, 64, 10)


def hold_contrasts(
    contrast: np.ndarray, *, seed: int = 1, packets: int = 8, sigma: float = 0.01, phases: int = 4
) -> HoldContrast:
    """Contrast per hold from simulated packets whose phase is anything."""
    rng = np.random.default_rng(seed)
    count = packets * len(contrast)
    hold = np.repeat(np.arange(len(contrast)), packets)
    group = np.repeat(np.arange(count), phases)
    theta = np.tile(np.arange(phases) * 2 * np.pi / phases, count)
    phi = rng.uniform(0, 2 * np.pi, count)[group]
    y = 0.5 + contrast[hold[group]] / 2 * np.cos(phi + theta) + sigma * rng.standard_normal(len(theta))
    fringes = fit_fringes(theta, y, np.full(len(theta), sigma**2), group, count)
    return combine(fringes, hold, HOLDS[: len(contrast)])


@pytest.mark.parametrize("dof", [2.0, 20.0, 60.0])
def test_saddlepoint_density(dof: float) -> None:
    """Differences of log density over noncentralities are those of scipy's noncentral chi-squared."""
    # source: scipy.stats.ncx2
    power = np.array([0.5, 1.0, 3.0])[:, None] * dof
    ncp = np.array([1e-6, 1.0, 10.0, 100.0])[None, :]
    exact = stats.ncx2.logpdf(power, dof, ncp)
    found = power_log_density(power, np.array(dof), ncp)
    # Stirling's constant wanders by up to 1/(6 dof) between no and large noncentrality
    np.testing.assert_allclose(found - found[:, :1], exact - exact[:, :1], rtol=0, atol=1.02 / (6 * dof))


def test_clean_data_give_the_truth_back() -> None:
    """With next to no noise the fit returns amplitude and time constant, and tight intervals about them."""
    fit = fit_contrast_decay(hold_contrasts(0.6 * np.exp(-HOLDS / 12.5), sigma=1e-5))
    # noise of 1e-5 in a fringe of 0.3 leaves about 1e-5 relative
    assert fit.time_s == pytest.approx(12.5, rel=2e-4)
    assert fit.start == pytest.approx(0.6, rel=2e-4)
    assert fit.low_s < 12.5 < fit.high_s
    assert fit.high_s - fit.low_s < 0.01


def test_vanished_fringes_do_not_pull_the_coherence_time_up() -> None:
    """Over 60 nights where half of the holds have no fringe left the mean coherence time is the true one."""
    found = np.array(
        [fit_contrast_decay(hold_contrasts(0.5 * np.exp(-HOLDS / 3), seed=s, sigma=0.03)).time_s for s in range(60)]
    )
    assert abs(found.mean() - 3) < 4 * found.std() / np.sqrt(60)


def test_contrast_where_there_is_none() -> None:
    """No fringe at any hold is said in words, never fitted."""
    with pytest.raises(NotEnoughData, match="no contrast whose decay could be fitted"):
        fit_contrast_decay(hold_contrasts(np.zeros(10)))


def test_one_hold_has_no_time_scale() -> None:
    """One hold gives a contrast and no coherence time."""
    holds = hold_contrasts(np.array([0.5]))
    assert holds.low[0] < 0.5 < holds.high[0]
    with pytest.raises(NotEnoughData, match="measured at 1 hold"):
        fit_contrast_decay(holds)


def test_no_decay_has_an_open_end() -> None:
    """Contrast that does not fall leaves the coherence time open above, with a lower bound beyond the holds."""
    fit = fit_contrast_decay(hold_contrasts(np.full(10, 0.5), sigma=0.02))
    assert np.isinf(fit.high_s)
    assert fit.low_s > HOLDS.max()


def test_growing_contrast_is_no_decay() -> None:
    """Contrast that grows beyond its errors is refused with a hint."""
    with pytest.raises(NotEnoughData, match="contrast grows with hold"):
        fit_contrast_decay(hold_contrasts(0.1 * np.exp(HOLDS / 50), sigma=0.003))


def test_a_wrong_curve_is_noticed() -> None:
    """A contrast that levels off fails the goodness test of one exponential; a true exponential passes it."""
    assert fit_contrast_decay(hold_contrasts(0.5 * np.exp(-HOLDS / 20))).goodness_p > 0.01
    assert fit_contrast_decay(hold_contrasts(0.25 + 0.25 * np.exp(-HOLDS / 5))).goodness_p < 1e-4


def test_fall_within_the_first_gap_is_bounded_on_one_side_only() -> None:
    """Contrast seen at the shortest hold alone bounds the coherence time above and leaves it open towards zero."""
    contrast = np.zeros(5)
    contrast[0] = 0.5
    fit = fit_contrast_decay(hold_contrasts(contrast, sigma=0.02))
    assert fit.low_s < 0.05
    assert fit.high_s < 1.0


def atoms(seed: int, *, life_s: float = 30.0, drift: float = 0.0, spoil: int = 0) -> HoldAtoms:
    """Atom numbers of packets of four shots in random order of hold."""
    rng = np.random.default_rng(seed)
    order = rng.permutation(np.repeat(np.arange(10), 8))
    which, packet = np.repeat(order, 4), np.repeat(np.arange(80), 4)
    time = np.arange(320.0) * 20
    mean = 1e4 * np.exp(-HOLDS[which] / life_s) * (1 + drift * np.sin(time / 1500))
    number = mean * np.exp(0.05 * rng.standard_normal(320))
    number[rng.choice(320, spoil, replace=False)] *= 0.01
    return atoms_per_hold(number, time, packet, which, HOLDS)


def test_lifetime_interval_covers() -> None:
    """Over 300 nights the 95 % interval of the lifetime covers it in 92 to 98 %."""
    hits = 0
    for seed in range(300):
        fit = fit_atom_decay(atoms(seed))
        hits += fit.low_s < 30 < fit.high_s
    # binomial standard error of 300 nights: 1.3 %
    assert 0.92 <= hits / 300 <= 0.98


def test_slow_drift_of_loading_is_taken_out() -> None:
    """A 30 % slow swing of the loading widens the lifetime's interval by less than half."""
    steady, swinging = fit_atom_decay(atoms(1)), fit_atom_decay(atoms(1, drift=0.3))
    assert atoms(1, drift=0.3).drift_terms >= 3
    assert swinging.high_s - swinging.low_s < 1.5 * (steady.high_s - steady.low_s)
    assert swinging.low_s < 30 < swinging.high_s


def test_rare_empty_shots_do_not_set_the_lifetime() -> None:
    """Six shots without atoms in 320 are held back, counted, and move the lifetime by less than its error."""
    holds = atoms(2, spoil=6)
    assert 1 <= holds.held_back <= 6
    fit = fit_atom_decay(holds)
    assert fit.low_s < 30 < fit.high_s


def test_atoms_that_cannot_give_a_lifetime() -> None:
    """One hold, nothing repeated, and growing numbers are said in words."""
    number, time, packet = np.full(8, 100.0), np.arange(8.0), np.repeat(np.arange(2), 4)
    with pytest.raises(NotEnoughData, match="no hold is repeated"):
        atoms_per_hold(number, time, packet, packet, HOLDS[:2])
    with pytest.raises(NotEnoughData, match="measured at 1 hold"):
        fit_atom_decay(atoms_per_hold(number, time, packet, np.zeros(8, dtype=int), HOLDS[:1]))
    with pytest.raises(NotEnoughData, match="grows with hold"):
        fit_atom_decay(atoms(3, life_s=-20.0))


def test_results_are_frozen() -> None:
    """A result cannot be changed after it was made."""
    fit = fit_contrast_decay(hold_contrasts(0.6 * np.exp(-HOLDS / 12.5)))
    with pytest.raises(dataclasses.FrozenInstanceError):
        fit.time_s = 1.0  # type: ignore[misc]


def test_a_spoilt_packet_neither_moves_nor_blurs_its_hold() -> None:
    """One shot that lost its light widens the hold's interval by less than half and is counted as held back."""
    rng = np.random.default_rng(4)
    theta, group = np.tile(np.arange(4) * np.pi / 2, 12), np.repeat(np.arange(12), 4)
    y = 0.5 + 0.2 * np.cos(0.3 + theta) + 0.004 * rng.standard_normal(48)
    which, variance = np.zeros(12, dtype=int), np.full(48, 0.004**2)
    clean = combine(fit_fringes(theta, y, variance, group, 12), which, HOLDS[:1])
    y[17] = 0.02
    spoilt = combine(fit_fringes(theta, y, variance, group, 12), which, HOLDS[:1])
    assert spoilt.held_back.tolist() == [1]
    assert clean.held_back.tolist() == [0]
    assert spoilt.low[0] < 0.4 < spoilt.high[0]
    assert spoilt.high[0] - spoilt.low[0] < 1.5 * (clean.high[0] - clean.low[0])


def test_a_packet_that_nothing_vouches_for_does_not_count() -> None:
    """With three shots left a spoilt packet cannot be told, so it is named instead of believed."""
    theta, group = np.tile(np.arange(4) * np.pi / 2, 12), np.repeat(np.arange(12), 4)
    y = 0.5 + 0.2 * np.cos(0.3 + theta) + 0.004 * np.random.default_rng(4).standard_normal(48)
    y[17] = 0.02
    keep = np.arange(48) != 18
    fringes = fit_fringes(theta[keep], y[keep], np.full(47, 0.004**2), group[keep], 12)
    holds = combine(fringes, np.zeros(12, dtype=int), HOLDS[:1])
    assert holds.unchecked.tolist() == [1]
    assert holds.fringes.tolist() == [11]
    assert holds.low[0] < 0.4 < holds.high[0]
