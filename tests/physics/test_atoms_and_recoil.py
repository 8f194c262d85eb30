"""Masses, constants and recoils against published values; the source stands beside each."""

import csv
from pathlib import Path

import pytest
from scipy import constants as codata

from planner.errors import InputError
from planner.physics import constants
from planner.physics.atoms import ATOMS, atom
from planner.physics.recoil import (
    depth_in_recoils,
    quantum_of_h_over_m,
    recoil_energy,
    recoil_frequency,
    recoil_temperature,
    recoil_velocity,
)
from planner.sequence.atom_names import ATOMS as NAMES

DATA = Path(__file__).parent.parent / "outside" / "data"


def test_constants_are_codata() -> None:
    """The constants written out are those of scipy."""
    # source: CODATA 2022, scipy.constants 1.17 (read)
    assert codata.h == constants.PLANCK
    assert codata.k == constants.BOLTZMANN
    assert codata.c == constants.LIGHT_SPEED
    assert pytest.approx(codata.atomic_mass, rel=1e-9) == constants.ATOMIC_MASS
    assert codata.g == constants.STANDARD_GRAVITY
    assert pytest.approx(codata.hbar, rel=1e-15) == constants.HBAR


def test_masses_are_the_table_s() -> None:
    """Every isotope of the reference table, in u and as h/m."""
    # source: AME2020, Wang et al., Chin. Phys. C 45, 030003 (2021) in periodictable 2.1.0 (read); h/m computed
    lines = [line for line in (DATA / "atoms.csv").read_text(encoding="utf-8").splitlines() if line[0] != "#"]
    seen = 0
    for row in csv.DictReader(lines):
        name = row["isotope"][:2] + "-" + row["isotope"][2:]
        if name in ATOMS:
            seen += 1
            assert atom(name).mass_u == pytest.approx(float(row["mass_u"]), rel=1e-9)
            assert quantum_of_h_over_m(atom(name).mass_kg) == pytest.approx(float(row["h_over_m_m2_s"]), rel=1e-9)
    assert seen >= 7


def test_the_language_knows_the_same_atoms() -> None:
    """What a sequence may name is what the physics knows."""
    assert NAMES == ATOMS


@pytest.mark.parametrize(
    ("name", "line", "frequency", "velocity", "temperature"),
    [("Rb-87", "D2", 3770.974, 5.884538e-3, 361.956e-9), ("Cs-133", "D2", 2066.336, 3.522472e-3, 198.337e-9)],
)
def test_recoils_on_the_d2_lines(name: str, line: str, frequency: float, velocity: float, temperature: float) -> None:
    """Recoil frequency (Hz), velocity (m/s) and temperature (K)."""
    # source: D. A. Steck, Rubidium 87 and Cesium D Line Data, print 3.7710 kHz, 5.8845 mm/s, 361.96 nK and 2.0663 kHz,
    # 3.5225 mm/s (from memory); the further digits computed from h, m and the wavelength
    mass, wavelength = atom(name).mass_kg, atom(name).lines[line].wavelength_m
    assert recoil_frequency(mass, wavelength) == pytest.approx(frequency, rel=2e-6)
    assert recoil_velocity(mass, wavelength) == pytest.approx(velocity, rel=2e-6)
    assert recoil_temperature(mass, wavelength) == pytest.approx(temperature, rel=3e-6)  # six digits


@pytest.mark.parametrize(
    ("name", "wavelength", "frequency", "rel"),
    [
        ("Sr-88", 689.448897e-9, 4774.811, 1e-6),
        ("Sr-88", 532e-9, 8019.311, 1e-6),
        ("Sr-88", 813.428e-9, 3430.221, 1e-6),
        ("Yb-171", 555.802e-9, 3778.35, 1e-5),
        ("Yb-171", 398.911e-9, 7334.84, 1e-5),
        ("Yb-174", 555.802e-9, 3713.13, 1e-5),
    ],
)
def test_recoils_in_lattices(name: str, wavelength: float, frequency: float, rel: float) -> None:
    """Recoil frequencies for lattice and line wavelengths."""
    # source: computed from AME2020 masses and CODATA h
    assert recoil_frequency(atom(name).mass_kg, wavelength) == pytest.approx(frequency, rel=rel)


def test_h_over_m_of_rubidium_by_two_routes() -> None:
    """h/m directly, and by the fine-structure constant: c alpha^2 A_r(e) / (2 R_inf A_r)."""
    # source: CODATA 2022 (scipy.constants); value 4.5913592608e-9 m^2/s computed
    direct = quantum_of_h_over_m(atom("Rb-87").mass_kg)
    electron = codata.physical_constants["electron relative atomic mass"][0]
    other = codata.c * codata.alpha**2 * electron / (2 * codata.Rydberg * atom("Rb-87").mass_u)
    assert direct == pytest.approx(4.5913592608e-9, rel=1e-9)
    assert direct == pytest.approx(other, rel=1e-9)


def test_h_over_m_agrees_with_an_interferometer() -> None:
    """Within half a standard uncertainty of a measured fine-structure constant."""
    # source: Cadoret et al., PRL 101, 230801 (2008): 1/alpha = 137.03599945(62) (abstract read); h/m computed
    measured, relative = 4.5913592425e-9, 9.2e-9
    assert abs(quantum_of_h_over_m(atom("Rb-87").mass_kg) / measured - 1) < 0.5 * relative


def test_depth_in_recoils_undoes_the_recoil_energy() -> None:
    """Nine recoils are nine."""
    mass = atom("Rb-87").mass_kg
    assert depth_in_recoils(9 * recoil_energy(mass, 866e-9), mass, 866e-9) == pytest.approx(9.0, rel=1e-14)


def test_an_unknown_atom_is_named_with_those_there_are() -> None:
    """The message lists the atoms."""
    with pytest.raises(InputError, match="Rb-85, Rb-87"):
        atom("Rb-88")
