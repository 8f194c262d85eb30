"""The tide at a place against a published implementation, an ephemeris, and the tide's own lines."""

import csv
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest

from planner.errors import InputError
from planner.physics.tide import Place, longman

DATA = Path(__file__).resolve().parents[1] / "outside" / "data"
MARCH_2024 = datetime(2024, 3, 10, tzinfo=UTC).timestamp()


def rows(name: str) -> list[dict[str, str]]:
    """Rows of a reference file, its comments left out."""
    lines = [line for line in (DATA / name).read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


def test_longman_as_published() -> None:
    """Hourly values of a day at 52 N, 7 E, 50 m within 0.1 nm/s^2."""
    # source: tidegravity 0.5.0 (Longman 1959, factor 1.1575), computed beside these tests; see the file's head. Its
    # perigee has the square term with the other sign, which is the difference that is left
    day = rows("solid_tide_52N_7E_2024-03-10.csv")
    times = np.array([datetime.fromisoformat(row["utc"]).timestamp() for row in day])
    found = longman(times, Place(latitude_deg=52.0, longitude_deg=7.0, height_m=50.0)).total(1.1575)
    expected = np.array([float(row["longman"]) for row in day])
    np.testing.assert_allclose(found * 1e9, expected, rtol=0, atol=0.1)


def direct(times: np.ndarray, place: Place) -> np.ndarray:
    """Rigid tide from Moon and Sun of an ephemeris: difference of the attraction here and at the Earth's centre."""
    coordinates = pytest.importorskip("astropy.coordinates")
    from astropy.time import Time
    from astropy.utils import iers

    # source: astropy's built-in ephemeris and the ephemerides' mass parameters (IAU 2015 / DE430, from memory)
    with iers.conf.set_temp("auto_download", False), iers.conf.set_temp("iers_degraded_accuracy", "warn"):
        when = Time(times, format="unix")
        site = coordinates.EarthLocation.from_geodetic(place.longitude_deg, place.latitude_deg, place.height_m)
        here = np.array([axis.to_value("m") for axis in site.to_geocentric()])
        latitude, longitude = np.deg2rad([place.latitude_deg, place.longitude_deg])
        up = np.array([np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)])
        total = np.zeros(len(times))
        for name, mass_parameter in (("moon", 4.9028e12), ("sun", 1.32712440018e20)):
            body = coordinates.get_body(name, when, ephemeris="builtin").transform_to(coordinates.ITRS(obstime=when))
            at = body.cartesian.xyz.to_value("m").T
            away = at - here
            pull = away / np.linalg.norm(away, axis=1)[:, None] ** 3 - at / np.linalg.norm(at, axis=1)[:, None] ** 3
            total -= mass_parameter * (pull @ up)
        return total


@pytest.mark.filterwarnings("ignore")  # astropy warns that its table of the Earth's rotation is not of today
@pytest.mark.parametrize("latitude", [52.0, 43.83, 0.0])
def test_against_an_ephemeris(latitude: float) -> None:
    """59 days, every three hours: within 50 nm/s^2 of the direct attraction times 1.1575, and 12 nm/s^2 RMS."""
    place = Place(latitude_deg=latitude, longitude_deg=7.0, height_m=50.0)
    times = MARCH_2024 + 3 * 3600.0 * np.arange(59 * 8)
    difference = longman(times, place).total(1.1575) - 1.1575 * direct(times, place)
    assert np.abs(difference).max() < 50e-9
    assert np.sqrt(np.mean(difference**2)) < 12e-9


@pytest.mark.parametrize(
    ("latitude", "low", "high"),
    [(0.0, -2.18, 1.08), (30.0, -2.07, 1.08), (45.0, -1.75, 1.08), (52.0, -1.48, 1.08), (60.0, -1.11, 1.08)],
)
def test_extremes_of_a_year(latitude: float, low: float, high: float) -> None:
    """Extremes of the change of g over 2024 at 7 E, um/s^2, within 3 %."""
    # source: computed with tidegravity 0.5.0 (Longman, factor 1.1575)
    times = datetime(2024, 1, 1, tzinfo=UTC).timestamp() + 600.0 * np.arange(366 * 144)
    found = longman(times, Place(latitude_deg=latitude, longitude_deg=7.0)).total(1.1575) * 1e6
    assert found.min() == pytest.approx(low, rel=0.03)
    assert found.max() == pytest.approx(high, rel=0.03)


@pytest.mark.parametrize(("name", "latitude"), [("M2", 40.0), ("S2", 40.0), ("N2", 40.0), ("K1", 40.0), ("O1", 40.0)])
def test_the_tides_own_lines(name: str, latitude: float) -> None:
    """A year's spectrum has its line within a tenth of 1 / year of the constituent's frequency."""
    # source: utide 0.4.0, ut_constants.npz, in tide_constituents.csv
    frequency = {row["name"]: float(row["freq_cph"]) for row in rows("tide_constituents.csv")}[name]
    hours = np.arange(0.0, 18.6 * 365.25 * 24, 1.0)[: 3 * 8766]
    tide = longman(MARCH_2024 + 3600 * hours, Place(latitude_deg=latitude, longitude_deg=7.0)).total()
    window = np.hanning(len(hours)) * (tide - tide.mean())
    span = hours[-1]
    tried = frequency + np.linspace(-1.0, 1.0, 81) / span
    power = np.abs(np.exp(-2j * np.pi * np.outer(tried, hours)) @ window)
    assert abs(tried[np.argmax(power)] - frequency) < 0.35 / span


def test_places_and_times_that_are_none() -> None:
    """A latitude beyond the pole, a height out of any laboratory and a time that is none are refused."""
    with pytest.raises(InputError, match="between -90 and 90"):
        Place(latitude_deg=91.0, longitude_deg=0.0)
    with pytest.raises(InputError, match="longitude lies between"):
        Place(latitude_deg=0.0, longitude_deg=400.0)
    with pytest.raises(InputError, match="none of a laboratory"):
        Place(latitude_deg=0.0, longitude_deg=0.0, height_m=1e6)
    with pytest.raises(InputError, match="three centuries"):
        longman(np.array([np.nan]), Place(latitude_deg=0.0, longitude_deg=0.0))
