"""The stand-in's noise, drift, memory and faults are as declared, over many seeds.

A sum of n squared normal numbers over their variance lies within the chi-square quantiles used here but for two chances
in a million; the seeds are fixed, so that a test which passes always does.
"""

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import stats

from planner.arrays import FloatArray
from planner.link.stand_in.draws import Unlocks, binomial, shot_draws
from planner.link.stand_in.drifts import SPAN_S, Walks
from planner.link.stand_in.model import StandInModel
from tests.link.stand_in_profiles import model, play, profile, share

RARE = 1e-6
MIDDLE = np.pi / 2  # readout phase of mid-fringe
COOLED = np.exp(-0.2)  # of the atoms loaded are there after 400 ms of cooling


def within(values: FloatArray, variance: float, *, slack: float = 0.0) -> None:
    """The scatter of independent values about their mean has this variance, or differs by the relative slack."""
    n = values.size - 1
    ratio = float(np.var(values, ddof=1)) / variance
    low, high = stats.chi2.ppf([RARE, 1 - RARE], n) / n
    assert low * (1 - slack) <= ratio <= high * (1 + slack)


def many(rigs: list[StandInModel], shots: int, *, hold: float, readout: float) -> FloatArray:
    """y of `shots` shots of each rig, at 100 s from each other."""
    return np.concatenate(
        [share(play(rig, 100.0 * np.arange(float(shots)), hold=hold, readout=readout)) for rig in rigs]
    )


def seeds(changes: dict[str, object], count: int = 20) -> list[StandInModel]:
    asked = profile(changes)
    return [StandInModel(asked, seed) for seed in range(count)]


@pytest.mark.parametrize("atoms", [200, 3000, 20000])
@pytest.mark.parametrize("readout", [MIDDLE, 0.6, 2.8])
def test_shot_noise(atoms: int, readout: float) -> None:
    """The variance of y is y (1 - y) / N: exactly binomial for few atoms, and its normal limit for many."""
    rigs = seeds({"cloud.atoms": atoms, "loss.vacuum": "1e6 s", "cloud.cold_share": 1.0})
    left = round(atoms * COOLED * np.exp(-2 / 1e6))
    y = many(rigs, 200, hold=2.0, readout=readout)
    mean = 0.5 + 0.31 * np.exp(-2 * 36 / 1000) * np.cos(readout)
    assert abs(float(np.mean(y)) - mean) < 5 * np.sqrt(mean * (1 - mean) / left / y.size)
    within(y, mean * (1 - mean) / left)


def test_the_normal_numbers_are_normal() -> None:
    """240,000 of them, eight a shot: a normal distribution of unit variance, and none knows of its neighbours."""
    uniform, normal = shot_draws(5, np.arange(1, 30_001))
    within(normal.ravel(), 1.0)  # chi-square's bounds are 1.4 % apart from 1 here
    assert stats.kstest(normal.ravel(), "norm").pvalue > RARE
    assert stats.kstest(uniform.ravel(), "uniform").pvalue > RARE
    together = np.concatenate([normal, uniform[:, 16:]], axis=1)
    assert np.max(np.abs(np.corrcoef(together.T) - np.eye(16))) < 6 / np.sqrt(30_000)
    next_shot = np.sum(normal[1:] * normal[:-1], axis=0) / 30_000
    assert np.max(np.abs(next_shot)) < 6 / np.sqrt(30_000)


@pytest.mark.parametrize(("atoms", "chance"), [(3000, 0.3), (20_000, 0.9), (1e6, 0.01)])
def test_many_atoms_scatter_as_the_binomial(atoms: float, chance: float) -> None:
    """Variance N p (1 - p) to 1.5 % in 200,000 draws; whole numbers, whose rounding adds a twelfth."""
    uniform, normal = shot_draws(6, np.arange(1, 25_001))
    found = binomial(np.full(200_000, atoms), np.full(200_000, chance), normal.ravel(), uniform[:, 16:].ravel())
    variance = atoms * chance * (1 - chance)
    assert float(np.mean(found)) == pytest.approx(atoms * chance, abs=5 * np.sqrt(variance / 200_000))
    within(found, variance, slack=1 / (12 * variance))


def test_few_atoms_are_binomial() -> None:
    """With six atoms each count is as frequent as the binomial says (Pearson's chi-square, 6 degrees)."""
    rigs = seeds({"cloud.atoms": 6 / COOLED, "contrast.short_hold": 0.5})
    in_a = np.concatenate([play(rig, np.arange(500.0), hold=0.0, readout=1.0).atoms_a for rig in rigs])
    chance = stats.binom.pmf(np.arange(7), 6, 0.5 + 0.25 * np.cos(1.0))
    found = np.bincount(in_a.astype(int), minlength=7)
    assert stats.chisquare(found, chance * in_a.size).pvalue > RARE


def test_detection_noise_adds_in_each_output() -> None:
    """The sum of both outputs scatters by 2 x 40^2, their difference by 4 N p (1 - p) more."""
    rigs = seeds({"noise.detection": 40, "contrast.short_hold": 0.0})
    nights = [play(rig, np.arange(250.0), hold=0.0, readout=0.0) for rig in rigs]
    a, b = (np.concatenate([getattr(night, name) for night in nights]) for name in ("atoms_a", "atoms_b"))
    atoms = round(20000 * COOLED)
    assert float(np.mean(a + b)) == pytest.approx(atoms, abs=5 * 40 * np.sqrt(2 / a.size))
    within(a + b, 2 * 40**2)
    within(a - b, 2 * 40**2 + atoms)
    within(a, 40**2 + atoms / 4)


@pytest.mark.parametrize("readout", [MIDDLE, 1.0, 2.2])
@pytest.mark.parametrize("cause", ["phase", "acceleration"])
def test_phase_noise_goes_through_the_fringe(readout: float, cause: str) -> None:
    """The variance of y is (C/2 sin)^2 sigma^2; sigma is 20 mrad, by the laser or by shaking times the scale factor.

    1e9 atoms, whose own variance is 2e-5 of it; the sine is straight over 20 mrad to sigma^2 (1 + cot^2 / 2), 1e-3.
    """
    scale = 86.909180529 * 1.66053906892e-27 / 1.054571817e-34 * 4e-6 * 2.0
    value = "20 mrad" if cause == "phase" else f"{0.02 / scale} m/s^2"
    rigs = seeds({"cloud.atoms": 1e9, f"noise.{cause}": value, "cloud.cold_share": 1.0})
    contrast = 0.62 * np.exp(-2 * 36 / 1000)
    within(many(rigs, 200, hold=2.0, readout=readout), (contrast / 2 * np.sin(readout) * 0.02) ** 2, slack=1e-3)


def test_noises_add() -> None:
    """At mid-fringe shot noise, laser phase, shaking and detection add in variance, and the model says the same.

    Of y = a / (a + b) near one half, detection noise makes det^2 / (2 N^2); N is 16375.
    """
    noise = {"noise.phase": "30 mrad", "noise.acceleration": "2 um/s^2", "noise.detection": 100}
    rigs = seeds({**noise, "loss.vacuum": "1e6 s", "cloud.cold_share": 1.0})
    scale = 86.909180529 * 1.66053906892e-27 / 1.054571817e-34 * 4e-6 * 2.0
    phase = np.hypot(0.030, scale * 2e-6)
    stated = rigs[0].expected({"hold": np.array([2.0])}, {}).phase_sigma_rad
    assert stated == pytest.approx(phase, rel=1e-8)
    atoms, contrast = 20000 * COOLED, 0.62 * np.exp(-2 * 36 / 1000)
    variance = 0.25 / atoms + (contrast / 2 * phase) ** 2 + 100**2 / (2 * atoms**2)
    within(many(rigs, 250, hold=2.0, readout=MIDDLE), variance, slack=3e-3)


def test_atom_number_noise_and_background() -> None:
    """The atom number scatters by 6 %; the background by its square root, and none has no noise."""
    rigs = seeds({"noise.atoms": 0.06, "noise.background": 120})
    nights = [play(rig, np.arange(250.0), hold=0.0, readout=0.0) for rig in rigs]
    within(np.concatenate([night.atoms_a + night.atoms_b for night in nights]) / (20000 * COOLED), 0.06**2)
    background = np.concatenate([night.background for night in nights])
    assert float(np.mean(background)) == pytest.approx(120, abs=5 * np.sqrt(120 / background.size))
    within(background, 120)
    assert np.all(play(model(), np.arange(50.0), hold=0.0).background == 0)


def test_saturation() -> None:
    """No output counts beyond what it can, and the outputs that would have are told."""
    counts = play(model({"noise.saturates": 9000}), np.arange(300.0), hold=0.0, readout=np.linspace(0, 7, 300))
    free = play(model(), np.arange(300.0), hold=0.0, readout=np.linspace(0, 7, 300))
    np.testing.assert_array_equal(counts.atoms_a, np.minimum(free.atoms_a, 9000))
    np.testing.assert_array_equal(counts.atoms_b, np.minimum(free.atoms_b, 9000))
    over = (free.atoms_a > 9000).astype(float) + (free.atoms_b > 9000)
    np.testing.assert_array_equal(counts.saturated, over)
    assert set(over) == {0.0, 1.0}


# ---- drift


def test_a_walk_grows_linearly_with_time() -> None:
    """The variance of the change over T is T / 10 h, from 20 minutes to 20 hours: 256 walks over 16 days.

    Waves of at most 16 days make it a closed walk: T / 10 h x (1 - T / 16 d) / (1 - 10 h / 16 d); those above the
    fastest, of 11 minutes, are missing. The bound is five standard errors, 2 / (independent changes), and 4 %.
    """
    step_s = 1200.0
    times = np.arange(0.0, SPAN_S, step_s)
    values = np.concatenate([Walks(seed, 64).at(times) for seed in range(4)], axis=1)
    for steps in (1, 3, 9, 15, 30, 60):
        change = np.roll(values, -steps, axis=0) - values  # the walks close
        span_s = steps * step_s
        independent = values.shape[1] * SPAN_S / span_s
        closed = (1 - span_s / SPAN_S) / (1 - 36_000 / SPAN_S)
        missing = 0.06 if steps == 1 else 0.02  # what the missing waves would add: up to 4 / (2048 x pi x T / SPAN_S)
        ratio = float(np.mean(change**2)) / (span_s / 36_000) / closed
        assert 1 - missing - 5 * np.sqrt(2 / independent) < ratio < 1 + 5 * np.sqrt(2 / independent)
    assert np.all(np.abs(Walks(5, 3).at(np.array([0.0]))) < 1e-9)


@dataclass(frozen=True)
class Drifting:
    """One kind of drift: its RMS over ten hours as written and in SI, and how it is seen in the counts."""

    kind: str
    written: object
    rms: float
    seen: str  # "offset", "phase", "contrast" or "atoms"


SCALE = 86.909180529 * 1.66053906892e-27 / 1.054571817e-34 * 4e-6 * 2.0  # rad per m/s^2 in the shots below
KINDS = [
    Drifting("phase", "10 mrad", 0.010, "phase"),
    Drifting("acceleration", f"{0.010 / SCALE} m/s^2", 0.010, "phase"),
    Drifting("offset", 0.01, 0.01, "offset"),
    Drifting("contrast", 0.02, 0.02, "contrast"),
    Drifting("atoms", 0.02, 0.02, "atoms"),
]


def drift_of(rig: StandInModel, times: FloatArray, seen: str) -> FloatArray:
    """The drift at those times, from the counts of 1e9 atoms."""
    counts = play(rig, times, hold=2.0, readout=MIDDLE if seen in ("phase", "offset") else 0.0)
    contrast = 0.62 * np.exp(-2 * 36 / 1000)
    y = share(counts) - 0.5
    if seen == "phase":
        return np.asarray(-2 * y / contrast)
    if seen == "contrast":
        return np.asarray(2 * y / contrast - 1)
    if seen == "offset":
        return y
    return np.asarray((counts.atoms_a + counts.atoms_b) / (1e9 * COOLED * np.exp(-2 / 1e6)) - 1)


@pytest.mark.parametrize("one", KINDS, ids=[one.kind for one in KINDS])
def test_each_drift_has_its_declared_size(one: Drifting) -> None:
    """Over 120 seeds the variance at 2.5, 5, 10 and 20 hours is the declared one times T / 10 h, and nothing at 0."""
    times = 3600 * np.array([0.0, 2.5, 5.0, 10.0, 20.0])
    changes = {f"drift.{one.kind}": one.written, "cloud.atoms": 1e9, "cloud.cold_share": 1.0, "loss.vacuum": "1e6 s"}
    found = np.array([drift_of(rig, times, one.seen) for rig in seeds(changes, 120)])
    assert np.all(np.abs(found[:, 0]) < 5e-4)  # the shot noise of 1e9 atoms, in a phase, is 6e-5
    for place, hours in enumerate(times[1:] / 3600, start=1):
        within(found[:, place], one.rms**2 * hours / 10, slack=0.04)  # the walk closes after 16 days: 4 % at 20 h
    # the changes over ten hours one after another, 38 of them in 16 days and 40 seeds: their variance to 18 %
    long = np.array([drift_of(rig, 36_000.0 * np.arange(39.0), one.seen) for rig in seeds(changes, 40)])
    within(np.diff(long, axis=1).ravel(), one.rms**2, slack=0.01)


def test_drifts_are_independent() -> None:
    """Between any two kinds the changes over ten hours are uncorrelated: below five times 1 / sqrt(400)."""
    ends = np.array([Walks(seed, 6).at(np.array([36_000.0]))[0] for seed in range(400)])
    off = np.corrcoef(ends.T) - np.eye(6)
    assert np.max(np.abs(off)) < 5 / np.sqrt(400)


def test_readings_walk_and_scatter() -> None:
    """A reading has its mean, its walk, and its own noise."""
    rigs = seeds({"readings.tilt.walk": 6, "readings.tilt.noise": 0}, 200)
    times = np.array([0.0, 36_000.0])
    within(np.array([play(rig, times, hold=1.0).readings["tilt"][1] for rig in rigs]), 6**2)
    still = seeds({"readings.tilt.noise": 0.5})
    noise = np.concatenate([play(rig, np.arange(200.0), hold=1.0).readings["tilt"] for rig in still])
    assert float(np.mean(noise)) == pytest.approx(12, abs=5 * 0.5 / np.sqrt(noise.size))
    within(noise, 0.25)


@pytest.mark.parametrize(("kind", "written", "amplitude"), [("offset", 0.01, 0.01), ("phase", "10 mrad", 0.010)])
def test_the_rhythm_of_the_room(kind: str, written: object, amplitude: float) -> None:
    """A sine of the declared period and amplitude, taken in the middle of the hold; nothing at other periods."""
    quiet = {"cloud.atoms": 1e9, "cloud.cold_share": 1.0, "loss.vacuum": "1e6 s"}
    rig = model({f"drift.air_handling.{kind}": written, "drift.air_handling.period": "20 min", **quiet})
    times = np.arange(0.0, 36_000.0, 50.0)  # thirty periods, 720 shots
    found = drift_of(rig, times, kind)
    # of 720 shots the shot noise of an amplitude is 6e-5 sqrt(2 / 720) at most; the sine bends a phase by its cube / 6
    tolerance = 5 * 6e-5 * np.sqrt(2 / 720) + amplitude**3 / 6
    wave = 2 / 720 * np.fft.rfft(found)
    assert int(np.argmax(np.abs(wave))) == 30
    angle = 2 * np.pi * (times + 1.0) / 1200.0  # holds of 2 s
    assert 2 / 720 * np.sum(found * np.sin(angle)) == pytest.approx(amplitude, abs=tolerance)
    assert 2 / 720 * np.sum(found * np.cos(angle)) == pytest.approx(0.0, abs=tolerance)  # it is a sine, from the origin
    assert np.max(np.abs(np.delete(wave, 30))) < 2 * tolerance


# ---- memory and faults


@dataclass(frozen=True)
class Played:
    start_s: float
    duration_s: float


def test_the_load_of_earlier_shots() -> None:
    """The load is the time spent in shots, weighted by exp(-age / 40 s) / 40 s; here summed in steps of 1 ms."""
    rng = np.random.default_rng(3)
    lasts, gaps = rng.uniform(0.5, 30, 12), rng.uniform(0, 60, 12)
    starts = np.cumsum(np.concatenate([[0.0], lasts[:-1] + gaps[:-1]]))
    rig = model({"memory.strength": 0.05, "cloud.atoms": 1e9})
    loads = rig.loads(starts, lasts)
    busy_s = np.arange(0, starts[-1], 1e-3) + 5e-4
    playing = np.any((busy_s >= starts[:, None]) & (busy_s < (starts + lasts)[:, None]), axis=0)
    direct = [float(np.sum(playing[busy_s < t] * np.exp(-(t - busy_s[busy_s < t]) / 40)) * 1e-3 / 40) for t in starts]
    np.testing.assert_allclose(loads, direct, atol=12 * 1e-3 / 40)  # each shot's ends are off by up to a step
    counts = play(rig, starts, hold=2.0, load=loads)
    without = play(model({"cloud.atoms": 1e9}), starts, hold=2.0)
    gained = (counts.atoms_a + counts.atoms_b) / (without.atoms_a + without.atoms_b) - 1
    np.testing.assert_allclose(gained, 0.05 * loads, atol=1e-8)
    # one shot at a time, told of those before, gives the same counts
    for i in range(12):
        past = [Played(float(starts[k]), float(lasts[k])) for k in range(i)]
        alone = rig.shot({"hold": 2.0}, {}, float(starts[i]), i + 1, past)
        assert alone.atoms_a + alone.atoms_b == pytest.approx(counts.atoms_a[i] + counts.atoms_b[i], abs=2)


def test_unlocks_come_at_the_declared_rate() -> None:
    """Two an hour of four minutes: a moment lies in one with chance 1 - exp(-2 x 4 / 60)."""
    rigs = seeds({"faults.unlocks_per_hour": 2}, 10)
    times = 1800.0 * np.arange(400.0)  # further apart than an unlock lasts: independent
    hit = int(np.sum([play(rig, times, hold=1.0).unlocked for rig in rigs]))
    assert stats.binomtest(hit, 4000, float(-np.expm1(-2 * 4 / 60))).pvalue > RARE


def test_many_unlocks_fill_the_whole_hour() -> None:
    """At 2000 an hour, a second each: moments ten seconds apart lie in one with chance 1 - exp(-2000 / 3600)."""
    found = Unlocks(8, 2000.0, 1.0).at(10.0 * np.arange(3600.0))
    for quarter in np.split(found.reshape(10, 360), 4, axis=1):  # of each of ten hours
        assert stats.binomtest(int(quarter.sum()), 900, float(-np.expm1(-2000 / 3600))).pvalue > RARE


def test_unlocks_may_crowd_an_hour() -> None:
    """At five an hour they begin in Poisson's numbers, each lasts its time, and hours do not know of each other."""
    rig = model({"faults.unlocks_per_hour": 5, "faults.unlock_lasts": "2 s"}, seed=4)
    times = np.arange(0.0, 200 * 3600.0, 1.0)
    inside = rig._unlocks.at(times).astype(int)
    begins = times[1:][np.diff(inside) > 0]
    # spans of 2 s on a grid of 1 s: two points each; a second one within 3 s (chance 0.4 %) makes no new beginning
    assert stats.poisson.sf(len(begins) - 1, 1000) > RARE
    assert stats.poisson.cdf(len(begins), 1000 * 0.995) > RARE
    assert abs(int(inside.sum()) - 2 * len(begins)) <= 0.02 * len(begins)
    an_hour = np.bincount((begins // 3600).astype(int), minlength=200)
    assert np.max(an_hour) > 5  # more than the mean: not a fixed number an hour
    within(an_hour.astype(np.float64), 5.0, slack=0.02)
    long = model({"faults.unlocks_per_hour": 5, "faults.unlock_lasts": "3 h"}, seed=4)._unlocks.at(times[::600])
    assert np.mean(long) > 0.99


def test_an_unlocked_shot_has_no_fringe_and_says_so() -> None:
    """At the crest y is one half while unlocked, and the shot carries the flag."""
    rig = model({"faults.unlocks_per_hour": 6})
    times = 60.0 * np.arange(500.0)
    counts = play(rig, times, hold=0.0, readout=0.0)
    assert 50 < np.sum(counts.unlocked) < 450
    y = share(counts)
    noise = 0.5 / np.sqrt(20000 * COOLED)
    assert np.all(np.abs(y[counts.unlocked] - 0.5) < 6 * noise)
    assert np.all(np.abs(y[~counts.unlocked] - 0.81) < 6 * noise)
    for i in range(0, 500, 25):
        outcome = rig.shot({"hold": 0.0, "readout": 0.0}, {}, float(times[i]), i + 1, [])
        assert outcome.flags == (("unlocked",) if counts.unlocked[i] else ())


def test_outliers() -> None:
    """Two percent of the shots have a count that is anything: the rate is binomial, the counts are even over [0, N]."""
    rigs = seeds({"faults.outliers": 0.02})
    nights = [play(rig, np.arange(1000.0), hold=0.0, readout=0.0) for rig in rigs]
    outlier = np.concatenate([night.outlier for night in nights])
    y = np.concatenate([share(night) for night in nights])
    assert stats.binomtest(int(outlier.sum()), outlier.size, 0.02).pvalue > RARE
    assert stats.kstest(y[outlier], "uniform").pvalue > RARE
    assert np.all(np.abs(y[~outlier] - 0.81) < 6 * 0.5 / np.sqrt(20000 * COOLED))
