"""The noise of each hold, steadied by what the other holds say.

Each hold has few packets, so its own residuals know its noise to some 30 %; and noise that wanders from hold to hold by
chance makes the weights of a decay fit wander too. Noise changes smoothly with hold (fewer atoms, more phase noise), so
each hold's estimate is drawn towards a smooth curve through all of them, by as much as their scatter about the curve
says that they agree with it.
"""

import numpy as np
from scipy import optimize, special

from planner.arrays import FloatArray

# Holds with a noise of their own that are needed for a straight line and for a parabola in the logarithm of the hold.
FOR_LINE, FOR_PARABOLA = 4, 6
LEAST = 1e-12  # counts of atoms are never exactly noiseless; this keeps a made-up perfect fringe finite


def steady_noise(residual: FloatArray, dof: FloatArray, hold_s: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Noise variance of each hold and its degrees of freedom.

    Args:
        residual: sum of squares over the expected variance, (n_hold,). dof: its degrees of freedom, (n_hold,), some
        above 0. hold_s: (n_hold,), ascending.

    Returns:
        Variance over the expected one, and the degrees of freedom that it is worth, (n_hold,) each.

    References:
        Smyth, Stat. Appl. Genet. Mol. Biol. 3, 3 (2004), sections 6.1 and 6.2: moderated variances with a trend (from
        memory).
    """
    known = dof > 0
    own = np.maximum(np.where(known, residual / np.maximum(dof, 1), 1.0), LEAST)
    if known.sum() < 2:
        total = residual.sum() / dof.sum()
        return np.full(len(dof), max(float(total), LEAST)), np.full(len(dof), float(dof.sum()))
    half = dof[known] / 2
    level = np.log(own[known]) - special.digamma(half) + np.log(half)
    spread = special.polygamma(1, half)
    terms = 1 + (known.sum() >= FOR_LINE) + (known.sum() >= FOR_PARABOLA)
    x = np.log(hold_s + max(float(np.median(hold_s)) * 1e-3, 1e-9))
    basis = np.vander((x - x.mean()) / max(float(np.ptp(x)), 1e-9), int(terms), increasing=True)
    root = 1 / np.sqrt(spread)
    curve = basis @ np.linalg.lstsq(basis[known] * root[:, None], level * root, rcond=None)[0]
    left = int(known.sum()) - int(terms)
    excess = 0.0 if left < 1 else float(((level - curve[known]) ** 2).sum() / left - spread.mean())
    # the curve itself is no better known than all residuals together allow
    most = float(dof.sum()) / int(terms)
    prior_dof = min(most, 2 * _inverse_trigamma(excess)) if excess > 0 else most
    prior = np.exp(curve)
    if prior_dof < most:  # the mean of the prior of a variance is above its centre on the logarithm
        prior = np.exp(curve + special.digamma(prior_dof / 2) - np.log(prior_dof / 2))
    noise = (prior_dof * prior + dof * own * known) / (prior_dof + dof)
    return np.maximum(noise, LEAST), np.minimum(prior_dof + dof, max(most, float(dof.max())))


def _inverse_trigamma(value: float) -> float:
    return float(np.exp(optimize.brentq(lambda log_x: special.polygamma(1, np.exp(log_x)) - value, -12.0, 25.0)))
