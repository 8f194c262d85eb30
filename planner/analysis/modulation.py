"""Contrast that comes and goes with hold: is there a modulation, of a known period or of any?

Beside the fall of contrast C(T) a revival makes C(T) [1 + m cos(2 pi T / P + psi)]. Squared contrasts are unbiased down
to no contrast at all, so what is fitted is r = (C^2 / fall^2 - 1) / 2, which is about m cos(...), together with small
changes of the fall's own start and rate. The gain of a period is how much the sum of squares falls by its cosine and
sine: chi-squared with two degrees of freedom if there is nothing. Over a range of periods the largest gain counts, and
how large it gets by chance is drawn from the same holds and errors.
"""

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from planner.analysis.contrast_decay import expected_squared
from planner.analysis.decay import Decay, log_slopes
from planner.analysis.holds import HoldContrast
from planner.arrays import FloatArray
from planner.errors import InputError, NotEnoughData

DRAWS = 20_000
A_PERIOD = 12  # periods tried within one step of 1 / span in frequency
MOST_PERIODS = 20_000


@dataclass(frozen=True, kw_only=True)
class Modulation:
    """The best period of those looked at; arrays of shape (n_period,)."""

    periods_s: FloatArray
    gains: FloatArray  # fall of the sum of squares over the mean square left
    period_s: float
    depth: float
    depth_error: float
    depth_limit: float  # upper limit at `level` for a modulation of that period
    gain: float
    scatter: float  # relative, of holds about the fall beyond their packets' noise
    p: float  # of so large a gain anywhere among the periods, if there is no modulation
    alarm_gain: float  # that 1 % of nights without a modulation would pass
    level: float


def search_modulation(
    holds: HoldContrast,
    fall: Decay,
    *,
    period_s: float | None = None,
    shortest_s: float | None = None,
    longest_s: float | None = None,
    seed: int = 0,
    level: float = 0.95,
) -> Modulation:
    """A modulation of contrast with hold, at one period or at any in a range.

    Args:
        holds: contrast per hold. fall: its fitted decay. period_s: the period, if it is known. shortest_s, longest_s:
        the range otherwise; by default twice the median distance of holds to the whole span. seed: of the draws that
        give the false-alarm level of a range.

    Returns:
        Modulation.

    Raises:
        NotEnoughData: fewer holds than the fall's parameters and three more. InputError: a range that is none.

    References:
        Periodogram with other terms fitted beside it: Zechmeister and Kuerster, Astron. Astrophys. 496, 577 (2009)
        (from memory; checked here against astropy's).
    """
    nuisance = len(fall.parameters)
    if len(holds) < nuisance + 3:
        raise NotEnoughData(f"{len(holds)} holds: a modulation beside {fall.shape.words} needs {nuisance + 3} at least")
    expected = expected_squared(holds, fall.shape, fall.parameters)
    error = np.sqrt(holds.expected_squared_variance(expected)) / (2 * expected)
    change = (holds.squared / expected - 1) / 2
    slopes = log_slopes(fall.shape, fall.parameters, holds.hold_s, np.sqrt(np.diag(fall.covariance)))
    scatter = _scatter(change, error, slopes)
    error = np.hypot(error, scatter)
    value = change / error
    known, _ = np.linalg.qr(slopes / error[:, None])
    periods = np.array([period_s]) if period_s is not None else _periods(holds.hold_s, shortest_s, longest_s)
    if not (np.isfinite(periods).all() and (periods > 0).all()):
        raise InputError(f"a period is a positive time, not {period_s} s")
    basis = _basis(holds.hold_s, error, known, periods)
    freedom = len(holds) - nuisance - 2
    rest = value - known @ (known.T @ value)
    gains = _gains(basis, rest[None, :], freedom)[0]
    best = int(np.argmax(gains))
    if period_s is not None:
        p, alarm = float(special.fdtrc(2, freedom, gains[0] / 2)), 2 * float(special.fdtri(2, freedom, 0.99))
    else:
        rng = np.random.default_rng(seed)
        drawn = [rng.standard_normal((500, len(holds))) for _ in range(DRAWS // 500)]
        largest = np.concatenate([_gains(basis, one - (one @ known) @ known.T, freedom).max(axis=1) for one in drawn])
        p = float((1 + (largest >= gains[best]).sum()) / (1 + DRAWS))
        alarm = float(np.quantile(largest, 0.99))
    depth, depth_error = _depth(holds.hold_s, error, known, value, float(periods[best]))
    excess = float(rest @ rest) / (freedom + gains[best])
    # the largest depth that leaves so small an F ratio a chance of 1 - level
    ratio = (depth / depth_error) ** 2 / excess / 2
    limit = depth_error * float(np.sqrt(excess * special.ncfdtrinc(2.0, float(freedom), 1 - level, ratio)))
    return Modulation(
        periods_s=periods,
        gains=gains,
        period_s=float(periods[best]),
        depth=depth,
        depth_error=depth_error * float(np.sqrt(excess)),
        depth_limit=limit,
        gain=float(gains[best]),
        scatter=scatter,
        p=p,
        alarm_gain=alarm,
        level=level,
    )


def _scatter(change: FloatArray, error: FloatArray, slopes: FloatArray) -> float:
    """Scatter that makes the sum of squares about the fall what it should be; 0 if it is no larger without.

    References:
        Paule and Mandel, J. Res. Natl. Bur. Stand. 87, 377 (1982) (from memory).
    """
    freedom = len(change) - slopes.shape[1]

    def left(variance: float) -> float:
        root = np.sqrt(error**2 + variance)
        known, _ = np.linalg.qr(slopes / root[:, None])
        rest = change / root - known @ (known.T @ (change / root))
        return float(rest @ rest - freedom)

    if left(0.0) <= 0:
        return 0.0
    top = float((change**2).sum() + (error**2).max())  # with so much no sum of squares is left to speak of
    found = top if left(top) >= 0 else float(optimize.brentq(left, 0.0, top))
    return float(np.sqrt(found))


def _periods(hold_s: FloatArray, shortest_s: float | None, longest_s: float | None) -> FloatArray:
    span = float(np.ptp(hold_s))
    low = 2 * float(np.median(np.diff(np.sort(hold_s)))) if shortest_s is None else shortest_s
    high = span if longest_s is None else longest_s
    if not 0 < low < high:
        raise InputError(f"periods from {low:g} s to {high:g} s: the shortest must be positive and below the longest")
    count = int(np.ceil(A_PERIOD * span * (1 / low - 1 / high))) + 2
    if count > MOST_PERIODS:
        raise InputError(
            f"periods from {low:g} s to {high:g} s at holds over {span:g} s are {count:,} to look at; {MOST_PERIODS:,} "
            f"at most: raise the shortest period to {span * A_PERIOD / MOST_PERIODS:.2g} s or more"
        )
    return np.asarray(1 / np.linspace(1 / low, 1 / high, count))


def _basis(hold_s: FloatArray, error: FloatArray, known: FloatArray, periods: FloatArray) -> FloatArray:
    """Orthonormal cosine and sine of each period, what the fall can take up taken off: (n_hold, n_period, 2)."""
    turn = 2 * np.pi * hold_s[:, None] / periods[None, :]
    waves = np.stack([np.cos(turn), np.sin(turn)], axis=2) / error[:, None, None]
    waves -= np.einsum("hk,gk,gpw->hpw", known, known, waves)
    first = waves[:, :, 0]
    size = np.linalg.norm(first, axis=0)
    first = first / np.where(size > 1e-9, size, np.inf)
    second = waves[:, :, 1] - first * (first * waves[:, :, 1]).sum(axis=0)
    size = np.linalg.norm(second, axis=0)
    second = second / np.where(size > 1e-9, size, np.inf)
    return np.stack([first, second], axis=2)


def _gains(basis: FloatArray, rest: FloatArray, freedom: int) -> FloatArray:
    """Gain of each period for each row of values (n, n_hold) without what the fall takes up: (n, n_period)."""
    fallen = (rest @ basis[:, :, 0]) ** 2 + (rest @ basis[:, :, 1]) ** 2
    left = (rest**2).sum(axis=1)[:, None] - fallen
    return np.asarray(freedom * fallen / np.maximum(left, 1e-300))


def _depth(
    hold_s: FloatArray, error: FloatArray, known: FloatArray, value: FloatArray, period_s: float
) -> tuple[float, float]:
    """Depth of the modulation and the mean standard error of its two quadratures."""
    turn = 2 * np.pi * hold_s / period_s
    waves = np.stack([np.cos(turn), np.sin(turn)], axis=1) / error[:, None]
    waves -= known @ (known.T @ waves)
    information = waves.T @ waves
    covariance = np.linalg.pinv(information)
    quadratures = covariance @ (waves.T @ value)
    return float(np.hypot(*quadratures)), float(np.sqrt(np.trace(covariance) / 2))
