"""From shares of rig time to whole packets, losing as little as whole numbers allow.

The efficient rule for equal costs (Pukelsheim & Rieder, Biometrika 79, 763 (1992)): start with ceil((n - l/2) w_i) for
the l points of the design, then, while there are too few, add to the point with the smallest n_i / w_i, and while there
are too many, take from the one with the largest (n_i - 1) / w_i. Ties go to the first point. Shares are taken as exact
fractions, since a float a hair too large would push a whole number up.

Packets that cost different times are rounded to a budget of rig time instead: each point gets the whole packets that
fit its share, at least one, and the rest of the budget goes one packet at a time to the point that is furthest behind.
"""

from collections.abc import Sequence
from fractions import Fraction
from math import ceil

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.errors import PlanImpossible


def efficient_counts(weights: Sequence[Fraction | float], total: int) -> IntArray:
    """Whole counts (n_point,) that sum to `total`, for shares that sum to 1 and are all above 0.

    Raises:
        PlanImpossible: fewer than one for each point.
    """
    shares = [Fraction(weight).limit_denominator(10**12) for weight in weights]
    whole = sum(shares)
    shares = [share / whole for share in shares]
    points = len(shares)
    if total < points:
        raise PlanImpossible(f"{total} packets cannot serve {points} points; {points} is the least")
    counts = [ceil((total - Fraction(points, 2)) * share) for share in shares]
    while sum(counts) < total:
        behind = [Fraction(count) / share for count, share in zip(counts, shares, strict=True)]
        counts[behind.index(min(behind))] += 1
    while sum(counts) > total:
        ahead = [Fraction(count - 1) / share for count, share in zip(counts, shares, strict=True)]
        counts[ahead.index(max(ahead))] -= 1
    return np.array(counts, dtype=np.int64)


def _check_budget(cost_s: FloatArray, budget_s: float) -> None:
    least = float(cost_s.sum())
    if least > budget_s:
        raise PlanImpossible(
            f"one packet at each of {len(cost_s)} points takes {least / 3600:.2f} h, the budget is "
            f"{budget_s / 3600:.2f} h: give {least / 3600:.2f} h or more, or shorter holds"
        )


def counts_in_budget(weights: FloatArray, cost_s: FloatArray, budget_s: float) -> IntArray:
    """Whole packets (n_point,) whose cost stays within the budget, each point at least one.

    weights (n_point,): shares of rig time above 0; cost_s (n_point,): rig time of one packet.

    Raises:
        PlanImpossible: the budget is too short for one packet at each point; the message says what would do.
    """
    _check_budget(cost_s, budget_s)
    counts = np.maximum(1, np.floor(weights * budget_s / cost_s)).astype(np.int64)
    while float(counts @ cost_s) > budget_s:  # the ones that were lifted to one packet took from the others
        ahead = np.where(counts > 1, (counts - 1) * cost_s / weights, -np.inf)
        counts[int(ahead.argmax())] -= 1
    while True:
        fits = cost_s <= budget_s - float(counts @ cost_s) + 1e-9
        if not fits.any():
            return counts
        behind = np.where(fits, counts * cost_s / weights, np.inf)
        counts[int(behind.argmin())] += 1


def counts_for_worst(information: FloatArray, cost_s: FloatArray, budget_s: float) -> IntArray:
    """Whole packets (n_point,) that make the largest variance 1 / (count information) smallest within the budget.

    One packet each, then always one more where the variance is largest, until that point's next packet does not fit:
    no other choice has a smaller largest variance, since that point can have no more packets unless another gives one
    up and becomes the worse. What is left over goes to the worst points that still fit.

    Raises:
        PlanImpossible: the budget is too short for one packet at each point.
    """
    _check_budget(cost_s, budget_s)
    counts = np.ones(len(cost_s), dtype=np.int64)
    left = budget_s - float(cost_s.sum())
    while True:
        variance = np.where(cost_s <= left + 1e-9, 1 / (counts * information), -np.inf)
        worst = int(variance.argmax())
        if not np.isfinite(variance[worst]):
            return counts
        counts[worst] += 1
        left -= float(cost_s[worst])
