"""The spectrum at irregular times against astropy's, and its false-alarm level against astropy's and simulation."""

from dataclasses import replace

import numpy as np
import pytest

from planner.analysis.stability_spectrum import lomb_scargle
from planner.errors import InputError, NotEnoughData


def irregular(seed: int, size: int = 150) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Times with a pause, a slow sinusoid in noise, unequal errors."""
    rng = np.random.default_rng(seed)
    t = np.cumsum(rng.uniform(40, 200, size))
    t[size // 2 :] += 5000
    sd = rng.uniform(0.5, 2.0, size)
    return t, 296.15 + 0.8 * np.sin(2 * np.pi * t / 3600) + sd * rng.standard_normal(size), sd


@pytest.mark.parametrize("weighted", [False, True])
def test_power_is_astropys(weighted: bool) -> None:
    """Equal at every frequency to 1e-7 to astropy's direct floating-mean sum (`method="slow"`)."""
    from astropy.timeseries import LombScargle

    t, y, sd = irregular(1)
    found = lomb_scargle(t, y, sd=sd if weighted else None)
    theirs = LombScargle(t, y, sd if weighted else None, fit_mean=True, center_data=True)
    power = theirs.power(found.frequency_hz, method="slow")
    np.testing.assert_allclose(found.power, power, atol=1e-7)
    best = found.frequency_hz[found.best]
    assert abs(1 / best - 3600) < 100
    # amplitude of the model that astropy fits there
    _, cosine, sine = theirs.model_parameters(best)
    np.testing.assert_allclose(found.amplitude[found.best], np.hypot(cosine, sine), rtol=1e-6)


@pytest.mark.parametrize("weighted", [False, True])
def test_false_alarm_is_astropys(weighted: bool) -> None:
    """Chance and level equal to astropy's Baluev bound to 1e-9."""
    from astropy.timeseries import LombScargle

    t, y, sd = irregular(2)
    found = lomb_scargle(t, y, sd=sd if weighted else None)
    theirs = LombScargle(t, y, sd if weighted else None)
    highest = found.frequency_hz[-1]
    # astropy takes the end of a grid of its own, a fraction of a step beyond; the same end for both
    found = replace(found, frequency_hz=theirs.autofrequency(maximum_frequency=highest))
    for power in (0.05, 0.1, 0.2, 0.4):
        chance = theirs.false_alarm_probability(power, method="baluev", maximum_frequency=highest)
        np.testing.assert_allclose(found.false_alarm(power), chance, rtol=1e-9)
    for chance in (0.1, 0.01, 1e-4):
        level = theirs.false_alarm_level(chance, method="baluev", maximum_frequency=highest)
        np.testing.assert_allclose(found.level(chance), level, rtol=1e-6)


def test_white_noise_passes_the_level_as_often_as_stated() -> None:
    """The 5 % level is beaten by 5 % of 600 white series or fewer, within 3 standard errors, and by at least 2 %."""
    t, _, _ = irregular(3, 60)
    rng = np.random.default_rng(4)
    beaten = 0
    for _ in range(600):
        found = lomb_scargle(t, rng.standard_normal(60))
        beaten += bool(found.power.max() > found.level(0.05))
    assert 0.02 < beaten / 600 < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 600)


def test_no_spectrum_without_data() -> None:
    """Few, constant or infinite values, or errors that are no errors, are refused with a reason."""
    t = np.arange(20.0)
    with pytest.raises(NotEnoughData, match="needs 8"):
        lomb_scargle(t[:5], t[:5])
    with pytest.raises(NotEnoughData, match="constant"):
        lomb_scargle(t, np.full(20, 296.15))
    with pytest.raises(NotEnoughData, match="one time"):
        lomb_scargle(np.ones(20), t)
    with pytest.raises(InputError, match="infinite"):
        lomb_scargle(t, np.where(t == 3, np.inf, t))
    with pytest.raises(InputError, match="weighted"):
        lomb_scargle(t, np.sin(t), sd=np.zeros(20))
    with pytest.raises(InputError, match="highest"):
        lomb_scargle(t, np.sin(t), highest_hz=0.001)
    with pytest.raises(InputError, match="chance"):
        lomb_scargle(t, np.sin(t)).level(0.9)
