"""Constants of nature: CODATA 2022 (exact where the SI makes them so), and the standard acceleration of gravity.

Source: CODATA 2022 as carried by scipy.constants 1.17 (read); a test compares. They are written out here so that the
dispatcher's path need not load scipy.
"""

from math import pi

PLANCK = 6.62607015e-34  # J s, exact
HBAR = PLANCK / (2 * pi)  # J s
BOLTZMANN = 1.380649e-23  # J/K, exact
LIGHT_SPEED = 299792458.0  # m/s, exact
ATOMIC_MASS = 1.66053906892e-27  # kg, relative standard uncertainty 3.1e-10
STANDARD_GRAVITY = 9.80665  # m/s^2, exact by definition (3rd CGPM, 1901)
