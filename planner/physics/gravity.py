"""The acceleration of gravity where a laboratory stands: normal gravity of the WGS84 ellipsoid.

Good to a few parts in 10^5 (rock and hills under and around the place are not in it): plenty to turn a tick of time
into phase, nothing to compare a measurement with.
"""

import numpy as np

from planner.arrays import FloatArray
from planner.physics.constants import STANDARD_GRAVITY

# WGS84 defining and derived constants. Source: NIMA TR8350.2, third edition (2000), tables 3.1 to 3.4 (from memory; the
# check values beside them in a test)
SEMI_MAJOR_M = 6378137.0
FLATTENING = 1 / 298.257223563
EQUATOR = 9.7803253359  # m/s^2
SOMIGLIANA = 0.00193185265241  # k
ECCENTRICITY_2 = 0.00669437999014
CENTRIFUGAL = 0.00344978650684  # m = omega^2 a^2 b / GM


def normal_gravity(latitude_deg: FloatArray | float, height_m: FloatArray | float = 0.0) -> FloatArray:
    """Normal gravity at a latitude and a height above the ellipsoid, m/s^2, arguments broadcast.

    References:
        Somigliana's closed formula, and the second-order change with height: NIMA TR8350.2, eqs. 4-1 and 4-3 (from
        memory). At 10 km the second order is right to 1e-7 m/s^2.
    """
    sin2 = np.sin(np.deg2rad(np.asarray(latitude_deg, dtype=np.float64))) ** 2
    height = np.asarray(height_m, dtype=np.float64) / SEMI_MAJOR_M
    surface = EQUATOR * (1 + SOMIGLIANA * sin2) / np.sqrt(1 - ECCENTRICITY_2 * sin2)
    return np.asarray(
        surface * (1 - 2 * height * (1 + FLATTENING + CENTRIFUGAL - 2 * FLATTENING * sin2) + 3 * height**2)
    )


def site_gravity(latitude_deg: float | None, height_m: float = 0.0) -> float:
    """Normal gravity at a site, m/s^2; the standard acceleration where the site is not known."""
    return STANDARD_GRAVITY if latitude_deg is None else float(normal_gravity(latitude_deg, height_m))
