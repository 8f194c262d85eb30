"""Which shots count, and that none goes without a word."""

import numpy as np
import pytest

from planner.analysis.data import NightData, choose, distinct_holds, fractions, shot_variance
from planner.design.running_order import Kind
from planner.errors import InputError
from tests.analysis.nights import night


def test_every_shot_left_out_is_counted_once_under_its_reason() -> None:
    """Kept and left-out shots add up to all, and each reason has its own count."""
    columns = night(1, packets=2)
    columns["kind"] = columns["kind"].copy()
    columns["kind"][0], columns["kind"][1], columns["kind"][2] = Kind.WARM_UP, Kind.CHECK, Kind.SOUNDING
    columns["state"][3:6] = ["failed", "withdrawn", "lost"]
    columns["saturated"][6] = 0.02
    columns["atoms_a"][7] = np.nan
    columns["atoms_b"][8] = -columns["atoms_a"][8] - 5
    columns["hold_s"][9] = np.nan
    columns["flags"][10:12] = ["unlocked,late", "late"]
    columns["state"][0] = "failed"  # a failed warm-up shot is a warm-up shot
    chosen = choose(NightData.from_columns(columns), cut_flags=["unlocked"])
    assert chosen.left_out == {
        "warm-up shots": 1,
        "checking shots": 1,
        "soundings": 1,
        "the rig says failed": 1,
        "withdrawn before they ran": 1,
        "lost: may have run, no result": 1,
        "the detector was saturated": 1,
        "atom counts missing or not finite": 1,
        "no atoms detected": 1,
        "hold or readout phase not on record": 1,
        "flagged unlocked (declared cut)": 1,
    }
    assert len(chosen.data) + sum(chosen.left_out.values()) == chosen.total == len(columns["key"])
    assert set(chosen.data.key) == set(columns["key"][11:])


def test_what_was_not_measured_does_not_exclude() -> None:
    """Without a background, saturation or flag column every measuring shot counts."""
    columns = night(2, packets=2)
    for name in ("background", "saturated", "flags"):
        del columns[name]
    chosen = choose(NightData.from_columns(columns))
    assert not chosen.left_out
    assert len(chosen.data) == len(columns["key"])


def test_bad_columns_are_named() -> None:
    """A missing column, one of another length and one that holds no numbers are said by name."""
    columns = night(3, packets=1)
    with pytest.raises(InputError, match="columns missing: atoms_a; present: atoms_b"):
        NightData.from_columns({name: value for name, value in columns.items() if name != "atoms_a"})
    with pytest.raises(InputError, match="column hold_s has 3 rows, column key has 48"):
        NightData.from_columns(columns | {"hold_s": [1, 2, 3]})
    with pytest.raises(InputError, match="column atoms_b cannot be read as numbers"):
        NightData.from_columns(columns | {"atoms_b": ["many"] * 48})
    with pytest.raises(InputError, match="columns missing"):
        NightData.from_columns({})


def test_fraction_and_its_variance() -> None:
    """y = a/(a+b); its simulated scatter is projection noise plus detection noise as the formula says."""
    columns = night(4, packets=2)
    data = NightData.from_columns(columns)
    np.testing.assert_allclose(fractions(data), columns["atoms_a"] / (columns["atoms_a"] + columns["atoms_b"]))
    rng = np.random.default_rng(9)
    atoms, p, detector = 800, 0.3, 12.0
    a = rng.binomial(atoms, p, 60000)
    noisy_a, noisy_b = a + detector * rng.standard_normal(60000), atoms - a + detector * rng.standard_normal(60000)
    one = NightData.from_columns(
        {
            name: column[:1] if name not in ("atoms_a", "atoms_b") else np.array([atoms / 2])
            for name, column in columns.items()
        }
    )
    expected = shot_variance(one, expected=p, detection_noise_atoms=detector)[0]
    # a variance of 60,000 draws is known to 0.6 %; four of those, and second-order terms of detector/atoms (2e-4)
    assert (noisy_a / (noisy_a + noisy_b)).var() == pytest.approx(expected, rel=0.025)


def test_holds_alike_are_one() -> None:
    """Holds apart by rounding are one hold; holds apart by more are two."""
    holds, which = distinct_holds(np.array([2.0, 1.0, 1.0 + 1e-9, 2.0 - 1e-7, 1.001]))
    np.testing.assert_allclose(holds, [1.0, 1.001, 2.0], rtol=1e-6, atol=0)
    assert which.tolist() == [2, 0, 0, 2, 1]
    assert len(distinct_holds(np.array([]))[0]) == 0
