"""The tide of the stand-in: waves of acceleration, through the scale factor, averaged over the hold."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from planner.link.stand_in.profile import Wave, read_profile
from planner.link.stand_in.tide import mean_acceleration
from tests.link.stand_in_profiles import model, play, share

ROOT = Path(__file__).resolve().parent.parent.parent
DATA = ROOT / "tests" / "outside" / "data"
MASS_OVER_HBAR = 86.909180529 * 1.66053906892e-27 / 1.054571817e-34  # Rb-87; AME2020, CODATA 2022, from memory
EARTH = [  # periods in hours: the constituents table of tests/outside/data; amplitudes in m/s^2 and phases invented
    (12.4206012, 320e-9, 0.7),
    (12.0, 150e-9, 1.3),
    (23.9344696, 480e-9, -0.4),
    (25.8193417, 340e-9, 1.9),
]
WAVES = tuple(Wave(period_s=3600 * hours, amplitude=size, phase_rad=phase) for hours, size, phase in EARTH)


def acceleration(time_s: float) -> float:
    return float(sum(size * np.cos(2 * np.pi * time_s / (3600 * hours) + phase) for hours, size, phase in EARTH))


@settings(max_examples=40, deadline=None)
@given(st.floats(-1e5, 1e6), st.floats(0.01, 1e5))
def test_what_counts_is_the_mean_over_the_hold(begin_s: float, hold_s: float) -> None:
    """Any hold, to a day and more: scipy's quadrature of the sum of cosines, over the hold."""
    direct = quad(acceleration, begin_s, begin_s + hold_s, epsabs=0, epsrel=1e-10, limit=200)[0] / hold_s
    (found,) = mean_acceleration(WAVES, np.array([begin_s]), np.array([hold_s]))
    assert found == pytest.approx(direct, abs=1e-14)


def test_a_short_hold_feels_the_value() -> None:
    """Over holds of 1 to 60 s the phase is scale x acceleration: a wave bends by (w T)^2 / 24, 3e-6 of 1.3 um/s^2."""
    begin = np.arange(0.0, 86_400.0, 500.0)
    for hold_s in (1.0, 20.0, 60.0):
        found = mean_acceleration(WAVES, begin, np.full(len(begin), hold_s))
        np.testing.assert_allclose(found, acceleration_at(begin + hold_s / 2), atol=4e-6 * 1.3e-6)
    no_hold = mean_acceleration(WAVES, begin, np.zeros(len(begin)))
    np.testing.assert_allclose(no_hold, acceleration_at(begin), rtol=1e-12)


def acceleration_at(time_s: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> list[float]:
    return [acceleration(float(t)) for t in time_s]


@pytest.mark.parametrize(("hold_s", "separation"), [(1.0, 4e-6), (5.0, 4e-6), (5.0, 20e-6), (20.0, 2e-6)])
def test_the_counts_carry_scale_times_acceleration(hold_s: float, separation: float) -> None:
    """At mid-fringe of 1e9 atoms arcsin gives the phase back; it is (m / hbar) separation hold x acceleration."""
    tide = {
        f"tide.W{i}": {"period": f"{hours} h", "amplitude": f"{size} m/s^2", "phase": f"{phase} rad"}
        for i, (hours, size, phase) in enumerate(EARTH)
    }
    rig = model({**tide, "cloud.atoms": 1e9, "cloud.cold_share": 1.0, "loss.vacuum": "1e6 s"})
    begin = np.arange(0.0, 90_000.0, 300.0)
    counts = play(rig, begin, hold=hold_s, separation=separation, readout=np.pi / 2)
    contrast = 0.62 * np.exp(-hold_s * 9 * separation / 1000e-6)
    phase = -np.arcsin((share(counts) - 0.5) * 2 / contrast)
    stated = MASS_OVER_HBAR * separation * hold_s * np.array(acceleration_at(begin + hold_s / 2))
    noise = 1 / (contrast * np.sqrt(1e9 * np.exp(-0.2)) * np.cos(np.max(np.abs(stated))))
    np.testing.assert_allclose(phase, stated, atol=5.5 * noise)
    assert np.max(np.abs(stated)) > 40 * noise  # it is the tide that is seen


def test_the_tide_follows_no_switch() -> None:
    """With either state of the switches the same counts, while a signal would change its sign."""
    rig = model({"tide.M2.amplitude": "1 um/s^2", "cloud.atoms": 1e9})
    begin = np.arange(0.0, 50_000.0, 1000.0)
    near, far = (
        share(play(rig, begin, hold=5.0, readout=np.pi / 2, signs={"collar": np.full(50, sign)}))
        for sign in (1.0, -1.0)
    )
    np.testing.assert_array_equal(near, far)


def test_the_demo_has_the_earths_periods() -> None:
    """The demo's waves have the published periods (tests/outside/data/tide_constituents.csv names their sources).

    Their greatest sum is of the size of a real day: within a factor of two of the swing that pygtide (a reference
    program's series, solid_tide_52N_7E_2024-03-10.csv) has at 52 N, one day of a spring tide.
    """
    waves = read_profile(ROOT / "sequences" / "gallery-stand-in.toml").tide
    with (DATA / "tide_constituents.csv").open(encoding="utf-8") as file:
        rows = csv.DictReader(line for line in file if not line.startswith("#"))
        published = {row["name"]: float(row["period_h"]) for row in rows}
    hours = [wave.period_s / 3600 for wave in waves]
    assert hours == pytest.approx([published[name] for name in ("M2", "S2", "K1", "O1")], abs=1e-6)
    with (DATA / "solid_tide_52N_7E_2024-03-10.csv").open(encoding="utf-8") as file:
        table = csv.DictReader(line for line in file if not line.startswith("#"))
        day = np.array([float(row["pygtide_default"]) for row in table]) * 1e-9
    month = np.arange(0.0, 30 * 86_400.0, 1800.0)
    found = mean_acceleration(waves, month, np.zeros(len(month)))
    assert 0.5 < np.ptp(found) / np.ptp(day) < 2
