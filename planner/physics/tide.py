"""The solid-earth tide: how Moon and Sun change g at a place, as a drift that is known beforehand.

I. M. Longman's formulas (J. Geophys. Res. 64, 2351, 1959) for the vertical tidal acceleration of a rigid Earth, with
his constants, times the gravimetric factor 1 + h - 3k/2 of an Earth that yields. Against the direct attraction of Moon
and Sun from an ephemeris they are right to 10 nm/s^2 RMS and 50 nm/s^2 at worst; the ocean's loading, a few per cent of
the tide near a coast, is not in them. (Formulas from memory; checked against a published implementation's values.)

Sign: positive where g grows (downwards), so the Moon overhead makes it negative.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.errors import InputError

# Longman's constants, in SI. They are of 1959: the error that this makes is inside what is stated above.
GRAVITATION = 6.673e-11  # m^3 kg^-1 s^-2
MOON_KG, SUN_KG = 7.3537e22, 1.993e30
MOON_M, SUN_M = 3.84402e8, 1.495e11  # mean distances
MOON_ECCENTRICITY = 0.05490
MOTION_RATIO = 0.074804  # mean motion of the Sun over that of the Moon
MOON_INCLINATION = 0.08979719  # rad, of the Moon's orbit to the ecliptic
ECLIPTIC = np.deg2rad(23.452)  # rad, of the ecliptic to the equator
EQUATOR_M = 6.378270e6
FLATTENING = 0.006738  # of r^2 with sin^2 of the latitude
GRAVIMETRIC_FACTOR = 1.16  # amplitude of the yielding Earth over the rigid one's; Longman's h, k give 1.1575
EPOCH_S = -2208988800.0 - 43200.0  # 1899-12-31 12:00 UT in seconds since 1970
CENTURY_S = 36525 * 86400.0


@dataclass(frozen=True, kw_only=True)
class Place:
    """Where on Earth: degrees north, degrees east, m above the ellipsoid."""

    latitude_deg: float
    longitude_deg: float
    height_m: float = 0.0

    def __post_init__(self) -> None:
        if not -90 <= self.latitude_deg <= 90:
            raise InputError(f"a latitude lies between -90 and 90 degrees, not at {self.latitude_deg}")
        if not -360 <= self.longitude_deg <= 360:
            raise InputError(f"a longitude lies between -360 and 360 degrees, not at {self.longitude_deg}")
        if not -1e4 <= self.height_m <= 1e5:
            raise InputError(f"a height of {self.height_m} m above the sea is none of a laboratory")


@dataclass(frozen=True, kw_only=True)
class Tide:
    """Change of g by the rigid-Earth attraction of each, m/s^2; arrays of the shape of the times."""

    moon: FloatArray
    sun: FloatArray

    def total(self, factor: float = GRAVIMETRIC_FACTOR) -> FloatArray:
        """Change of g of a yielding Earth, m/s^2."""
        return np.asarray(factor * (self.moon + self.sun))


def longman(time_s: FloatArray, place: Place) -> Tide:
    """The tide at UTC times, as seconds since 1970-01-01 (any shape).

    Raises:
        InputError: a time that is not finite, or further than three centuries from 1900.

    References:
        Longman, J. Geophys. Res. 64, 2351 (1959); equation numbers as there, from memory.
    """
    time_s = np.asarray(time_s, dtype=np.float64)
    t = (time_s - EPOCH_S) / CENTURY_S
    if not (np.isfinite(t).all() and (np.abs(t) <= 3).all()):
        raise InputError("tides are worked out within three centuries of 1900, at finite times")
    # mean longitudes in rad: Moon, its perigee, Sun, the Moon's node, the Sun's perigee (eqs. 10, 11, 12, 19, 26). Some
    # programs have the square term of the perigee with the other sign: 0.1 nm/s^2 apart today
    s = 4.72000889397 + t * (8399.70927456 + t * (3.45575191895e-05 + t * 3.49065850399e-08))
    p = 5.83515162814 + t * (71.0180412089 + t * (-0.000180108282532 - t * 1.74532925199e-07))
    h = 4.88162798259 + t * (628.331950894 + t * 5.23598775598e-06)
    node = 4.52360161181 + t * (-33.757146295 + t * (3.6264063347e-05 + t * 3.39369576777e-08))
    p_sun = 4.90822941839 + t * (0.0300025492114 + t * (7.85398163397e-06 + t * 5.3329504922e-08))
    e_sun = 0.01675104 - t * (4.180e-5 + t * 1.26e-7)
    # the Moon's orbit against the equator (eqs. 14 to 20)
    tilt = np.arccos(
        np.cos(ECLIPTIC) * np.cos(MOON_INCLINATION) - np.sin(ECLIPTIC) * np.sin(MOON_INCLINATION) * np.cos(node)
    )
    nu = np.arcsin(np.sin(MOON_INCLINATION) * np.sin(node) / np.sin(tilt))
    alpha = np.arctan2(
        np.sin(ECLIPTIC) * np.sin(node) / np.sin(tilt),
        np.cos(node) * np.cos(nu) + np.sin(node) * np.sin(nu) * np.cos(ECLIPTIC),
    )
    xi = node - alpha
    hours = np.mod(time_s, 86400.0) / 3600
    angle = np.deg2rad(15 * (hours - 12) + place.longitude_deg)  # of the mean Sun
    # true longitudes from the crossings of the equator (eqs. 9, 25); the rest is the Moon's ellipse and the Sun's pull
    e, m = MOON_ECCENTRICITY, MOTION_RATIO
    moon_at = (
        s
        - xi
        + 2 * e * np.sin(s - p)
        + 1.25 * e**2 * np.sin(2 * (s - p))
        + 3.75 * m * e * np.sin(s - 2 * h + p)
        + 1.375 * m**2 * np.sin(2 * (s - h))
    )
    sun_at = h + 2 * e_sun * np.sin(h - p_sun)
    latitude = np.deg2rad(place.latitude_deg)
    moon_up = _up(latitude, tilt, moon_at, angle + h - nu)
    sun_up = _up(latitude, np.asarray(ECLIPTIC), sun_at, angle + h)
    # inverse distances (eqs. 29, 30)
    a = 1 / (MOON_M * (1 - e**2))
    near = 1 / MOON_M + a * (
        e * np.cos(s - p)
        + e**2 * np.cos(2 * (s - p))
        + 1.875 * m * e * np.cos(s - 2 * h + p)
        + m**2 * np.cos(2 * (s - h))
    )
    near_sun = 1 / SUN_M + e_sun * np.cos(h - p_sun) / (SUN_M * (1 - e_sun**2))
    radius = EQUATOR_M / np.sqrt(1 + FLATTENING * np.sin(latitude) ** 2) + place.height_m
    # vertical pull, upwards (eqs. 1, 3): the Moon is near enough for its second term
    moon = GRAVITATION * MOON_KG * radius * near**3 * (3 * moon_up**2 - 1)
    moon += 1.5 * GRAVITATION * MOON_KG * radius**2 * near**4 * (5 * moon_up**3 - 3 * moon_up)
    sun = GRAVITATION * SUN_KG * radius * near_sun**3 * (3 * sun_up**2 - 1)
    return Tide(moon=np.asarray(-moon), sun=np.asarray(-sun))


def _up(latitude: float, tilt: FloatArray, longitude: FloatArray, meridian: FloatArray) -> FloatArray:
    """Cosine of the zenith angle of a body at `longitude` along an orbit tilted to the equator (eqs. 7, 8)."""
    return np.asarray(
        np.sin(latitude) * np.sin(tilt) * np.sin(longitude)
        + np.cos(latitude)
        * (np.cos(tilt / 2) ** 2 * np.cos(longitude - meridian) + np.sin(tilt / 2) ** 2 * np.cos(longitude + meridian))
    )
