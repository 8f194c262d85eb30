"""The atoms that people hold in lattices: masses, and the lines that cool, split and hold them.

Masses: AME2020, Wang et al., Chin. Phys. C 45, 030003 (2021), as carried by periodictable 2.1.0 (read).
Lines: see each entry; "coarse" ones are good to 1e-4 and meant for recoils, not for spectroscopy.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field

from planner.errors import InputError
from planner.physics.constants import ATOMIC_MASS


@dataclass(frozen=True, kw_only=True)
class Line:
    """A line: vacuum wavelength in m, natural linewidth in Hz (full width), and where the numbers are from."""

    wavelength_m: float
    linewidth_hz: float
    source: str


@dataclass(frozen=True, kw_only=True)
class Atom:
    """An isotope. mass_kg = mass_u times the atomic mass constant."""

    name: str
    mass_u: float
    lines: Mapping[str, Line] = field(default_factory=dict)

    @property
    def mass_kg(self) -> float:
        """Mass in kg."""
        return self.mass_u * ATOMIC_MASS


_RB_D2 = Line(
    wavelength_m=780.241209686e-9,
    linewidth_hz=6.0666e6,
    source="D. A. Steck, Rubidium 87 D Line Data: 384.2304844685 THz (digits read second hand); width from memory",
)
_CS_D2 = Line(
    wavelength_m=852.34727582e-9,
    linewidth_hz=5.234e6,
    source="D. A. Steck, Cesium D Line Data: frequency 351.72571850 THz (digits read second hand); width from memory",
)
_SR_689 = Line(
    wavelength_m=689.448897e-9,
    linewidth_hz=7.5e3,
    source="Ferrari et al., PRL 91, 243002 (2003): 434 829 121 311(10) kHz for 88Sr (abstract read); width from memory",
)
_SR_461 = Line(wavelength_m=460.86e-9, linewidth_hz=30.5e6, source="coarse, from memory")
_YB_399 = Line(wavelength_m=398.911e-9, linewidth_hz=29.1e6, source="coarse, from memory")
_YB_556 = Line(wavelength_m=555.802e-9, linewidth_hz=182e3, source="coarse, from memory")
_K_D2 = Line(
    wavelength_m=766.70e-9, linewidth_hz=6.035e6, source="coarse, from memory (T. G. Tiecke, Properties of Potassium)"
)

_ATOMS = {
    atom.name: atom
    for atom in (
        Atom(name="Rb-85", mass_u=84.911789736, lines={"D2": _RB_D2}),
        Atom(name="Rb-87", mass_u=86.909180529, lines={"D2": _RB_D2}),
        Atom(name="Cs-133", mass_u=132.905451959, lines={"D2": _CS_D2}),
        Atom(name="Sr-87", mass_u=86.908877495, lines={"689": _SR_689, "461": _SR_461}),
        Atom(name="Sr-88", mass_u=87.905612254, lines={"689": _SR_689, "461": _SR_461}),
        Atom(name="Yb-171", mass_u=170.936331515, lines={"556": _YB_556, "399": _YB_399}),
        Atom(name="Yb-174", mass_u=173.938867546, lines={"556": _YB_556, "399": _YB_399}),
        Atom(name="K-39", mass_u=38.963706485, lines={"D2": _K_D2}),
        Atom(name="K-40", mass_u=39.963998165, lines={"D2": _K_D2}),
        Atom(name="K-41", mass_u=40.961825256, lines={"D2": _K_D2}),
    )
}
ATOMS: tuple[str, ...] = tuple(_ATOMS)


def atom(name: str) -> Atom:
    """The isotope of that name, such as "Rb-87".

    Raises:
        InputError: an isotope that is not in the table; the message lists those that are.
    """
    found = _ATOMS.get(name)
    if found is None:
        raise InputError(f'no atom "{name}"; there are: {", ".join(ATOMS)}')
    return found
