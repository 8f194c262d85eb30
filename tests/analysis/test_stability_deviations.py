"""Allan's family against the handbook's worked examples, closed forms, and its own rule for gaps."""

import csv
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.analysis.allan import Deviations, allan, hadamard, modified_allan, octaves, total
from planner.errors import InputError, NotEnoughData

DATA = Path(__file__).parents[1] / "outside" / "data"
KINDS = {"oadev": allan, "ohdev": hadamard, "mdev": modified_allan, "totdev": total}


def table(name: str) -> list[dict[str, str]]:
    lines = (DATA / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def handbook_series() -> np.ndarray:
    """The 1,000 pseudo-random values of NIST SP 1065, section 12.4, made by the handbook's generator."""
    state, values = 1234567890, []
    for _ in range(1000):
        values.append(state / 2147483647)
        state = 16807 * state % 2147483647
    return np.array(values)


def overlapping(values: np.ndarray, factors: list[int], kind: str) -> Deviations:
    return KINDS[kind](values, np.array(factors))


def to_seven_figures(found: float, printed: str) -> bool:
    """Equal to all printed digits: half a unit in the last place, and a hair for ties."""
    digits = len(printed.split("e")[0].replace(".", "").lstrip("0"))
    last = 10.0 ** (np.floor(np.log10(float(printed))) - digits + 1)
    return abs(found - float(printed)) <= 0.5001 * last


@pytest.mark.parametrize("kind", KINDS)
def test_thousand_points_of_the_handbook(kind: str) -> None:
    """All printed digits at 1, 10 and 100 slots.

    Source: W. J. Riley, NIST SP 1065 (2008), section 12.4, tables as printed in the tests of two open stability
    packages that cite it.
    """
    (row,) = [row for row in table("riley_1000_deviations.csv") if row["statistic"] == kind]
    found = overlapping(handbook_series(), [1, 10, 100], kind)
    for value, column in zip(found.value, ("tau1", "tau10", "tau100"), strict=True):
        assert to_seven_figures(value, row[column]), (kind, column, value, row[column])


@pytest.mark.parametrize("kind", KINDS)
def test_nine_values_of_the_monograph(kind: str) -> None:
    """All printed digits at 1 and 2 slots. Source: NBS Monograph 140, Annex 8.E, as in SP 1065 section 12.3."""
    series = np.array([float(row["freq"]) for row in table("riley_nbs14_small.csv") if row["freq"]])
    (row,) = [row for row in table("riley_nbs14_small_deviations.csv") if row["statistic"] == kind]
    found = overlapping(series, [1, 2], kind)
    for value, column in zip(found.value, ("tau1", "tau2"), strict=True):
        assert to_seven_figures(value, row[column].ljust(8, "0")), (kind, column, value, row[column])


def test_number_of_terms() -> None:
    """999, 981, 801 terms at 1, 10, 100 slots of 1,000 (n - 2m + 1)."""
    assert allan(handbook_series(), np.array([1, 10, 100])).terms.tolist() == [999, 981, 801]


@pytest.mark.parametrize(
    ("kind", "name"), [("oadev", "oadev"), ("ohdev", "ohdev"), ("mdev", "mdev"), ("totdev", "totdev")]
)
def test_against_the_reference_package(kind: str, name: str) -> None:
    """Equal to allantools, octave by octave, on noise with a walk in it."""
    import allantools

    rng = np.random.default_rng(3)
    series = rng.standard_normal(700) + 0.1 * np.cumsum(rng.standard_normal(700))
    factors = octaves(700, share=0.3)
    # its totdev drops the last factors where its own limits say so; ask for each alone
    taus, value, _, _ = getattr(allantools, name)(series, rate=1.0, data_type="freq", taus=factors.astype(float))
    ours = KINDS[kind](series, np.rint(taus).astype(int))
    np.testing.assert_allclose(ours.value, value, rtol=1e-9)


def test_declared_drift_has_its_closed_form() -> None:
    """A slope of d per slot gives m d / sqrt(2) in Allan's deviation and nothing in Hadamard's."""
    series = 296.15 + 0.003 * np.arange(500)
    factors = np.array([1, 2, 16, 100])
    np.testing.assert_allclose(allan(series, factors).value, factors * 0.003 / np.sqrt(2), rtol=1e-9)
    assert hadamard(series, factors).value.max() < 1e-12


def test_white_noise_and_walk_have_their_closed_forms() -> None:
    """White: sigma^2 / m. Walk of steps s: s^2 (2 m^2 + 1) / (6 m). Mean over 400 series within 4 standard errors.

    The walk's form follows from the variance of the difference of two adjoining means of a summed white series.
    """
    rng = np.random.default_rng(11)
    factors = np.array([1, 2, 4, 8, 32])
    white = np.array([allan(rng.standard_normal(300), factors).value ** 2 for _ in range(400)])
    walk = np.array([allan(np.cumsum(rng.standard_normal(300)), factors).value ** 2 for _ in range(400)])
    for found, truth in ((white, 1 / factors), (walk, (2 * factors**2 + 1) / (6 * factors))):
        error = found.std(axis=0, ddof=1) / np.sqrt(len(found))
        assert (np.abs(found.mean(axis=0) - truth) < 4 * error).all()


@given(st.integers(0, 10_000), st.integers(20, 90), st.floats(-1e3, 1e3), st.floats(0.1, 1e3))
def test_shift_and_scale(seed: int, size: int, shift: float, scale: float) -> None:
    """A constant added changes nothing; a factor comes through; reversing time changes nothing (all four kinds)."""
    series = np.random.default_rng(seed).standard_normal(size)
    factors = octaves(size)
    for kind in KINDS.values():
        plain = kind(series, factors).value
        np.testing.assert_allclose(kind(series * scale + shift, factors).value, scale * plain, rtol=1e-6, atol=1e-9)
        np.testing.assert_allclose(kind(series[::-1].copy(), factors).value, plain, rtol=1e-8)


def brute_force(series: np.ndarray, m: int, order: int) -> tuple[float, int]:
    """The definition with the gap rule, by loops."""
    terms = []
    for start in range(len(series) - order * m + 1):
        parts = [series[start + k * m : start + (k + 1) * m] for k in range(order)]
        if all(np.isfinite(part).sum() >= 0.9 * m for part in parts):
            means = [np.nanmean(part) for part in parts]
            terms.append(np.diff(means, n=order - 1)[0])
    return float(np.sqrt(np.mean(np.square(terms)) / (2 if order == 2 else 6))) if terms else np.nan, len(terms)


@given(st.integers(0, 10_000), st.integers(12, 60), st.floats(0, 0.3))
def test_gap_rule_is_the_stated_one(seed: int, size: int, lost: float) -> None:
    """With empty slots: the same as the rule written out in loops, terms counted alike."""
    rng = np.random.default_rng(seed)
    series = rng.standard_normal(size)
    series[rng.random(size) < lost] = np.nan
    series[0] = 1.0
    factors = np.array([1, 2, 3, 10])
    for order, kind in ((2, allan), (3, hadamard)):
        found = kind(series, factors)
        for at, m in enumerate(factors.tolist()):
            value, terms = brute_force(series, m, order)
            assert found.terms[at] == terms
            np.testing.assert_allclose(found.value[at], value, rtol=1e-9)


def test_no_number_without_data() -> None:
    """Too short for a factor is NaN with no terms; nothing at all, infinities and bad factors are errors."""
    assert np.isnan(allan(np.arange(5.0), np.array([3])).value).all()
    assert np.isnan(total(np.array([1.0, np.nan, 3.0]), np.array([1])).value).all()
    with pytest.raises(NotEnoughData, match="no value"):
        allan(np.full(9, np.nan), np.array([1]))
    with pytest.raises(InputError, match="infinite"):
        hadamard(np.array([1.0, np.inf, 2.0]), np.array([1]))
    with pytest.raises(InputError, match="from 1"):
        allan(np.arange(9.0), np.array([0]))
