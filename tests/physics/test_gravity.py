"""Normal gravity against the values published with the ellipsoid."""

import numpy as np
import pytest

from planner.physics.constants import STANDARD_GRAVITY
from planner.physics.gravity import EQUATOR, normal_gravity, site_gravity


def test_published_values() -> None:
    """Equator, pole and the mean over the ellipsoid as in the ellipsoid's own tables."""
    # source: NIMA TR8350.2 (2000), table 3.4: 9.7803253359, 9.8321849378, mean 9.7976432222 m/s^2 (from memory)
    assert float(normal_gravity(0.0)) == EQUATOR
    assert float(normal_gravity(90.0)) == pytest.approx(9.8321849378, abs=2e-10)
    latitude = np.deg2rad(np.linspace(-90, 90, 20_001))
    e2 = 0.00669437999014
    # area of a zone of an ellipsoid by geodetic latitude
    area = np.cos(latitude) / (1 - e2 * np.sin(latitude) ** 2) ** 2
    mean = np.trapezoid(normal_gravity(np.rad2deg(latitude)) * area, latitude) / np.trapezoid(area, latitude)
    assert mean == pytest.approx(9.7976432222, abs=1e-8)


def test_the_gradient_with_height() -> None:
    """Free air: 0.3086 mGal a metre at 45 degrees, to the digits of the trade's value."""
    # source: 0.3086 mGal/m, common practice in gravimetry, no source
    step = float(normal_gravity(45.0, 0.0) - normal_gravity(45.0, 1.0))
    assert step == pytest.approx(0.3086e-5, abs=0.0001e-5)


def test_a_site_and_none() -> None:
    """Without a site it is the standard acceleration; a site differs from it by what latitude and height do."""
    assert site_gravity(None) == STANDARD_GRAVITY
    assert site_gravity(45.0) == pytest.approx(STANDARD_GRAVITY, abs=1e-3)
    assert site_gravity(52.0, 50.0) > site_gravity(30.0, 50.0)
