"""Maximum likelihood of the fall of contrast with hold, on the exact distribution of squared amplitudes."""

import numpy as np
from scipy import special

from planner.analysis.amplitude import noise_nodes, power_cdf
from planner.analysis.curve_fit import hessian, maximise, profile_interval
from planner.analysis.decay import FASTEST, Decay, as_times, log_slopes, need_two_holds, search_limits
from planner.analysis.holds import HoldContrast
from planner.analysis.shapes import EXPONENTIAL, Shape, log_curve
from planner.arrays import FloatArray
from planner.errors import NotEnoughData

ZERO_TEST = 0.01


def power_log_density(power: FloatArray, dof: FloatArray, ncp: FloatArray) -> FloatArray:
    """Log density of noncentral chi-squared by its saddlepoint, up to a constant; shapes broadcast.

    Exact for no noncentrality up to the constant (Stirling's), and in the limit of a large one; in between the
    constant wanders by less than 1/(6 dof).

    References:
        Daniels, Ann. Math. Stat. 25, 631 (1954) (from memory); checked here against scipy's ncx2.
    """
    power = np.maximum(power, 1e-12)
    u = (dof + np.sqrt(dof**2 + 4 * ncp * power)) / (2 * power)
    t = 0.5 * (1 - u)
    curvature = 2 * dof / u**2 + 4 * ncp / u**3
    return np.asarray(ncp * t / u - 0.5 * dof * np.log(u) - t * power - 0.5 * np.log(curvature))


def expected_squared(holds: HoldContrast, shape: Shape, parameters: FloatArray) -> FloatArray:
    """Squared contrast that the curve gives at each hold, (n_hold,), kept within what a number can hold."""
    return np.exp(np.clip(2 * log_curve(shape, parameters, holds.hold_s), -80, 20))


class ContrastLikelihood:
    """Log likelihood of the holds' powers given the true contrast of each, the estimated noise averaged over."""

    def __init__(self, holds: HoldContrast, shape: Shape) -> None:
        self.shape = shape
        sizes = [noise_nodes(float(dof)) for dof in holds.noise_dof]
        most = max(len(nodes) for nodes, _ in sizes)
        self.holds = holds
        self.nodes = np.ones((len(holds), most))
        self.log_weights = np.full((len(holds), most), -np.inf)
        for h, (nodes, weights) in enumerate(sizes):
            self.nodes[h, : len(nodes)] = nodes
            with np.errstate(divide="ignore"):
                self.log_weights[h, : len(nodes)] = np.log(weights * nodes)
        self.dof: FloatArray = np.asarray(2.0 * holds.fringes[:, None])
        self.power: FloatArray = np.asarray(holds.power[:, None] * self.nodes)

    def per_hold(self, squared_contrast: FloatArray) -> FloatArray:
        """Log likelihood of each hold if its squared contrast were this, (n_hold,)."""
        ncp = (squared_contrast / 4 * self.holds.weight / self.holds.noise)[:, None] * self.nodes
        each = self.log_weights + power_log_density(self.power, self.dof, ncp)
        largest = each.max(axis=1)
        return np.asarray(largest + np.log(np.exp(each - largest[:, None]).sum(axis=1)))

    def __call__(self, parameters: FloatArray) -> float:
        return float(self.per_hold(expected_squared(self.holds, self.shape, parameters)).sum())


def _first_guess(hold_s: FloatArray, squared: FloatArray, variance: FloatArray) -> tuple[float, float]:
    """Log amplitude and rate of the best exponential for squared values, by a scan of rates; exact in amplitude."""
    span = hold_s.max() - hold_s.min()
    gap = np.diff(np.unique(hold_s)).min()
    rates = np.concatenate([[0.0], np.geomspace(0.02 / span, FASTEST / 3 / gap, 120)])
    shape = np.exp(-2 * rates[:, None] * (hold_s - hold_s.min())[None, :])
    top = np.maximum((shape * squared / variance).sum(1) / (shape**2 / variance).sum(1), 1e-12)
    cost = ((squared - top[:, None] * shape) ** 2 / variance).sum(1)
    best = int(cost.argmin())
    return 0.5 * float(np.log(top[best])) + float(rates[best] * hold_s.min()), float(rates[best])


def fit_contrast_decay(holds: HoldContrast, *, shape: Shape = EXPONENTIAL, level: float = 0.95) -> Decay:
    """The curve that makes the holds' squared amplitudes likeliest, and the interval of its 1/e time.

    Holds whose fringe has vanished count as what they are, so they neither pull the fit up (the Rice bias) nor need to
    be left out. The interval is the profile likelihood's, widened or narrowed by how much more or less the packets of a
    hold scatter than white noise would make them.

    Args:
        holds: contrast per hold. shape: how contrast falls. level: coverage of the intervals.

    Returns:
        Decay; times in s, contrast without unit.

    Raises:
        NotEnoughData: fewer than two holds, no contrast at any hold, or contrast that grows with hold.

    References:
        Profile likelihood with robust scale: Rotnitzky and Jewell, Biometrika 77, 485 (1990) (from memory).
    """
    need_two_holds(holds.hold_s, "contrast")
    # the smallest of many p values is small by chance; Bonferroni keeps the stated level over all holds
    if holds.p_zero.min() * len(holds) > ZERO_TEST:
        raise NotEnoughData(
            "no hold shows a fringe that stands out of the noise (smallest p "
            f"{holds.p_zero.min():.2g} over {len(holds)} holds): there is no contrast whose decay could be fitted"
        )
    if len(holds) < 2 + len(shape.start):
        raise NotEnoughData(f"{len(holds)} holds cannot fix {shape.words}: it has {2 + len(shape.start)} parameters")
    likelihood = ContrastLikelihood(holds, shape)
    best, scale = likeliest(likelihood)
    bread: FloatArray = np.asarray(np.linalg.inv(_positive(-hessian(likelihood, best, 0.3 * scale))))
    factor, freedom = _scatter_factor(likelihood, best, bread)
    covariance: FloatArray = bread * factor
    errors = np.sqrt(np.diag(covariance))
    step = special.stdtrit(freedom, 0.5 + level / 2) if np.isfinite(freedom) else special.ndtri(0.5 + level / 2)
    limits = search_limits(holds.hold_s)
    low_rate, high_rate = profile_interval(
        likelihood, best, errors, index=1, drop=0.5 * factor * step**2, limits=limits
    )
    if high_rate <= 0:
        raise NotEnoughData(
            "contrast grows with hold, beyond its error: no coherence time describes this; look for a hold setting "
            "that changes something else too"
        )
    low_s, high_s = as_times(low_rate, high_rate, limits)
    goodness = _goodness(holds, expected_squared(holds, shape, best)) / max(factor, 1.0)
    dof = len(holds) - len(best)
    return Decay(
        shape=shape,
        parameters=best,
        covariance=covariance,
        log_likelihood=likelihood(best),
        start=float(np.exp(best[0])),
        start_low=float(np.exp(best[0] - step * errors[0])),
        start_high=float(np.exp(best[0] + step * errors[0])),
        time_s=float(1 / best[1]) if best[1] > 0 else np.inf,
        low_s=low_s,
        high_s=high_s,
        level=level,
        goodness=goodness,
        goodness_dof=dof,
        goodness_p=float(special.chdtrc(dof, goodness)) if dof else np.nan,
    )


def _goodness(holds: HoldContrast, expected: FloatArray) -> float:
    """Sum of squared Gaussian equivalents of the holds' powers: chi-squared distributed at any contrast."""
    ncp = expected / 4 * holds.weight / holds.noise
    total = 0.0
    for h in range(len(holds)):
        dof, noise_dof = 2.0 * holds.fringes[h], float(holds.noise_dof[h])
        below = float(power_cdf(holds.power[h], dof, ncp[h], noise_dof))
        total += float(special.ndtri(np.clip(below, 1e-12, 1 - 1e-12))) ** 2
    return total


def _positive(matrix: FloatArray) -> FloatArray:
    """The matrix with eigenvalues held above rounding, so that a flat direction gives a large, finite variance."""
    values, vectors = np.linalg.eigh(matrix)
    return np.asarray((vectors * np.maximum(values, 1e-9 * abs(values).max())) @ vectors.T)


def likeliest(likelihood: ContrastLikelihood) -> tuple[FloatArray, FloatArray]:
    """The likeliest parameters and about one standard error of each."""
    holds, shape = likelihood.holds, likelihood.shape
    guess = np.array(_first_guess(holds.hold_s, holds.squared, holds.expected_squared_variance(holds.squared)))
    expected = expected_squared(holds, EXPONENTIAL, guess)
    slope = 2 * expected[:, None] * np.stack([np.ones(len(holds)), -holds.hold_s], axis=1)
    information = slope.T @ (slope / holds.expected_squared_variance(expected)[:, None])
    scale = np.sqrt(np.diag(np.linalg.pinv(information)))
    scale = np.clip(scale, 1e-6, [1.0, 1.0 / (holds.hold_s.max() - holds.hold_s.min()) + abs(guess[1])])
    scale = np.concatenate([scale, np.ones(len(shape.start))])
    best = maximise(likelihood, np.concatenate([guess, shape.start]), scale)
    if shape.start:  # a simplex can stall in a curved valley: begin again from where it stopped
        best = maximise(likelihood, best, scale)
    return best, scale


def _scatter_factor(likelihood: ContrastLikelihood, best: FloatArray, bread: FloatArray) -> tuple[float, float]:
    """How many times the white-noise variance the rate's variance is, from packet scatter; and its freedom.

    1 with infinite freedom where too few packets repeat a hold to say.
    """
    holds = likelihood.holds
    expected = expected_squared(holds, likelihood.shape, best)
    slope = 2 * expected[:, None] * log_slopes(likelihood.shape, best, holds.hold_s, np.sqrt(np.diag(bread)))
    white = holds.expected_squared_variance(expected)
    pull = (bread @ (slope / white[:, None]).T)[1] ** 2  # of the rate, per unit variance of each hold
    repeats = holds.fringes - 1.0
    seen = np.isfinite(holds.squared_scatter) & (repeats > 0)
    parts = pull[seen] * white[seen]
    if not seen.any() or parts.sum() < 0.5 * (pull * white).sum():
        return 1.0, np.inf
    measured = pull[seen] * holds.squared_scatter[seen]
    freedom = float(parts.sum() ** 2 / (parts**2 / repeats[seen]).sum())
    if freedom < 4:
        return 1.0, np.inf
    return float(measured.sum() / parts.sum()), freedom
