"""A night's fringes in one report: the stand-in's own numbers come back."""

from functools import cache

import numpy as np
import pytest
from scipy import stats

from planner.analysis.data import NightData
from planner.analysis.night_fringes import FringeReport, report_fringes, scan_test
from planner.analysis.scale import shot_scales
from planner.errors import NotEnoughData
from planner.resources import sequences_folder
from planner.sequence.reader import read_sequence
from tests.analysis.nights import night
from tests.analysis.stand_in_nights import play, scene


@cache
def stand_in_report(seed: int = 3) -> FringeReport:
    """The report of a night of the demonstration sequence on the stand-in rig."""
    sequence = read_sequence(sequences_folder() / "hold-scan.toml")
    (report,) = report_fringes(
        play(scene(), seed),
        cut_flags=["unlocked"],
        detection_noise_atoms=40.0,
        scales=lambda data: shot_scales(data, sequence),
    )
    return report


def test_the_stand_ins_phase_is_followed() -> None:
    """The walk found is the profile's (0.6 rad RMS over ten hours) within a factor of three in variance."""
    report = stand_in_report()
    assert report.followed is not None
    assert report.packets is not None
    assert 1 / 3 < report.followed.walk.phase / (0.6**2 / 36_000) < 3
    assert report.followed.chance.min() > 0.9
    # what the path says of its own errors is right: their mean square is one, over some 200 packets
    assert 0.7 < np.mean(report.followed.surprise[8:] ** 2) < 1.4
    assert report.scan_p < 1e-6


def test_the_stand_ins_detector_is_even() -> None:
    """Both outputs are detected alike, and the interval says so."""
    ratio = stand_in_report().detector
    assert ratio is not None
    assert ratio.low < 1.0 < ratio.high
    assert ratio.high - ratio.low < 0.15


def test_four_phases_give_an_upper_value_of_phase_noise() -> None:
    """Packets of four shots cannot tell phase noise; the upper value holds the profile's 60 mrad and its shaking."""
    report = stand_in_report()
    assert report.noise
    for one in report.noise:
        assert not one.told_apart
        shaking = 0.8e-6 * 1.37e9 * 4e-6 * one.hold_s  # m / hbar of rubidium-87, 4 um apart
        assert one.high_rad > np.hypot(0.06, shaking) * 0.8


def test_eight_phases_tell_phase_noise() -> None:
    """With eight phases in a packet the made-up phase noise is found at the hold where it is large."""
    columns = night(8, phases=8, packets=12, phase_noise=0.08, detector=5.0, coherence_s=60.0)
    (report,) = report_fringes(NightData.from_columns(columns))
    told = [one for one in report.noise if one.told_apart]
    assert len(told) >= 8
    inside = [one.low_rad <= 0.08 * np.sqrt(one.hold_s) <= one.high_rad for one in told]
    # of some ten intervals of 95 %, more than two miss once in a hundred nights
    assert inside.count(False) <= 2
    assert max(one.low_rad for one in told) > 0.1


def test_null_scans_fire_as_stated() -> None:
    """The test over a scan of holds without a fringe fires at 1 % in 1 % of 20,000 scans, and is scipy's."""
    p = np.random.default_rng(4).random((20_000, 8))
    found = np.array([scan_test(row) for row in p])
    assert 0.008 <= np.mean(found < 0.01) <= 0.012
    # source: scipy.stats.combine_pvalues
    assert found[0] == pytest.approx(stats.combine_pvalues(p[0], method="fisher").pvalue, rel=1e-9)


def test_a_scan_beats_its_best_hold() -> None:
    """Eight holds of the same weak fringe: together they are seen more often than by the best of them."""
    rng = np.random.default_rng(6)
    power = rng.noncentral_chisquare(2.0, 3.0, (4000, 8))
    p = stats.chi2.sf(power, 2)
    together = np.mean([scan_test(row) < 0.01 for row in p])
    best = np.mean(1 - (1 - p.min(axis=1)) ** 8 < 0.01)
    assert together > best + 0.2


def test_a_night_without_a_fringe() -> None:
    """No phase is followed, no noise told, no detector judged; and each says why."""
    columns = night(2, contrast=0.0)
    (report,) = report_fringes(NightData.from_columns(columns))
    assert report.scan_p > 0.001
    # a few of a hundred packets stand out of noise by chance; a path through them would be no path
    assert (report.noise, report.followed, report.detector) == ((), None, None)
    assert set(report.why_not) == {"phase noise", "path", "detector"}


def test_no_shot_left() -> None:
    """All shots cut: that is said, with the reasons."""
    columns = night(2)
    columns["flags"][:] = "unlocked"
    with pytest.raises(NotEnoughData, match=r"none of 432 attempts.*unlocked"):
        report_fringes(NightData.from_columns(columns), cut_flags=["unlocked"])
