"""A lattice under gravity: Bloch oscillation, and Landau-Zener loss at every zone edge.

F = m g along the lattice. Bloch frequency nu_B = m g wavelength / (2 h); the period is 2 hbar k / F (Haller et al.,
arXiv 1001.1206). Loss per crossing P = exp(-a_c / a), a_c = (wavelength / 8) (gap / hbar)^2; forms of Peik et al., PRA
55, 2989 (1997), from memory, derived and checked against an integrated crossing in the tests.
"""

import numpy as np

from planner.arrays import FloatArray
from planner.physics.constants import HBAR, PLANCK
from planner.physics.lattice import band_gap
from planner.physics.recoil import recoil_energy, wavenumber


def bloch_frequency(mass_kg: float, wavelength_m: float, acceleration: float) -> float:
    """nu_B = m a wavelength / (2 h), Hz, for lattice light of that wavelength along the acceleration (m/s^2)."""
    return mass_kg * acceleration * wavelength_m / (2 * PLANCK)


def critical_acceleration(gap_j: float, wavelength_m: float) -> float:
    """a_c in m/s^2 for a gap in J.

    The quasimomentum k (zone edge) is crossed at the rate m a / hbar; two free branches there part with the slope
    2 hbar k / m in energy over hbar, so Landau-Zener's exponent is pi gap^2 / (2 hbar 2 hbar k a) = a_c / a with
    a_c = pi gap^2 / (4 hbar^2 k) = (wavelength / 8) (gap / hbar)^2. The mass drops out.
    """
    return wavelength_m / 8 * (gap_j / HBAR) ** 2


def critical_acceleration_shallow(depth: float, mass_kg: float, wavelength_m: float) -> float:
    """a_c for a gap of V_0 / 2: pi s^2 hbar^2 k^3 / (64 m^2), m/s^2."""
    return float(np.pi * depth**2 * HBAR**2 * wavenumber(wavelength_m) ** 3 / (64 * mass_kg**2))


def zone_edge_loss(
    depth: float, mass_kg: float, wavelength_m: float, acceleration: float, *, exact_gap: bool = True
) -> float:
    """Share of the atoms lost at one zone-edge crossing, P = exp(-a_c / a).

    exact_gap: the gap of the band structure; else V_0 / 2, its shallow-lattice form.
    """
    if depth <= 0.0:
        return 1.0
    if exact_gap:
        gap = band_gap(depth) * recoil_energy(mass_kg, wavelength_m)
        critical = critical_acceleration(gap, wavelength_m)
    else:
        critical = critical_acceleration_shallow(depth, mass_kg, wavelength_m)
    return float(np.exp(-critical / abs(acceleration)))


def tunnelling_loss_rate(depth: FloatArray, mass_kg: float, wavelength_m: float, acceleration: float) -> FloatArray:
    """Loss rate by Landau-Zener tunnelling, 1/s: nu_B P for each depth (n,), in E_r.

    Holds while P is small: what is lost never comes back, and crossings are independent.
    """
    frequency = bloch_frequency(mass_kg, wavelength_m, acceleration)
    flat = np.atleast_1d(np.asarray(depth, dtype=np.float64))
    values, where = np.unique(flat, return_inverse=True)
    loss = np.array([zone_edge_loss(float(one), mass_kg, wavelength_m, acceleration) for one in values])
    return np.asarray(-frequency * np.log1p(-np.minimum(loss, 1 - 1e-12)))[where.reshape(-1)]
