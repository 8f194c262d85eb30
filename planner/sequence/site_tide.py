"""The tide at a rig's site, along the axis of its lattice."""

import numpy as np

from planner.arrays import FloatArray
from planner.errors import InputError
from planner.physics.tide import Place, longman
from planner.sequence.model import Rig


def tide_along(rig: Rig, time_s: FloatArray) -> FloatArray:
    """Change of g along the lattice axis, m/s^2, positive where g grows, at UTC times in s since 1970 (any shape).

    Raises:
        InputError: the rig file does not say where its site is.
    """
    if rig.latitude_deg is None or rig.longitude_deg is None:
        raise InputError(
            "the rig file does not say where the rig stands: give [site] a latitude and a longitude, such as "
            'latitude = "50.9 deg"'
        )
    place = Place(latitude_deg=rig.latitude_deg, longitude_deg=rig.longitude_deg, height_m=rig.height_m)
    return np.asarray(longman(time_s, place).total() * np.cos(np.deg2rad(rig.axis_to_vertical_deg)))
