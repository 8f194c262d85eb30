"""Whole packets from shares."""

from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.design.rounding import counts_for_worst, counts_in_budget, efficient_counts
from planner.errors import PlanImpossible

SEVEN = [Fraction(text) for text in ("0.1", "0.0001", "0.2", "0.134", "0.073", "0.2111", "0.2818")]


@pytest.mark.parametrize(
    ("weights", "total", "counts"),
    [
        ([Fraction(1, 6), Fraction(1, 3), Fraction(1, 2)], 10, [2, 3, 5]),
        ([Fraction(text) for text in ("0.37", "0.31", "0.19", "0.13")], 13, [4, 4, 3, 2]),
        (SEVEN, 20, [2, 1, 3, 3, 2, 4, 5]),
        (SEVEN, 21, [2, 1, 4, 3, 2, 4, 5]),
        ([Fraction("0.2178"), Fraction("0.7822")], 10, [2, 8]),
        ([Fraction("0.5"), Fraction("0.3"), Fraction("0.2")], 11, [6, 3, 2]),
    ],
)
def test_efficient_rounding_as_worked_examples(weights: list[Fraction], total: int, counts: list[int]) -> None:
    """The published rule on worked examples, ties to the first."""
    # source: rule of Pukelsheim & Rieder, Biometrika 79, 763 (1992), read in two R packages that state it; the seven
    # weights from the help page of one of them (read); outcomes computed by exact fractions
    assert efficient_counts(weights, total).tolist() == counts


@given(
    st.lists(st.floats(0.01, 1.0), min_size=1, max_size=9),
    st.integers(0, 2000),
)
def test_counts_sum_up_and_stay_near_their_shares(raw: list[float], extra: int) -> None:
    """Every count is at least one and within one of its share, or lifted to one."""
    shares = np.array(raw) / sum(raw)
    total = len(raw) + extra
    counts = efficient_counts(list(shares), total)
    assert counts.sum() == total
    assert counts.min() >= 1
    assert np.all(counts <= np.maximum(1, np.ceil(total * shares) + 1))


@given(
    st.lists(st.tuples(st.floats(0.01, 1.0), st.floats(1.0, 300.0)), min_size=1, max_size=8),
    st.floats(1.0, 200.0),
)
def test_budgets_are_kept_and_used_up(points: list[tuple[float, float]], times: float) -> None:
    """No budget is exceeded, and what is left is too short for one more packet of any kind."""
    weights = np.array([weight for weight, _ in points])
    cost = np.array([seconds for _, seconds in points])
    budget = float(cost.sum() * times)
    counts = counts_in_budget(weights / weights.sum(), cost, budget)
    spent = float(counts @ cost)
    assert counts.min() >= 1
    assert spent <= budget + 1e-6
    assert budget - spent < cost.min() + 1e-6


def test_a_budget_too_short_names_the_one_that_does() -> None:
    """Two packets of half an hour in 36 minutes: the message says one hour."""
    with pytest.raises(PlanImpossible, match=r"takes 1\.00 h, the budget is 0\.60 h: give 1\.00 h"):
        counts_in_budget(np.array([0.5, 0.5]), np.array([1800.0, 1800.0]), 2160.0)


def test_the_worst_point_gets_the_next_packet() -> None:
    """Exhaustive search over small problems finds no smaller largest variance."""
    rng = np.random.default_rng(5)
    for _ in range(20):
        information, cost = rng.uniform(0.2, 3, 3), rng.uniform(1, 4, 3)
        budget = float(cost.sum() * 4)
        found = counts_for_worst(information, cost, budget)
        best = min(
            max(1 / (np.array([a, b, c]) * information))
            for a in range(1, 20)
            for b in range(1, 20)
            for c in range(1, 20)
            if a * cost[0] + b * cost[1] + c * cost[2] <= budget
        )
        assert max(1 / (found * information)) == pytest.approx(best, rel=1e-12)
