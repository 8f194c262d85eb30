"""Units at the edges, checked against pint, a library of its own."""

import math

import pint
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner import quantities
from planner.errors import QuantityError
from planner.quantities import RARE, UNITS, format_quantity, from_unit, parse_quantity, split_quantity, to_unit, unit

# source: pint 0.25's own unit definitions (SI brochure and CODATA), read by the library itself in this test
PINT: pint.UnitRegistry[float] = pint.UnitRegistry()
SHORT = {"meter": "m", "kilogram": "kg", "second": "s", "ampere": "A", "kelvin": "K", "radian": "rad"}
# spelt out, so that no short name means something else to pint
SPELT = {"%": "percent", "h": "hour", "d": "day", "min": "minute", "1": "dimensionless"}


PREFIXES = {"f": 1e-15, "p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "c": 1e-2, "k": 1e3, "M": 1e6, "G": 1e9}


def by_pint(name: str) -> tuple[float, dict[str, float]]:
    if name.endswith("G"):
        # pint's gauss is a unit of another system of dimensions; its "Gaussian" context turns it into tesla
        tesla = PINT.Quantity(PREFIXES.get(name[:-1], 1.0), "gauss").to("tesla", "Gaussian")
        return float(tesla.magnitude), by_pint("T")[1]
    quantity = PINT.Quantity(1.0, SPELT.get(name, name)).to_base_units()
    return float(quantity.magnitude), {SHORT[part]: power for part, power in quantity.unit_items()}


@pytest.mark.parametrize("name", [name for name in UNITS if name != "Er" and not name.endswith("Er")])
def test_every_unit_of_the_table_is_that_of_pint(name: str) -> None:
    """Our table and pint agree on factor and dimension of every unit that both know."""
    factor, powers = by_pint(name)
    ours = unit(name)
    # both are products of a few decimal powers: 1e-12 leaves room for their rounding and for nothing else. Only the
    # gauss goes through pint's measured magnetic constant, which is 6.6e-11 away from 4 pi 1e-7.
    assert math.isclose(ours.factor, factor, rel_tol=1e-9 if name.endswith("G") else 1e-12)
    assert {base: power for base, power in zip(quantities.BASES, ours.dimension, strict=True) if power} == powers


@pytest.mark.parametrize("name", RARE)
def test_rare_units_come_from_pint(name: str) -> None:
    """Every rarer name that we allow is one that pint resolves, and resolving it twice asks once."""
    quantities._from_pint.cache_clear()
    assert unit(name).factor > 0
    unit.cache_clear()
    assert unit(name).factor == by_pint(name)[0]
    assert quantities._from_pint.cache_info().misses == 1


@pytest.mark.parametrize(
    ("text", "unit_text", "si"),
    [
        ("25 s", "s", 25.0),
        ("25s", "min", 25.0),
        ("8 min", "s", 480.0),
        ("2 h", "s", 7200.0),
        ("1 d", "s", 86400.0),
        ("5 us", "s", 5e-6),
        ("5 µs", "s", 5e-6),
        ("40 uK", "K", 4e-5),
        ("384.2 MHz", "1/s", 384.2e6),
        ("90 deg", "rad", math.pi / 2),
        ("0.25 turn", "rad", math.pi / 2),
        ("9 Er", "Er", 9.0),
        ("5 %", "", 0.05),
        ("3 1/s", "Hz", 3.0),
        ("20 nm/s^2", "m/s^2", 2e-8),
        ("5 Er/ms", "Er/s", 5000.0),
        ("18 s Er um", "s Er m", 1.8e-5),
        ("-1.5e3 mT", "T", -1.5),
        (".5 s", "s", 0.5),
        ("1 bar", "Pa", 1e5),
    ],
)
def test_quantities_read_as_people_write_them(text: str, unit_text: str, si: float) -> None:
    """Each form becomes the SI number that a person would work out (source: definitions of the SI prefixes)."""
    assert math.isclose(parse_quantity(text, unit_text), si, rel_tol=1e-14)


def test_decimal_prefixes_give_the_nearest_float() -> None:
    """ "5 us" is the float 5e-6 itself, so holds and ticks compare equal to their literals."""
    for number in range(1, 1000):
        assert parse_quantity(f"{number} us", "s") == float(f"{number}e-6")
        assert parse_quantity(f"{number} nm", "m") == float(f"{number}e-9")


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("1,5 us", r"decimal point"),
        ("1.000,5 s", r"decimal point|one number"),
        ("10**10 s", "one number and one unit"),
        ("10**10**10", "one number and one unit"),
        ("nan s", "finite"),
        ("inf", "finite"),
        ("1e400 s", "too large"),
        ("5 sec", 'did you mean "s"'),
        ("5 S", 'did you mean "s"'),
        ("5 degC", "unknown unit"),
        ("5 furlong", "unknown unit"),
        ("5 m", 'found "m"'),
        ("5", "found no unit"),
        ("s", "expected a number"),
        ("", "expected a number"),
        ("5 s s", "found"),
        ("5 s^9", "exponent"),
        ("5 __import__('os')", "cannot read"),
        ("5 " + "s" * 100_000, "at most 32 characters"),
        ("1" * 100 + " s", "at most 40 characters"),
        ("10 ms + 3 us", "cannot read"),
        ("1_000 s", "cannot read"),
    ],
)
def test_what_cannot_be_read_is_refused_with_a_reason(text: str, says: str) -> None:
    """Comma decimals, powers, not-a-number, unknown units and code are refused, saying what is wrong."""
    with pytest.raises(QuantityError, match=says):
        parse_quantity(text, "s")


@given(st.floats(-1e12, 1e12), st.sampled_from(["s", "us", "deg", "Er", "m/s^2", "%", "min", "s Er um"]))
def test_there_and_back(value: float, unit_text: str) -> None:
    """A value survives the way to a unit and back to 1e-14 (a handful of roundings)."""
    back = from_unit(to_unit(value, unit_text), unit_text)
    assert math.isclose(back, value, rel_tol=1e-14, abs_tol=1e-300)


@given(st.floats(1e-9, 1e9), st.sampled_from(["s", "ms", "deg", "Er", "nm/s^2", "A"]))
def test_formatted_quantities_can_be_read_again(value: float, unit_text: str) -> None:
    """What is shown to people reads back to the digits shown."""
    assert math.isclose(parse_quantity(format_quantity(value, unit_text, 9), unit_text), value, rel_tol=1e-8)


@given(st.text(max_size=60))
def test_any_text_is_a_quantity_or_a_quantity_error(text: str) -> None:
    """No text whatever raises anything but QuantityError, and what is accepted is finite."""
    try:
        value, found = split_quantity(text)
        assert math.isfinite(value)
        unit(found)
    except QuantityError:
        pass


def test_a_recoil_energy_is_no_energy_and_an_angle_no_number() -> None:
    """Er and angles have dimensions of their own."""
    for text, unit_text in (("9 Er", "J"), ("9 J", "Er"), ("1 rad", ""), ("1", "rad"), ("1 Hz", "rad/s")):
        with pytest.raises(QuantityError, match="expected"):
            parse_quantity(text, unit_text)
