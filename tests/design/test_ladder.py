"""The fringe ladder: published risks, and a simulation of one."""

import csv
from pathlib import Path

import numpy as np
import pytest

from planner.design.ladder import ladder, step_risk
from planner.errors import PlanImpossible

DATA = Path(__file__).parent.parent / "outside" / "data" / "phase_ladder.csv"


@pytest.mark.parametrize(
    ("ratio", "sigma", "risk"), [(2, 0.3, 2.824e-6), (3, 0.3, 9.279e-4), (4, 0.2, 1.391e-4), (10, 0.1, 1.772e-3)]
)
def test_step_risks(ratio: float, sigma: float, risk: float) -> None:
    """Chance of the wrong fringe with equal errors on both rungs."""
    # source: derived and computed, confirmed by a Monte Carlo of 2e6 (2.5e-6, 9.61e-4, 1.51e-4, 1.82e-3)
    assert step_risk(ratio, sigma, sigma) == pytest.approx(risk, rel=1e-3)


@pytest.mark.parametrize(
    ("ratio", "loose", "tight"),
    [(2, 0.42697, 0.28722), (3, 0.30191, 0.20309), (4, 0.23156, 0.15577), (10, 0.09500, 0.06390)],
)
def test_largest_errors_for_a_given_risk(ratio: float, loose: float, tight: float) -> None:
    """The errors at which the risk is 1e-3 and 1e-6."""
    # source: computed (closed form), to the five digits given
    assert step_risk(ratio, loose, loose) == pytest.approx(1e-3, rel=2e-3)
    assert step_risk(ratio, tight, tight) == pytest.approx(1e-6, rel=4e-3)


def test_the_data_file_agrees() -> None:
    """The shipped table of ladder risks is what the formula gives."""
    # source: the file's own header (computed; formula checked by Monte Carlo), six digits
    lines = [line for line in DATA.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    rows = list(csv.DictReader(lines))
    assert len(rows) == 6
    for row in rows:
        ratio = float(row["ratio"])
        assert np.pi / (1 + ratio) == pytest.approx(float(row["bounded_error_rad"]), abs=1e-6)
        for risk, sigma in ((1e-3, float(row["sigma_for_1e-3"])), (1e-6, float(row["sigma_for_1e-6"]))):
            # the risk changes by up to 30 times the relative rounding of sigma, which is 1e-5 at the smallest
            assert step_risk(ratio, sigma, sigma) == pytest.approx(risk, rel=5e-4)


def test_a_simulated_ladder_keeps_its_risk() -> None:
    """200,000 climbs with normal errors: the share of wrong fringes stays under the stated risk."""
    found = ladder(
        shortest_s=0.5,
        longest_s=60.0,
        prior_rad=0.2,
        sigma_of=lambda hold: np.array([0.25 * np.exp(hold / 60)]),
        scale_of=lambda hold: 100.0 * hold,
        cost_of=lambda hold: 4 * (hold + 3),
        risk=5e-3,
    )
    assert found.risk <= 5e-3
    rng = np.random.default_rng(11)
    n = 200_000
    scale = 100.0 * np.array(found.holds_s)
    truth = rng.normal(0, 0.2 / scale[0], n)
    estimate = np.zeros(n)
    wrong = np.zeros(n, dtype=bool)
    for kappa, sigma in zip(scale, found.sigma_rad, strict=True):
        phase = kappa * truth + rng.normal(0, sigma, n)
        seen = (phase + np.pi) % (2 * np.pi) - np.pi
        turns = np.round((kappa * estimate - seen) / (2 * np.pi))
        estimate = (seen + 2 * np.pi * turns) / kappa
        wrong |= np.abs(kappa * (estimate - truth)) > np.pi
    # the stated risk is a union bound: never exceeded beyond four standard errors of the count
    assert wrong.mean() <= found.risk + 4 * np.sqrt(found.risk / n)


def test_a_ladder_that_cannot_begin_says_so() -> None:
    """A phase hardly known at the shortest hold: a shorter one is named."""
    with pytest.raises(PlanImpossible, match=r"Begin with a hold of 0\.125 s or less"):
        ladder(
            shortest_s=0.5,
            longest_s=10.0,
            prior_rad=3.0,
            sigma_of=lambda hold: np.array([0.1]),
            scale_of=lambda hold: hold,
            cost_of=lambda hold: hold,
            risk=1e-3,
        )
