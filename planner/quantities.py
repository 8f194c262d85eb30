"""Units at the edges: text such as "25 s" or "2 Er/us" to SI floats and back. Inside the program there are only floats.

Raw text never reaches a unit library: a number must match `NUMBER`, and a unit must be built from the names below
with small whole exponents. Common units are in our own table (a test compares every one with pint). pint costs a
third of a second to load, so it is asked only for the few rarer names, once each.

Angles and the recoil energy "Er" have dimensions of their own here, so that a phase cannot be taken for a plain
number, nor a lattice depth for an energy. Base of the Er dimension: one recoil energy.
"""

import difflib
import re
from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from math import isfinite, pi
from typing import TYPE_CHECKING, overload

from planner.errors import QuantityError

if TYPE_CHECKING:
    from planner.arrays import FloatArray

Dimension = tuple[int, ...]
BASES = ("m", "kg", "s", "A", "K", "rad", "Er")
PLAIN: Dimension = (0,) * len(BASES)
LONGEST_UNIT = 32  # characters
LONGEST_NUMBER = 40
LARGEST_EXPONENT = 4
NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?(?![\w.])|[+-]?(?:\d+(?:\.\d*)?|\.\d+)")
FACTOR = re.compile(r"(1|%|[A-Za-zµμ]+)(?:\^(-?\d{1,2}))?$")


@dataclass(frozen=True)
class Unit:
    """A resolved unit: SI value = number * multiply / divide. Two numbers keep "5 us" the float nearest 5e-6."""

    multiply: float
    divide: float
    dimension: Dimension

    @property
    def factor(self) -> float:
        return self.multiply / self.divide


def _dimension(**powers: int) -> Dimension:
    return tuple(powers.get(base, 0) for base in BASES)


# symbol -> (multiply, divide, dimension, takes SI prefixes)
_NAMED: dict[str, tuple[float, float, Dimension, bool]] = {
    "1": (1, 1, PLAIN, False),
    "%": (1, 100, PLAIN, False),
    "ppm": (1, 1e6, PLAIN, False),
    "m": (1, 1, _dimension(m=1), True),
    "g": (1, 1000, _dimension(kg=1), True),
    "s": (1, 1, _dimension(s=1), True),
    "min": (60, 1, _dimension(s=1), False),
    "h": (3600, 1, _dimension(s=1), False),
    "d": (86400, 1, _dimension(s=1), False),
    "Hz": (1, 1, _dimension(s=-1), True),
    "A": (1, 1, _dimension(A=1), True),
    "C": (1, 1, _dimension(A=1, s=1), True),
    "K": (1, 1, _dimension(K=1), True),
    "V": (1, 1, _dimension(kg=1, m=2, s=-3, A=-1), True),
    "W": (1, 1, _dimension(kg=1, m=2, s=-3), True),
    "J": (1, 1, _dimension(kg=1, m=2, s=-2), True),
    "N": (1, 1, _dimension(kg=1, m=1, s=-2), True),
    "Pa": (1, 1, _dimension(kg=1, m=-1, s=-2), True),
    "T": (1, 1, _dimension(kg=1, s=-2, A=-1), True),
    "G": (1, 1e4, _dimension(kg=1, s=-2, A=-1), True),
    "ohm": (1, 1, _dimension(kg=1, m=2, s=-3, A=-2), True),
    "rad": (1, 1, _dimension(rad=1), True),
    "deg": (pi, 180, _dimension(rad=1), False),
    "turn": (2 * pi, 1, _dimension(rad=1), False),
    "Er": (1, 1, _dimension(Er=1), False),
}
_PREFIXES: dict[str, tuple[float, float]] = {
    "f": (1, 1e15),
    "p": (1, 1e12),
    "n": (1, 1e9),
    "u": (1, 1e6),
    "m": (1, 1e3),
    "c": (1, 1e2),
    "k": (1e3, 1),
    "M": (1e6, 1),
    "G": (1e9, 1),
}
# names that only pint resolves; each is a name that pint knows
RARE = ("bar", "mbar", "torr", "psi", "atm", "inch", "foot", "eV", "meV", "amu", "week", "arcmin", "arcsec")


def _table() -> dict[str, Unit]:
    table = {name: Unit(multiply, divide, dim) for name, (multiply, divide, dim, _) in _NAMED.items()}
    for name, (multiply, divide, dim, prefixed) in _NAMED.items():
        if prefixed:
            for prefix, (up, down) in _PREFIXES.items():
                table.setdefault(prefix + name, Unit(*_reduced(multiply * up, divide * down), dim))
    return table


def _reduced(multiply: float, divide: float) -> tuple[float, float]:
    """The same ratio with one side 1 where it divides evenly: kg is (1, 1), not (1000, 1000)."""
    if multiply >= divide and multiply % divide == 0:
        return multiply / divide, 1
    if divide % multiply == 0:
        return 1, divide / multiply
    return multiply, divide


UNITS = _table()


@lru_cache(maxsize=64)
def _from_pint(name: str) -> Unit:
    """A rare unit, by pint. Only names of `RARE` come here."""
    import pint

    registry: pint.UnitRegistry[float] = pint.UnitRegistry()
    quantity = registry.Quantity(1.0, name).to_base_units()
    powers = dict(quantity.unit_items())
    short = {"meter": "m", "kilogram": "kg", "second": "s", "ampere": "A", "kelvin": "K", "radian": "rad"}
    return Unit(
        float(quantity.magnitude), 1, _dimension(**{short[unit]: int(power.real) for unit, power in powers.items()})
    )


def nearest(word: str, names: Iterable[str]) -> str:
    """The closest of `names` to a mistyped `word`, or an empty string where nothing is close."""
    pool = list(names)
    lowered = {name.lower(): name for name in reversed(pool)}
    if word.lower() in lowered:
        return lowered[word.lower()]
    found = difflib.get_close_matches(word[:80], pool, n=1, cutoff=0.6)
    return found[0] if found else ""


_USUAL = {  # what people write for these units
    "sec": "s", "secs": "s", "second": "s", "seconds": "s", "mins": "min", "minute": "min", "minutes": "min", "hr": "h",
    "hrs": "h", "hour": "h", "hours": "h", "day": "d", "days": "d", "msec": "ms", "usec": "us", "micron": "um",
    "degree": "deg", "degrees": "deg", "radian": "rad", "radians": "rad", "percent": "%", "erec": "Er", "E_r": "Er",
    "Erec": "Er", "recoil": "Er", "recoils": "Er", "turns": "turn", "cycle": "turn", "rev": "turn", "volt": "V",
    "degC": "K", "celsius": "K", "Gauss": "G", "gauss": "G", "hz": "Hz", "khz": "kHz", "mhz": "MHz", "amp": "A",
    "watt": "W",
}  # fmt: skip


def _one(name: str) -> Unit:
    plain = name.replace("µ", "u").replace("μ", "u")
    unit = UNITS.get(plain)
    if unit is not None:
        return unit
    if plain in RARE:
        return _from_pint(plain)
    close = _USUAL.get(plain) or nearest(plain, [*UNITS, *RARE])
    raise QuantityError(f'unknown unit "{name}"' + (f'; did you mean "{close}"?' if close else ""))


@lru_cache(maxsize=1024)
def unit(text: str) -> Unit:
    """Resolve a unit such as "s", "m/s^2", "1/s", "s Er um" or "" (a plain number).

    Factors are separated by a space or "*"; whatever follows a "/" divides, one factor each.

    Raises:
        QuantityError: unknown name (with the nearest valid one), too long, or an exponent beyond 4.
    """
    if len(text) > LONGEST_UNIT:
        raise QuantityError(f"a unit has at most {LONGEST_UNIT} characters; found {len(text)}")
    if not text.strip():
        return UNITS["1"]
    numerator, *below = text.split("/")
    factors = [(part, 1) for part in re.split(r"[ *]+", numerator.strip())]
    factors += [(part.strip(), -1) for part in below]
    multiply, divide, dimension = 1.0, 1.0, PLAIN
    for part, sign in factors:
        match = FACTOR.fullmatch(part)
        if match is None:
            raise QuantityError(f'cannot read "{text}" as a unit; write for example "s", "um", "m/s^2", "1/s", "Er"')
        power = sign * int(match.group(2) or 1)
        if abs(power) > LARGEST_EXPONENT:
            raise QuantityError(f'exponent {power} in unit "{text}"; at most {LARGEST_EXPONENT} is allowed')
        one = _one(match.group(1))
        up, down = (one.multiply, one.divide) if power >= 0 else (one.divide, one.multiply)
        multiply, divide = multiply * up ** abs(power), divide * down ** abs(power)
        dimension = tuple(have + power * add for have, add in zip(dimension, one.dimension, strict=True))
    return Unit(*_reduced(multiply, divide), dimension)


def describe(dimension: Dimension) -> str:
    """A dimension in words of its base units: "m s^-2"; "a plain number" without any."""
    named = [base if power == 1 else f"{base}^{power}" for base, power in zip(BASES, dimension, strict=True) if power]
    return " ".join(named) or "a plain number"


def split_quantity(text: str) -> tuple[float, str]:
    """Number and unit text of a quantity: "25 s" -> (25.0, "s").

    Raises:
        QuantityError: no number at the start, a comma, not finite, or something between number and unit.
    """
    stripped = text.strip()
    match = NUMBER.match(stripped)
    if match is None:
        if re.match(r"[+-]?(nan|inf)", stripped, re.IGNORECASE):
            raise QuantityError(f'"{text[:40]}" is not a number that can be used; a finite number is expected')
        raise QuantityError(f'expected a number with a unit, such as "25 s"; found "{text[:40]}"')
    number, rest = match.group(), stripped[match.end() :]
    if len(number) > LONGEST_NUMBER:
        raise QuantityError(f"a number has at most {LONGEST_NUMBER} characters; found {len(number)}")
    if re.match(r"\s*,\s*\d", rest):
        raise QuantityError(f'write the decimal point as "." and no thousands separator; found "{text[:40]}"')
    if rest.lstrip().startswith("*") or re.match(r"[\d.](?!/)", rest.lstrip()):
        raise QuantityError(f'expected one number and one unit, such as "25 s"; found "{text[:40]}"')
    value = float(number)
    if not isfinite(value):
        raise QuantityError(f'"{number}" is too large for a number')
    return value, rest.strip()


def parse_quantity(text: str, unit_text: str) -> float:
    """A quantity of the same dimension as `unit_text`, in SI.

    Raises:
        QuantityError: as `split_quantity` and `unit`, or another dimension than that of `unit_text`.
    """
    value, found = split_quantity(text)
    have, want = unit(found), unit(unit_text)
    if have.dimension != want.dimension:
        wanted = f'a unit such as "{unit_text}"' if unit_text.strip() not in ("", "1") else "a plain number or %"
        given = f'"{found}"' if found else "no unit"
        raise QuantityError(f'expected {wanted}; found {given} in "{text[:40]}"')
    return value * have.multiply / have.divide


@overload
def to_unit(value_si: float, unit_text: str) -> float: ...
@overload
def to_unit(value_si: "FloatArray", unit_text: str) -> "FloatArray": ...
def to_unit(value_si: "float | FloatArray", unit_text: str) -> "float | FloatArray":
    """A value in SI, given in `unit_text`. Works on floats and arrays."""
    one = unit(unit_text)
    return value_si * one.divide / one.multiply


@overload
def from_unit(value: float, unit_text: str) -> float: ...
@overload
def from_unit(value: "FloatArray", unit_text: str) -> "FloatArray": ...
def from_unit(value: "float | FloatArray", unit_text: str) -> "float | FloatArray":
    """A value in `unit_text`, given in SI. Works on floats and arrays."""
    one = unit(unit_text)
    return value * one.multiply / one.divide


def format_quantity(value_si: float, unit_text: str, digits: int = 6) -> str:
    """A value with its unit, for people: "25 s"; a plain number has no unit."""
    number = f"{to_unit(value_si, unit_text):.{digits}g}"
    return number if unit_text.strip() in ("", "1") else f"{number} {unit_text}"
