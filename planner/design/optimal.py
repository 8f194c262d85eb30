"""Continuous optimal designs: how to share rig time between candidate packets, and a proof of how good the share is.

A candidate i is a fringe packet that could be run: one packet brings the information matrix m_i about the parameters
and costs c_i seconds. A design is a share of rig time w_i >= 0, sum w_i = 1; one second of rig time then brings

    M(w) = sum_i w_i m_i / c_i .

Every solver here ends with a certificate that does not depend on how the share was found: a bound on the best value
that any share could reach, from the equivalence theorem (duality) of its criterion. `efficiency` is a lower bound on
what the design reaches of the optimum.

Solvers work on factors: candidate i is given as F_i of shape (n_row, n_parameter) with m_i / c_i = F_i' F_i.

References: Kiefer & Wolfowitz, Canad. J. Math. 12, 363 (1960) (equivalence theorem); Elfving, Ann. Math. Stat. 23, 255
(1952) (c-optimality); Pukelsheim, Optimal Design of Experiments (1993) (bounds for matrix means); Atkinson & Fedorov,
Biometrika 62, 57 (1975) (discriminating between two models); Torsney & Martin-Martin, Statistics and Computing 19, 2009
(multiplicative algorithms). Cited from memory; the bounds are proved in the docstrings.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray

ROUNDS = 20_000  # multiplicative steps before giving up; a few hundred are usual
GOOD = 1e-4  # stop when the certificate says 1 - efficiency <= this
RIDGE = 1e-12  # of the trace: keeps an optimum that is singular (fewer points than parameters) invertible


@dataclass(frozen=True, kw_only=True)
class Design:
    """A share of rig time and how good it is.

    weights: (n_candidate,) shares of rig time. value: the criterion reached, for one second of rig time (a variance for
    c and L, log det M for D, the smallest mean squared distance for T). bound: what no design can beat. efficiency: a
    proved lower bound on value against the optimum, in time: 0.99 means that the best design saves at most 1 % of the
    hours. sensitivity: (n_candidate,) the function of the equivalence theorem over its bound: at most 1/efficiency,
    and 1 on the support of an optimum.
    """

    criterion: str
    weights: FloatArray
    value: float
    bound: float
    efficiency: float
    sensitivity: FloatArray
    rounds: int


def information(factors: FloatArray, weights: FloatArray) -> FloatArray:
    """M(w) (..., n_parameter, n_parameter): factors (..., n_candidate, n_row, n_parameter), weights (n_candidate,)."""
    *rigs, _, _, n_parameter = factors.shape
    rows = (factors * np.sqrt(weights)[:, None, None]).reshape(*rigs, -1, n_parameter)
    return np.asarray(np.swapaxes(rows, -1, -2) @ rows)


def _solve(n: int, step: Callable[[FloatArray], FloatArray], power: float) -> tuple[FloatArray, int]:
    """Multiplicative steps w <- w s^power / sum, s the sensitivity with mean 1 under w, until max s <= 1 + GOOD."""
    weights = np.full(n, 1.0 / n)
    best, least = weights, np.inf
    for rounds in range(1, ROUNDS + 1):
        sensitivity = step(weights)
        worst = float(sensitivity.max())
        if worst < least:
            best, least = weights, worst
        if worst <= 1.0 + GOOD:
            return weights, rounds
        weights = weights * sensitivity**power
        weights /= weights.sum()
        if rounds % 25 == 0:
            weights = _drop(weights, sensitivity)
    return best, ROUNDS


def _drop(weights: FloatArray, sensitivity: FloatArray) -> FloatArray:
    """Take rig time from candidates that cannot be in any optimum soon: tiny share and low sensitivity."""
    kept = np.where((weights < 1e-9) & (sensitivity < 0.9), 0.0, weights)
    return np.asarray(kept / kept.sum())


def _inverse(matrix: FloatArray) -> FloatArray:
    """Inverses of (..., n, n), scaled to unit diagonals and held off singularity by RIDGE."""
    n = matrix.shape[-1]
    scale = np.sqrt(np.maximum(np.diagonal(matrix, axis1=-2, axis2=-1), np.finfo(float).tiny))
    outer = scale[..., :, None] * scale[..., None, :]
    return np.asarray(np.linalg.inv(matrix / outer + RIDGE * n * np.eye(n)) / outer)


def d_optimal(factors: FloatArray) -> Design:
    """The share that maximises log det M(w): the smallest joint confidence region of all parameters.

    factors: (n_candidate, n_row, n_parameter). Equivalence theorem (Kiefer & Wolfowitz 1960): w is optimal if and only
    if d_i = tr(M^-1 F_i'F_i) <= p for all i; for any w, (det M / det M*)^(1/p) >= p / max d_i.
    """
    p = factors.shape[2]

    def step(weights: FloatArray) -> FloatArray:
        inverse = _inverse(information(factors, weights))
        return np.asarray(((factors @ inverse) * factors).sum(axis=(1, 2)) / p)

    weights, rounds = _solve(len(factors), step, 1.0)
    sensitivity = step(weights)
    sign, value = np.linalg.slogdet(information(factors, weights))
    worst = float(sensitivity.max())
    return Design(
        criterion="D",
        weights=weights,
        value=float(value) if sign > 0 else -np.inf,
        bound=float(value) + p * np.log(worst),
        efficiency=1.0 / worst,
        sensitivity=sensitivity,
        rounds=rounds,
    )


def l_optimal(factors: FloatArray, wanted: FloatArray) -> Design:
    """The share that minimises tr(A' M(w)^-1 A): the sum of the variances of the wanted combinations.

    factors: (n_candidate, n_row, n_parameter); wanted A: (n_parameter, n_combination); one column is c-optimality.
    Bound: for any H, tr(A'H) = tr(A'M^-1/2 M^1/2 H) <= sqrt(tr(A'M^-1A) tr(H'MH)) by Cauchy and Schwarz, and
    tr(H'MH) <= max_i |F_i H|^2, so that tr(A'M^-1A) >= tr(A'H)^2 / max_i |F_i H|^2 for every share w. With H = M^-1 A
    it is tight at the optimum (Elfving 1952 for one column). It holds also where M is singular.

    Several rigs at once, for a design that is good on average: factors (n_rig, n_candidate, n_row, n_parameter). The
    value is then the sum over the rigs, and the bound holds for the sum: it is the problem above with the rigs'
    parameters beside each other, each rig's M a block of its own.
    """
    each = factors if factors.ndim == 4 else factors[None]

    def gains(weights: FloatArray) -> tuple[FloatArray, float]:
        h = _inverse(information(each, weights)) @ wanted
        gain = ((each @ h[:, None]) ** 2).sum(axis=(0, 2, 3))
        return gain, float((wanted * h).sum())

    def step(weights: FloatArray) -> FloatArray:
        gain, _ = gains(weights)
        return np.asarray(gain / max(float(weights @ gain), np.finfo(float).tiny))

    weights, rounds = _solve(each.shape[1], step, 0.5)
    gain, value = gains(weights)
    bound = value**2 / float(gain.max())
    return Design(
        criterion="c" if wanted.shape[1] == 1 and len(each) == 1 else "L",
        weights=weights,
        value=value,
        bound=bound,
        efficiency=bound / value,
        sensitivity=gain / value,
        rounds=rounds,
    )
