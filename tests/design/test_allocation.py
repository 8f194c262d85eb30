"""Every goal's allocation: proved, rounded well, honest about what it needs."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from planner.cli.app import run
from planner.design.allocation.budget import Check, allocate_budget
from planner.design.allocation.decay import (
    allocate_coherence,
    allocate_curve,
    allocate_plateau,
    allocate_revival,
    candidates,
    contrast_factors,
)
from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.result import Allocation
from planner.design.allocation.signal import Scale, allocate_signal, best_hold, signal_variance_rate
from planner.design.optimal import information
from planner.errors import PlanImpossible
from planner.physics.atoms import atom
from planner.physics.constants import HBAR

RIG = Knowledge(
    contrast=0.6,
    coherence_s=25.0,
    atoms=12_000.0,
    lifetime_s=38.0,
    excess=2.0,
    dead_s=3.0,
    shortest_s=0.25,
    longest_s=70.0,
    phases=4,
    states=1,
    spread={"contrast": 0.08, "coherence_s": 0.22, "atoms": 0.12, "lifetime_s": 0.15, "excess": 0.25},
)
SCALE = Scale(per_second_m=atom("Rb-87").mass_kg / HBAR, separation_m=4e-6)
SEQUENCES = Path(__file__).parent.parent.parent / "sequences"


def every_goal() -> list[tuple[str, Allocation]]:
    checks = [
        Check(
            name=name,
            offset=offset,
            offset_error=0.1,
            slope_variance_s=3e-12,
            slope=1e-9,
            packet_s=120.0,
            shots=8,
            hold_s=12.0,
        )
        for name, offset in (("tilt", 0.5), ("depth", 2.0))
    ]
    return [
        ("coherence", allocate_coherence(RIG, 10.0)),
        ("coherence, best guess", allocate_coherence(RIG, 10.0, robust=False)),
        ("both time scales", allocate_coherence(RIG, 10.0, lifetime_weight=1.0)),
        ("curve", allocate_curve(RIG, 10.0, np.geomspace(0.5, 50, 8))),
        ("plateau", allocate_plateau(RIG, 10.0, plateau=0.06)),
        ("revival", allocate_revival(RIG, 10.0, period_s=0.8, depth=0.05)),
        ("signal", allocate_signal(RIG, SCALE, 10.0, largest=1e-7)),
        (
            "budget",
            allocate_budget(
                signal_variance_s=6e-12, signal_packet_s=60.0, signal_shots=4, hold_s=12.0, checks=checks, hours=10.0
            ),
        ),
    ]


def test_every_goal_is_proved_and_rounds_well() -> None:
    """Certified efficiency at least 99 % before rounding and 97 % after, and the hours are kept."""
    for name, found in every_goal():
        assert found.certificate.efficiency >= 0.99, name
        assert 0.97 <= found.rounded <= 1.0 + 1e-9, name
        assert sum(share.packets for share in found.shares) >= 100, name
        assert found.rig_s <= found.hours * 3600 + 1e-6, name


def test_the_best_hold_for_a_signal() -> None:
    """Half the coherence time without dead time, the whole of it when dead time is all that counts; no atom loss."""
    # source: closed forms, derived: the maxima of T exp(-2T/tau) and T^2 exp(-2T/tau)
    calm = replace(RIG, lifetime_s=1e9, spread={})
    step = np.log(RIG.longest_s / RIG.shortest_s) / 399  # of the grid of holds
    assert best_hold(replace(calm, dead_s=1e-9), SCALE) == pytest.approx(12.5, rel=step)
    assert best_hold(replace(calm, dead_s=1e7), SCALE) == pytest.approx(25.0, rel=step)


def test_the_signal_error_is_that_of_its_shots() -> None:
    """All at mid-fringe, the error is sqrt(variance rate / rig time)."""
    found = allocate_signal(RIG, SCALE, 10.0)
    hold = np.array([found.details["hold_s"]])
    ideal = float(np.sqrt(signal_variance_rate(RIG, SCALE, hold)[0] / 36_000))
    assert found.errors["signal (m/s^2)"] == pytest.approx(ideal, rel=0.01)  # two full fringes and the rounding


def test_no_hold_list_beats_the_coherence_design() -> None:
    """Random designs with up to six holds never know the coherence time better than the bound allows."""
    found = allocate_coherence(RIG, 10.0, robust=False)
    hold = candidates(RIG)
    factors = contrast_factors(RIG, hold)
    rng = np.random.default_rng(3)
    for _ in range(300):
        share = np.zeros(len(hold))
        share[rng.choice(len(hold), size=rng.integers(2, 7), replace=False)] = 1.0
        share *= rng.random(len(hold))
        share /= share.sum()
        assert np.linalg.pinv(information(factors, share))[1, 1] >= found.certificate.bound * (1 - 1e-9)


def test_a_larger_signal_wants_more_full_fringes() -> None:
    """The scale of a larger signal, the contrast, has to be known better."""
    full = [allocate_signal(RIG, SCALE, 10.0, largest=size).shares[1].packets for size in (0.0, 1e-6, 5e-6)]
    assert full == sorted(full)
    assert full[0] == 2
    assert full[2] > 50


@pytest.mark.parametrize("file", ["hold-scan", "signal", "systematics"])
def test_the_command_answers_for_shipped_sequences(file: str, capsys: pytest.CaptureFixture[str]) -> None:
    """`nightfringe allocate` prints a table and its proof."""
    assert run(["allocate", str(SEQUENCES / f"{file}.toml")]) == 0
    said = capsys.readouterr().out
    assert "proof" in said
    assert "packets" in said


def test_too_few_hours_name_what_would_do() -> None:
    """A night too short for one packet each: the least number of hours is named."""
    with pytest.raises(PlanImpossible, match="give"):
        allocate_coherence(RIG, 0.001)
    with pytest.raises(PlanImpossible, match="are too few at a hold"):
        allocate_signal(RIG, SCALE, 0.01)


def test_a_plateau_above_the_contrast_is_refused() -> None:
    """A plateau must lie below the contrast at short hold."""
    with pytest.raises(PlanImpossible, match="is not between 0 and the contrast"):
        allocate_plateau(RIG, 10.0, plateau=0.7)
