"""A night's series and what is said of them: known scatter, drift, rhythms, gaps, and refusals."""

from typing import Any

import numpy as np
import pytest

from planner.analysis.data import NightData, choose
from planner.analysis.stability import deviations, far_out, stability_of
from planner.analysis.stability_cells import cell_levels, cell_residuals
from planner.analysis.stability_series import NightSeries, follow_phase, packet_clock
from planner.errors import InputError, NotEnoughData
from tests.analysis.nights import night


def columns(seed: int = 1, **changes: Any) -> dict[str, Any]:
    """A night of 200 packets of eight shots at two holds, with two readings."""
    given = {"packets": 100, "holds": np.array([1.0, 2.0]), "phases": 8, "coherence_s": 1e6, "detector": 0.0}
    made = night(seed, **(given | {"load_scatter": 0.0, "drift": 0.0} | changes))
    rng = np.random.default_rng([seed, 7])
    made["reading_tilt"] = np.cumsum(rng.standard_normal(len(made["key"])))
    made["reading_still"] = np.full(len(made["key"]), 12.5)
    return made


def of(made: dict[str, Any], name: str, **options: Any) -> Any:
    return stability_of(NightData.from_columns(made), name, **options)


def test_shot_noise_is_one_times_shot_noise() -> None:
    """A night with nothing but counting noise: contrast and offset at 1 x their limit within 5 bands in 6."""
    for name in ("contrast", "offset"):
        own = of(columns(3), name).stability
        low, high = own.allan.low / own.limit, own.allan.high / own.limit
        assert np.mean((low <= 1.03) & (high >= 0.97)) >= 5 / 6
        assert own.kind[0] == 0


def test_phase_drift_stands_above_shot_noise() -> None:
    """The test night's phase goes round 2 sin(5 t / T): at long times far above shot noise, at one packet near it."""
    own = of(columns(4), "phase").stability
    assert own.multiple[0] < 4
    assert own.multiple[-1] > 20
    assert own.kind[-1] < 0


def test_a_reading_is_its_packets_mean() -> None:
    """Packet means of a reading, shots without a value left out of the mean."""
    made = columns(5)
    made["reading_tilt"][::3] = np.nan
    series = NightSeries(choose(NightData.from_columns(made)).data).get("tilt")
    expected = [np.nanmean(made["reading_tilt"][made["packet"] == p]) for p in range(200)]
    np.testing.assert_allclose(series.values, expected, rtol=1e-12)
    assert np.isnan(series.shot_sd).all()


def test_a_rhythm_is_found_with_its_period_and_amplitude() -> None:
    """A sinusoid of 0.02 in the loading, period 400 s: first rhythm within 1 %, amplitude within 10 %."""
    made = columns(6)
    factor = 1 + 0.02 * np.sin(2 * np.pi * made["mid_s"] / 400)
    made["atoms_a"], made["atoms_b"] = made["atoms_a"] * factor, made["atoms_b"] * factor
    first = of(made, "atoms").rhythms[0]
    assert abs(first.period_s - 400) < 4
    # packets of 32 to 40 s average the sinusoid a little
    assert abs(first.amplitude - 0.02) < 0.002
    assert first.chance < 1e-6


def test_spoilt_fringes_are_left_out_by_their_own_scatter() -> None:
    """Shots without light on one output spoil three packets: no value of contrast there, and it is said."""
    made = columns(8)
    for packet in (20, 90, 140):
        made["atoms_a"][np.flatnonzero(made["packet"] == packet)[2]] *= 0.02
    found = of(made, "contrast")
    assert np.flatnonzero(np.isnan(found.series.values)).tolist() == [20, 90, 140]
    assert any("3 fringes left out" in note for note in found.notes)
    assert found.stability.empty == 3


def test_phase_is_followed_through_whole_turns_and_else_refused() -> None:
    """A drift of three turns over the night comes back whole; a random phase is refused."""
    t = np.linspace(0, 1e4, 300)
    cell = np.arange(300) % 3
    true = 6 * np.pi * (t / 1e4) ** 2 + np.array([0.0, 1.0, -2.5])[cell]
    followed = follow_phase(np.angle(np.exp(1j * true)), t, cell)
    steps = np.diff(followed - 6 * np.pi * (t / 1e4) ** 2)
    own = followed - 6 * np.pi * (t / 1e4) ** 2
    # up to one constant a cell
    for number in range(3):
        assert np.ptp(own[cell == number]) < 1e-6, steps
    with pytest.raises(NotEnoughData, match="third of a turn"):
        follow_phase(np.random.default_rng(1).uniform(-np.pi, np.pi, 300), t, cell)


def test_grid_of_packets() -> None:
    """Long packets are no gap; a pause of three packets leaves three slots; sparse series pass packets over."""
    length = np.where(np.arange(40) % 2, 30.0, 90.0)
    start = np.concatenate([[0.0], np.cumsum(length + 2)[:-1]])
    start[20:] += 3 * 62.0
    everything = np.ones(40, dtype=bool)
    clock = packet_clock(start, start + length, everything)
    assert clock.pauses == 1
    assert clock.slot[20] - clock.slot[19] == 4
    assert abs(clock.step_s - 62) < 2
    grid = clock.on_grid(np.arange(40.0))
    assert np.isnan(grid).sum() == 3
    assert grid[-1] == 39
    held = np.arange(40) % 4 != 1
    sparse = packet_clock(start, start + length, held)
    assert sparse.passed_over == 10
    assert np.isfinite(sparse.on_grid(np.where(held, 1.0, np.nan))).sum() == 30


def test_cells_own_levels_are_no_scatter() -> None:
    """Two holds with a lifetime of 3 s differ by 28 % in atoms; the series shows counting noise alone.

    500 x 8 atoms a packet scatter by 0.016 or, at the longer hold, 0.02; the cell's mean taken off is made good.
    """
    made = columns(9, lifetime_s=3.0, atoms=700.0)
    found = of(made, "atoms")
    assert "2 cells" in found.notes[2]
    own = found.stability
    assert own.allan.low[0] / own.limit[0] < 1.02
    assert own.allan.high[0] / own.limit[0] > 0.98


def test_kinds_only_get_redder() -> None:
    """Along the averaging times alpha never grows."""
    rng = np.random.default_rng(10)
    for _ in range(20):
        kinds = deviations(rng.standard_normal(300), 1.0).kind
        assert list(kinds) == sorted(kinds, reverse=True)


def test_far_out_counts_outliers_alone() -> None:
    """Gaussian scatter has none beyond eight robust deviations."""
    values = np.random.default_rng(11).standard_normal(5000)
    assert far_out(values) == 0
    values[7] = 30
    assert far_out(values) == 1


def test_no_number_for_bad_input() -> None:
    """Too few packets, constant readings, unknown names, lost nights and infinite values: an error with the reason."""
    with pytest.raises(NotEnoughData, match="every packet has the same value"):
        of(columns(), "still")
    with pytest.raises(NotEnoughData, match="20 packets have a value"):
        of(columns(packets=10), "atoms")
    with pytest.raises(InputError, match=r"no series.*phase, contrast.*still, tilt"):
        of(columns(), "tlit")
    lost = columns() | {"state": np.full(1600, "lost")}
    with pytest.raises(NotEnoughData, match="none of 1600"):
        of(lost, "atoms")
    one = columns() | {"packet": np.zeros(1600, dtype=int)}
    with pytest.raises(NotEnoughData, match="1 packet"):
        of(one, "atoms")
    untimed = columns()
    untimed["start_s"][5] = np.nan
    with pytest.raises(NotEnoughData, match="1 of 1600 shots have no start time"):
        of(untimed, "atoms")
    unlogged = columns() | {"reading_tilt": np.full(1600, np.nan)}
    with pytest.raises(NotEnoughData, match="no shot that counts"):
        of(unlogged, "tilt")
    infinite = columns()
    infinite["reading_tilt"][800] = np.inf
    # an infinite reading of one shot is no reading: the packet's others stand
    assert np.isfinite(of(infinite, "tilt").series.values).all()
    with pytest.raises(NotEnoughData, match="0 packets have a value"):
        deviations(np.full(40, np.nan), 1.0)
    with pytest.raises(InputError, match="infinite"):
        deviations(np.append(np.arange(40.0) % 7, np.inf), 1.0)


def test_no_phase_without_fringe_or_packets() -> None:
    """No contrast, too few phases, or shots strewn over the night: no phase; atoms still have a series."""
    with pytest.raises(NotEnoughData, match=r"third of a turn|have a value"):
        of(columns(12, contrast=0.0), "phase")
    two = columns(13, phases=2)
    with pytest.raises(NotEnoughData, match="three different readout phases"):
        of(two, "phase")
    strewn = columns(14)
    rng = np.random.default_rng(14)
    strewn |= {"packet": np.full(1600, -1), "repeat": rng.integers(0, 8, 1600)}
    with pytest.raises(NotEnoughData, match="not in packets"):
        of(strewn, "contrast")
    found = of(strewn, "atoms")
    assert len(found.clock.time_s) == 1600
    assert any("not in packets" in reason for reason in found.correlations.missing.values())


def test_three_shots_a_packet_have_no_noise_series() -> None:
    """Exactly three shots leave no scatter about a fringe."""
    with pytest.raises(NotEnoughData, match="no scatter"):
        of(columns(15, phases=3), "noise")


def test_cell_levels_are_told_apart_from_drift() -> None:
    """Twelve cells at random in a walk ten times the noise: levels come back three times closer than plain means.

    The noise of neighbours' differences is then what was put in: no jumps from misjudged levels.
    """
    rng = np.random.default_rng(16)
    errors = np.zeros(2)
    for _ in range(20):
        cell = rng.permutation(np.repeat(np.arange(12), 17))
        true = rng.standard_normal(12)
        values = true[cell] + 0.1 * rng.standard_normal(204) + np.cumsum(0.1 * rng.standard_normal(204))
        means = np.bincount(cell, values) / 17
        for at, levels in enumerate((cell_levels(values, cell), means)):
            errors[at] += np.var(levels - true)
    assert errors[0] < errors[1] / 9


def test_cell_levels_of_white_noise_are_means() -> None:
    """With no drift levels are the cells' means within a tenth of their own error, and residuals keep their size."""
    rng = np.random.default_rng(17)
    cell = rng.permutation(np.repeat(np.arange(10), 30))
    sizes = []
    for _ in range(30):
        values = rng.standard_normal(300)
        residual, usable = cell_residuals(values, cell)
        assert usable.all()
        sizes.append(np.mean(residual**2))
    assert abs(np.mean(sizes) - 1) < 4 * np.std(sizes) / np.sqrt(30) + 0.01
    levels = cell_levels(values, cell)
    means = np.bincount(cell, values) / 30
    assert np.std(levels - means) < 0.1 / np.sqrt(30)


def test_cells_with_few_packets_have_no_residual() -> None:
    """Fewer than four packets make no level."""
    residual, usable = cell_residuals(np.arange(10.0), np.array([0] * 7 + [1] * 3))
    assert usable.tolist() == [True] * 7 + [False] * 3
    assert np.isnan(residual[7:]).all()
