"""How sure a deviation is: equivalent degrees of freedom by kind of noise, and the kind of noise from the series.

Noise of a series has the spectrum f^alpha: 0 is white, -1 flicker, -2 a random walk; +1 and +2 occur where each value
is the difference of two readings.

References:
    C. A. Greenhall and W. J. Riley, "Uncertainty of stability variances based on finite differences", 35th PTTI meeting
    (2003); W. J. Riley and C. A. Greenhall, "Power law noise identification using the lag 1 autocorrelation", 18th EFTF
    (2004); both as in NIST SP 1065, sections 5.3 to 5.5 (from memory; checked against exact covariances, a reference
    package and the handbook's example).
"""

from math import comb

import numpy as np
from scipy import special

from planner.arrays import FloatArray
from planner.errors import InputError

KINDS = {2: "white phase", 1: "flicker phase", 0: "white", -1: "flicker", -2: "walk", -3: "flicker walk", -4: "run"}
SHORT = 8  # factors beyond which samples and means of a walk have the same freedom to 1 %
LEAST_AVERAGES = 30  # below this the lag-1 autocorrelation does not tell the kinds apart (SP 1065, section 5.5.6)


def degrees_of_freedom(
    kind: int, order: int, factor: int, values: int, *, modified: bool = False, overlapping: bool = True
) -> float:
    """Equivalent chi-squared degrees of freedom of a stability variance.

    The whole sum of Greenhall and Riley is taken, without their tables for large arguments. Values are exact means over
    their slots, so for alpha <= 0 the summed series is not smoothed any further (their filter factor goes to infinity);
    that is exact for white noise. Values may also be samples of a walk, which have less freedom over one or two slots:
    the smaller of the two is taken.

    Args:
        kind: alpha, -4 to 2. order: 2 for Allan's, 3 for Hadamard's variance. factor: m. values: of the series, n.
        modified: of the modified variance. overlapping: whether the estimate uses every start.

    Returns:
        Degrees of freedom; NaN if the series is too short for the factor.

    Raises:
        InputError: a kind that the variance does not converge for.
    """
    if not (-4 <= kind <= 2 and kind + 2 * order > 1):
        raise InputError(f"a variance of order {order} has no degrees of freedom for noise f^{kind}")
    smoothing, stride = (1 if modified else factor), (factor if overlapping else 1)
    span = factor / smoothing + factor * order
    terms = 1 + int(np.floor(stride * (values + 1 - span) / factor))
    if values + 1 < span or terms < 1:
        return float("nan")
    last = min(terms, (order + 1) * stride)
    lags = np.arange(last + 1)
    rough = kind <= 0 and not (modified and factor > 1)
    covariance = _difference_covariance(lags / stride, kind, order, None if rough else smoothing)
    weight = np.where((lags == 0) | (lags == last), 1.0, 2.0) * (1 - lags / terms)
    freedom = float(terms * covariance[0] ** 2 / np.sum(weight * covariance**2))
    if kind in (-2, -4) and factor <= SHORT and overlapping and not modified:
        freedom = min(freedom, _sampled_freedom(kind, order, factor, terms))
    return freedom


def _sampled_freedom(kind: int, order: int, factor: int, terms: int) -> float:
    """The same for a sampled walk (alpha -2) or summed walk (-4): exact, from the covariance of a moving average."""
    response = np.repeat([-1.0, 1.0] if order == 2 else [1.0, -2.0, 1.0], factor)
    for _ in range(-kind // 2):
        response = np.cumsum(response)
    covariance = np.correlate(response, response, "full")[len(response) - 1 :][:terms]
    lags = np.arange(len(covariance))
    weight = np.where(lags == 0, 1.0, 2.0) * (1 - lags / terms)
    return float(terms * covariance[0] ** 2 / np.sum(weight * covariance**2))


def _difference_covariance(lag: FloatArray, kind: int, order: int, smoothing: int | None) -> FloatArray:
    """Covariance, up to a factor, of order-th differences of the summed series at a lag in averaging times."""
    total = np.zeros(len(lag))
    for step in range(-order, order + 1):
        total += (-1) ** step * comb(2 * order, order + step) * _summed(lag + step, kind, smoothing)
    return total


def _summed(t: FloatArray, kind: int, smoothing: int | None) -> FloatArray:
    if smoothing is None:
        return _power_law(t, kind + 2)
    width = 1 / smoothing
    second = 2 * _power_law(t, kind) - _power_law(t - width, kind) - _power_law(t + width, kind)
    return np.asarray(smoothing**2 * second)


def _power_law(t: FloatArray, kind: int) -> FloatArray:
    """Generalised autocovariance of the twice summed noise: +-|t|^(3 - alpha), times log|t| for even powers."""
    size, power = np.abs(t), 3 - kind
    sign = -1.0 if kind in (2, -1, -2) else 1.0
    return np.asarray(sign * (special.xlogy(size**power, size) if power % 2 == 0 else size**power))


def total_degrees_of_freedom(kind: int, factor: int, values: int) -> float:
    """Degrees of freedom of the total variance; NaN for kinds that have no published form.

    References:
        SP 1065, section 5.4.3: b n / m - c (from memory).
    """
    coefficients = {0: (1.5, 0.0), -1: (1.17, 0.22), -2: (0.93, 0.36)}
    if kind not in coefficients:
        return float("nan")
    slope, offset = coefficients[kind]
    return max(slope * values / factor - offset, 1.0)


def band(value: FloatArray, freedom: FloatArray, level: float = 0.95) -> tuple[FloatArray, FloatArray]:
    """Two-sided limits of a deviation, (n,) each: the variance over its truth is chi-squared over its freedom."""
    low = value * np.sqrt(freedom / special.chdtri(freedom, (1 - level) / 2))
    high = value * np.sqrt(freedom / special.chdtri(freedom, (1 + level) / 2))
    return np.asarray(low), np.asarray(high)


def averages(values: FloatArray, factor: int) -> FloatArray:
    """Means over `factor` slots side by side, (n // factor,); NaN where no slot is filled."""
    blocks = values[: len(values) // factor * factor].reshape(-1, factor)
    held = np.isfinite(blocks)
    sums, count = np.where(held, blocks, 0.0).sum(axis=1), held.sum(axis=1)
    return np.asarray(np.where(count > 0, sums / np.maximum(count, 1), np.nan))


def lag_one(series: FloatArray) -> float:
    """Lag-1 autocorrelation of a series in which NaN means empty; pairs with an empty end do not count."""
    deviation = series - np.nanmean(series)
    pairs = deviation[1:] * deviation[:-1]
    counted = np.isfinite(pairs)
    square = np.nanmean(deviation**2)
    if not counted.any() or square <= 0:
        return float("nan")
    # the sum over n - 1 pairs over the sum over n squares, as the method has it for a series without gaps
    return float(pairs[counted].mean() / square * (1 - 1 / len(series)))


def noise_kind(values: FloatArray, factor: int, *, most_differences: int = 2) -> int | None:
    """Alpha of the noise that rules at an averaging factor; None where fewer than 30 averages are left.

    The lag-1 autocorrelation r of the averages gives a fractional order d = r / (1 + r); while that is 1/4 or more the
    averages are not stationary and are differenced once more.

    Args:
        values: one per slot, NaN where empty. most_differences: 2 for Allan's, 3 for Hadamard's variance.
    """
    series = averages(np.asarray(values, float), factor)
    if np.isfinite(series).sum() < LEAST_AVERAGES:
        return None
    for differences in range(most_differences):
        r = lag_one(series)
        if not np.isfinite(r):
            return None
        fraction = r / (1 + r)
        if fraction < 0.25 or differences == most_differences - 1:
            break
        series = np.diff(series)
    kind = -int(np.rint(2 * fraction)) - 2 * differences
    return int(np.clip(kind, -2 * (most_differences - 1), 2))
