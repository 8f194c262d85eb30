"""Loss of atoms during the hold: rates that add up, and the population that is left. Never the same as lost contrast.

Photon scattering: rate = depth in hertz over the detuning in linewidths, Gamma V_0 / (hbar |Delta|) for a red or blue
far-detuned line of natural width Gamma; a red-detuned lattice holds atoms at its bright places, so the full depth
counts (Grimm, Weidemueller & Ovchinnikov, Adv. At. Mol. Opt. Phys. 42, 95 (2000), eqs 10-11, from memory). Parametric
heating: energy grows at the rate pi^2 nu^2 S(2 nu), S the one-sided relative intensity noise (Savard, O'Hara & Thomas,
PRA 56, R1095 (1997), from memory).
"""

from math import pi

import numpy as np

from planner.arrays import FloatArray
from planner.physics.constants import HBAR, LIGHT_SPEED


def population(hold_s: FloatArray, atoms: FloatArray | float, rate: FloatArray | float) -> FloatArray:
    """Atoms left after the hold, atoms exp(-rate T); rate in 1/s is the sum of all loss rates."""
    return np.asarray(atoms * np.exp(-np.asarray(rate) * np.asarray(hold_s, dtype=np.float64)))


def scattering_rate(depth_j: float, lattice_m: float, line_m: float, linewidth_hz: float) -> float:
    """Photons scattered per atom and second at the bottom of a red-detuned lattice site's bright place.

    depth_j: V_0; lattice_m, line_m: wavelengths; linewidth_hz: natural width. Gamma V_0 / (hbar |Delta|), the
    rotating-wave form: good while the detuning is small against the line's frequency.
    """
    detuning = abs(2 * pi * LIGHT_SPEED * (1 / lattice_m - 1 / line_m))
    return 2 * pi * linewidth_hz * depth_j / (HBAR * detuning)


def parametric_heating_rate(site_hz: float, intensity_noise: float) -> float:
    """Rate of energy growth in 1/s: pi^2 nu^2 S(2 nu), nu the site frequency in Hz, S in 1/Hz at twice nu."""
    return pi**2 * site_hz**2 * intensity_noise


def fraction_lost(rate: float, seconds: float) -> float:
    """Share of atoms gone after a time: 1 - exp(-rate t)."""
    return float(-np.expm1(-rate * seconds))
