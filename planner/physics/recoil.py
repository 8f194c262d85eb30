"""What one photon does to an atom, and the units that follow: recoil energy, frequency, velocity, temperature.

With k = 2 pi / wavelength: velocity hbar k / m, energy E_r = (hbar k)^2 / (2 m) = h f_r, frequency f_r = h / (2 m
wavelength^2), temperature 2 E_r / k_B. Source: textbook kinematics; forms as in D. A. Steck's alkali data sheets.
"""

from math import pi

from planner.physics.constants import BOLTZMANN, HBAR, PLANCK


def wavenumber(wavelength_m: float) -> float:
    """k = 2 pi / wavelength, rad/m."""
    return 2 * pi / wavelength_m


def recoil_velocity(mass_kg: float, wavelength_m: float) -> float:
    """v_r = h / (m wavelength), m/s."""
    return PLANCK / (mass_kg * wavelength_m)


def recoil_frequency(mass_kg: float, wavelength_m: float) -> float:
    """f_r = h / (2 m wavelength^2), Hz."""
    return PLANCK / (2 * mass_kg * wavelength_m**2)


def recoil_energy(mass_kg: float, wavelength_m: float) -> float:
    """E_r = h f_r, J. The unit of lattice depth, for light of the lattice's wavelength."""
    return PLANCK * recoil_frequency(mass_kg, wavelength_m)


def recoil_temperature(mass_kg: float, wavelength_m: float) -> float:
    """T_r = 2 E_r / k_B, K."""
    return 2 * recoil_energy(mass_kg, wavelength_m) / BOLTZMANN


def depth_in_recoils(depth_j: float, mass_kg: float, wavelength_m: float) -> float:
    """Lattice depth V_0 of V_0 sin^2(k x), in recoil energies."""
    return depth_j / recoil_energy(mass_kg, wavelength_m)


def quantum_of_h_over_m(mass_kg: float) -> float:
    """h / m, m^2/s."""
    return PLANCK / mass_kg


def doppler_shift(velocity_m_s: float, wavelength_m: float) -> float:
    """First-order Doppler shift k v / (2 pi), Hz."""
    return velocity_m_s / wavelength_m


def momentum(wavelength_m: float, photons: float = 1.0) -> float:
    """photons hbar k, kg m/s."""
    return photons * HBAR * wavenumber(wavelength_m)
