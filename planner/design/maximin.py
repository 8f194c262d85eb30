"""Shares of rig time that make the worst case best, by cutting planes, with a bound that proves it.

Many design goals have the form: maximise over shares w (w_i >= 0, sum w_i = 1) the smallest of a family of functions
that are linear in w,

    T(w) = min_k sum_i w_i r_ki ,

where the family is infinite and an oracle finds its smallest member at a given w:

- the inverse variance of one combination a'theta: 1 / (a'M^-1a) = min_H |F_i H|^2 weighted by w, over (a'H)^2 = 1,
  reached by H = M^-1 a / (a'M^-1a) (Cauchy and Schwarz);
- several combinations at once (minimax): the minimum over them too;
- telling two models apart (T-optimality, Atkinson & Fedorov, Biometrika 62, 57 (1975), cited from memory): the squared
  distance, in standard errors, to the nearest curve of the rival model; linear in w for a given rival.

Kelley's cutting planes: every member seen so far is a valid upper bound on T, so the linear programme over them bounds
what any share can reach; T at a share is reached. The gap between the two is the certificate. The programme's optimum
is a vertex, so designs come out with few points.
"""

from collections.abc import Callable

import numpy as np

from planner.arrays import FloatArray

Oracle = Callable[[FloatArray], FloatArray]


def maximin(oracle: Oracle, n: int, *, gap: float = 1e-4, rounds: int = 400) -> tuple[FloatArray, float, float]:
    """Maximise T over shares of n candidates.

    oracle(w) returns rows r of shape (n_row, n) of the family, its smallest member at w among them. Returns the best
    share found (n,), its T, and the proved upper bound on T of every share; stops when T >= (1 - gap) bound.
    """
    from scipy.optimize import linprog

    weights = np.full(n, 1.0 / n)
    cuts = np.empty((0, n))
    best, reached, bound = weights, -np.inf, np.inf
    for _ in range(rounds):
        rows = np.atleast_2d(oracle(weights))
        value = float((rows @ weights).min())
        if value > reached:
            best, reached = weights, value
        cuts = np.vstack([cuts, rows])
        scale = float(np.abs(cuts).max()) or 1.0
        # variables: the n shares and the level t; maximise t with t <= cut . w for every cut
        answer = linprog(
            np.r_[np.zeros(n), -1.0],
            A_ub=np.c_[-cuts / scale, np.ones(len(cuts))],
            b_ub=np.zeros(len(cuts)),
            A_eq=np.r_[np.ones(n), 0.0][None, :],
            b_eq=[1.0],
            bounds=[(0.0, None)] * n + [(None, None)],
            method="highs",
        )
        if not answer.success:
            break
        bound = min(bound, float(-answer.fun) * scale)
        if reached >= (1.0 - gap) * bound:
            break
        proposed = np.maximum(answer.x[:n], 0.0)
        proposed /= proposed.sum()
        # a step part of the way from the best share known: plain cutting planes swing between far corners
        weights = 0.7 * proposed + 0.3 * best
    return *_tidy(oracle, best, reached), bound


def _tidy(oracle: Oracle, weights: FloatArray, reached: float) -> tuple[FloatArray, float]:
    """Leave out shares too small to matter, as long as that costs nothing worth telling; shares and their T."""
    for smallest in (3e-3, 1e-3, 1e-4, 1e-6):
        trimmed = np.where(weights < smallest, 0.0, weights)
        if trimmed.sum() <= 0.0:
            continue
        trimmed /= trimmed.sum()
        value = float((np.atleast_2d(oracle(trimmed)) @ trimmed).min())
        if value >= reached * (1.0 - 1e-4):
            return trimmed, value
    return weights, reached
