"""What a held-atom interferometer measures: phase per acceleration is the separation summed over the shot.

Two arms at heights z_1(t), z_2(t) in a uniform field a gather the phase phi = (m / hbar) a int dz(t) dt, dz the
separation. With the arms moving apart for t_s at a relative velocity v, held a distance dz = v t_s apart for T and
brought together in t_s again, int dz dt = dz (T + t_s): a trapezoid. Source: propagation phase of two classical paths,
e.g. Storey & Cohen-Tannoudji, J. Phys. II France 4, 1999 (1994), from memory.
"""

import numpy as np

from planner.arrays import FloatArray
from planner.physics.constants import HBAR, STANDARD_GRAVITY
from planner.physics.recoil import recoil_velocity


def separation(photons: float, mass_kg: float, wavelength_m: float, split_s: FloatArray | float) -> FloatArray:
    """Separation after a momentum difference of `photons` hbar k for split_s seconds: photons v_r split_s, m."""
    return np.asarray(photons * recoil_velocity(mass_kg, wavelength_m) * np.asarray(split_s, dtype=np.float64))


def scale_factor(
    mass_kg: float, separation_m: FloatArray | float, hold_s: FloatArray | float, split_s: FloatArray | float = 0.0
) -> FloatArray:
    """Phase per acceleration, rad per m/s^2: (m / hbar) dz (T + t_s), for a trapezoid of separation."""
    held = np.asarray(hold_s, dtype=np.float64) + np.asarray(split_s, dtype=np.float64)
    return np.asarray(mass_kg / HBAR * np.asarray(separation_m, dtype=np.float64) * held)


def scale_factor_sampled(mass_kg: float, time_s: FloatArray, separation_m: FloatArray) -> FloatArray:
    """(m / hbar) int dz dt, rad per m/s^2, by the trapezoidal rule: separation (..., n) in m at times (n,) in s."""
    return np.asarray(mass_kg / HBAR * np.trapezoid(separation_m, time_s, axis=-1))


def hold_phase_rate(mass_kg: float, separation_m: float, acceleration: float = STANDARD_GRAVITY) -> float:
    """How fast the phase runs during the hold: m a dz / hbar, rad/s. Tens of thousands of radians in a lab."""
    return mass_kg * acceleration * separation_m / HBAR


def fraction(phase_rad: FloatArray, contrast: FloatArray | float, offset: FloatArray | float = 0.5) -> FloatArray:
    """Population fraction y = offset + (contrast / 2) cos(phase)."""
    return np.asarray(np.asarray(offset) + 0.5 * np.asarray(contrast) * np.cos(phase_rad))
