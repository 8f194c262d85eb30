"""How sure an amplitude is: intervals and tests that stay right down to no amplitude at all.

One fringe gives two quadratures with equal, independent noise, so its squared amplitude over the noise variance is
noncentral chi-squared with 2 degrees of freedom (its root is Rice distributed); several fringes of one amplitude and
any phases add to one with 2 degrees of freedom each. `power` below is that sum: sum |q|^2 / (noise variance of one
quadrature), and `ncp` its noncentrality: sum amplitude^2 / (noise variance).

Where the noise is itself estimated from residuals, the distribution is averaged over what the residuals leave open.
That average is exact at amplitude zero (it is then the F distribution) and far from zero (Student's t).

References:
    Rice, Bell Syst. Tech. J. 24, 46 (1945) (from memory); Sankaran, Biometrika 50, 199 (1963) (from memory);
    Weerahandi, J. Am. Stat. Assoc. 84, 602 (1989), generalised p-values (from memory).
"""

from functools import lru_cache

import numpy as np
from scipy import special
from scipy.interpolate import PchipInterpolator
from scipy.optimize.elementwise import find_root

from planner.arrays import FloatArray
from planner.errors import InputError

# Above this noncentrality Sankaran's form is within 3e-6 of the exact distribution and does not slow down.
LARGE_NCP = 2000.0
# With this many residual degrees of freedom the noise counts as known: its own error changes an interval by < 0.1 %.
KNOWN_NOISE_DOF = 5000.0
NEGLECTED = 1e-8  # probability left out at each end of the noise's own distribution
TABLE_TOP = 14.0  # in units of the noise; beyond it one fringe's amplitude is Gaussian to 1e-3 of the noise
TABLE_SIZE = 420
TOLERANCES = {"xatol": 1e-9, "xrtol": 1e-9, "fatol": 0.0, "frtol": 0.0}


def chi_squared_cdf(power: FloatArray, dof: float, ncp: FloatArray) -> FloatArray:
    """Noncentral chi-squared distribution function, for any noncentrality.

    Args:
        power: where to take it; any shape. dof: degrees of freedom. ncp: noncentrality, broadcast against `power`.

    Returns:
        Probability, shape of the broadcast arguments. Exact below a noncentrality of 2000, within 3e-6 above.

    References:
        Sankaran, Biometrika 50, 199 (1963), second approximation (from memory; checked here against scipy's ncx2).
    """
    power, ncp = np.broadcast_arrays(np.asarray(power, float), np.asarray(ncp, float))
    large = ncp > LARGE_NCP
    out = np.empty(power.shape)
    out[~large] = special.chndtr(power[~large], dof, ncp[~large])
    if large.any():
        mean = dof + ncp[large]
        h = 1 - 2 * mean * (dof + 3 * ncp[large]) / (3 * (dof + 2 * ncp[large]) ** 2)
        p = (dof + 2 * ncp[large]) / mean**2
        m = (h - 1) * (1 - 3 * h)
        shift = 1 + h * p * (h - 1 - 0.5 * (2 - h) * m * p)
        out[large] = special.ndtr(((power[large] / mean) ** h - shift) / (h * np.sqrt(2 * p) * (1 + 0.5 * m * p)))
    return out


@lru_cache(maxsize=256)
def noise_nodes(noise_dof: float) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights that average over (true noise variance / estimated one)^-1 = chi-squared(noise_dof)/noise_dof.

    Args:
        noise_dof: degrees of freedom of the noise estimate; inf for a known noise.

    Returns:
        Two arrays of shape (n_node,): the ratio, and weights that add to 1.
    """
    if noise_dof <= 0:
        raise InputError("the noise has no degrees of freedom left: it cannot be estimated from these residuals")
    if noise_dof >= KNOWN_NOISE_DOF:
        return np.ones(1), np.ones(1)
    # The trapezoidal rule on the logarithm of the ratio: its density is smooth there and dies off on both sides, so
    # the rule converges faster than any power of the step.
    ends = special.chdtri(noise_dof, np.array([1 - NEGLECTED, NEGLECTED])) / noise_dof
    step = min(0.3, 0.35 * np.sqrt(2 / noise_dof))
    logs = np.arange(np.log(ends[0]), np.log(ends[1]) + step, step)
    log_density = noise_dof / 2 * (logs - np.exp(logs))
    weights = np.exp(log_density - log_density.max())
    return np.exp(logs), weights / weights.sum()


def power_cdf(power: FloatArray, dof: float, ncp: FloatArray, noise_dof: float = np.inf) -> FloatArray:
    """Probability of a power no larger than `power`, the estimated noise averaged over.

    Args:
        power: measured power in units of the estimated noise variance. dof: 2 a fringe. ncp: noncentrality in the same
        units. noise_dof: of the noise estimate.

    Returns:
        Probability, shape of the broadcast `power` and `ncp`. At ncp = 0 it is the F distribution of power/dof.
    """
    nodes, weights = noise_nodes(noise_dof)
    power, ncp = np.broadcast_arrays(np.asarray(power, float), np.asarray(ncp, float))
    values = chi_squared_cdf(power[..., None] * nodes, dof, ncp[..., None] * nodes)
    return np.asarray(values @ weights)


def zero_test(power: FloatArray, dof: float, noise_dof: float = np.inf) -> FloatArray:
    """p value of "there is no amplitude": exact, chi-squared for a known noise and F for an estimated one.

    Args:
        power: sum |q|^2 / (estimated noise variance of one quadrature), any shape. dof: 2 a fringe. noise_dof: of the
        noise estimate.

    Returns:
        p value, shape of `power`.
    """
    power = np.asarray(power, float)
    if np.isinf(noise_dof):
        return np.asarray(special.chdtrc(dof, power))
    return np.asarray(special.fdtrc(dof, noise_dof, power / dof))


def _lower_tail(ncp: FloatArray, dof: float, miss: float) -> FloatArray:
    """How much of the miss probability lies in the lower tail.

    None up to where the amplitude adds one standard deviation of the noise's own power, so that no interval is empty
    or pretends to know a small amplitude to better than the noise; half of it well above the noise. It never falls as
    the amplitude grows, so that both ends of the interval grow with the measured power.
    """
    excess = np.maximum(ncp / np.sqrt(2 * dof) - 1, 0.0)
    return np.asarray(miss / 2 * -np.expm1(-excess))


def _solve(power: FloatArray, dof: float, noise_dof: float, level: float) -> tuple[FloatArray, FloatArray]:
    """Both ends of the interval of the root of the noncentrality, by root finding; shape of `power`."""
    miss = 1 - level
    power = np.maximum(power, 1e-9)  # no measured power is zero, and at zero the root below is not a crossing

    def lower_excess(root: FloatArray, power: FloatArray) -> FloatArray:
        return power_cdf(power, dof, root**2, noise_dof) - (level + _lower_tail(root**2, dof, miss))

    def upper_excess(root: FloatArray, power: FloatArray) -> FloatArray:
        return power_cdf(power, dof, root**2, noise_dof) - _lower_tail(root**2, dof, miss)

    # how much larger than its estimate the noise may be, and six of its standard deviations above the measured root
    slack = 1.0 if np.isinf(noise_dof) else float(noise_dof / special.chdtri(noise_dof, 1 - miss / 4)) ** 0.5
    top = np.sqrt(power) + 6 * slack + dof**0.5
    begin = np.full(power.shape, (2 * dof) ** 0.25)  # up to here nothing lies in the lower tail
    upper = find_root(upper_excess, (begin, top), args=(power,), tolerances=TOLERANCES).x
    lower = np.zeros(power.shape)
    above = power_cdf(power, dof, np.zeros(power.shape), noise_dof) > level
    if above.any():
        start = np.zeros(int(above.sum()))
        lower[above] = find_root(lower_excess, (start, top[above]), args=(power[above],), tolerances=TOLERANCES).x
    return lower, upper


@lru_cache(maxsize=64)
def _table(dof: float, noise_dof: float, level: float) -> tuple[PchipInterpolator, PchipInterpolator]:
    roots = np.linspace(0.0, TABLE_TOP, TABLE_SIZE)
    lower, upper = _solve(roots**2, dof, noise_dof, level)
    return PchipInterpolator(roots, lower), PchipInterpolator(roots, upper)


def amplitude_interval(
    power: FloatArray, dof: float = 2.0, noise_dof: float = np.inf, level: float = 0.95
) -> tuple[FloatArray, FloatArray]:
    """Interval of root noncentrality: of amplitude over its error, for one fringe.

    Never empty, starts at zero where zero fits, and covers `level` for every amplitude, zero included: at amplitude
    zero the acceptance region is the lowest `level` of the powers, far above it the central one.

    Args:
        power: sum |q|^2 / (estimated noise variance of one quadrature), shape (n,). dof: 2 a fringe. noise_dof: of
        the noise estimate. level: coverage.

    Returns:
        Lower and upper end in units of the estimated noise, each of shape (n,).
    """
    power = np.atleast_1d(np.asarray(power, float))
    if not np.isfinite(power).all() or (power < 0).any():
        raise InputError("a power is not a finite number at or above zero: the fit before it did not succeed")
    if len(power) <= TABLE_SIZE or dof != 2:
        return _solve(power, dof, noise_dof, level)
    roots = np.sqrt(power)
    inside = roots < TABLE_TOP
    lower, upper = np.empty(power.shape), np.empty(power.shape)
    low_table, high_table = _table(dof, noise_dof, level)
    lower[inside], upper[inside] = low_table(roots[inside]), high_table(roots[inside])
    if not inside.all():
        # far above the noise a root power is the amplitude's root plus half a noise variance, with Gaussian error
        step = special.ndtri(0.5 + level / 2) if np.isinf(noise_dof) else special.stdtrit(noise_dof, 0.5 + level / 2)
        far = roots[~inside]
        lower[~inside] = np.sqrt(np.maximum(np.maximum(far - step, 0.0) ** 2 - (dof - 1), 0.0))
        upper[~inside] = np.sqrt((far + step) ** 2 - (dof - 1))
    return lower, upper


def debiased(power: FloatArray, dof: float = 2.0) -> tuple[FloatArray, FloatArray]:
    """Root noncentrality without the upward (Rice) bias, and the unbiased noncentrality.

    Args:
        power: sum |q|^2 / (estimated noise variance of one quadrature), any shape. dof: 2 a fringe.

    Returns:
        `root`: sqrt(max(0, power - (dof - 1))), its mean within 0.05 noise units of the truth from 2 noise units up
        for one fringe; `square`: power - dof, unbiased everywhere, and therefore sometimes negative.
    """
    power = np.asarray(power, float)
    return np.sqrt(np.maximum(power - (dof - 1), 0.0)), power - dof
