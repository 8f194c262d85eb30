"""Shot-to-shot phase noise told from lost contrast.

Phase noise of standard deviation s lowers a fitted contrast as exp(-s^2/2), as any other loss does. But it also makes
shots scatter: much on the fringe's slopes, hardly at its top. With x = phi + theta and the fitted contrast C,

    var y = (C^2/8) (exp(s^2) - 1) [1 - exp(-s^2) cos 2x]

(exact for Gaussian phase noise), beside projection noise and technical noise that does not know the fringe. A fringe of
four equally spaced phases has one residual, in which the two cannot be told apart; fringes with more shots tell them.

Squared residuals are fitted by their expectation, not by a normal likelihood: shots near the top scatter so little that
such a likelihood would hang on the few of them whose place on the fringe is known least.
"""

from dataclasses import dataclass

import numpy as np
from scipy import special

from planner.analysis.fringe import Fringes
from planner.arrays import FloatArray, IntArray

LEAST_FREEDOM = 12  # residuals of a hold, fewer say nothing of two kinds of noise
LEAST_FRINGES = 4  # fringes, to judge by the scatter between them
STANDS_OUT = 5.0  # contrast over its error, of a fringe whose phase is known well enough to say what is slope and top
PASSES = 6  # the blur and the second harmonic depend on s themselves, weakly: each pass gains a digit
SPLIT = 0.02  # smallest share of the phase noise's pattern that may be left beside flat noise


@dataclass(frozen=True, kw_only=True)
class PhaseNoise:
    """Phase noise of one hold.

    Where the residuals cannot tell phase noise from technical noise (`told_apart` False), `sigma_rad` is what all
    excess would be if it were phase noise: an upper value, and `low_rad` is 0.
    """

    hold_s: float
    sigma_rad: float
    low_rad: float
    high_rad: float
    technical: float  # variance of technical noise over projection noise
    told_apart: bool
    freedom: int  # residuals

    @property
    def contrast_factor(self) -> float:
        """What the fitted contrast would be multiplied by without this noise: exp(s^2/2)."""
        return float(np.exp(self.sigma_rad**2 / 2))


def phase_noise(
    theta: FloatArray,
    y: FloatArray,
    variance: FloatArray,
    group: IntArray,
    fringes: Fringes,
    which: IntArray,
    hold_s: FloatArray,
    contrast: FloatArray,
    *,
    level: float = 0.95,
) -> tuple[PhaseNoise, ...]:
    """Phase noise of each hold that can say something about it.

    Args:
        theta, y, variance, group: as handed to `fit_fringes`, (n_shot,); variance: projection and known detection
        noise. fringes: the fit. which: hold of each fringe, (n_fringe,). hold_s: (n_hold,). contrast: of each hold,
        without its upward bias, (n_hold,), NaN where there is none. level: coverage of the intervals.

    Returns:
        One entry for each hold whose fringes stand out and leave LEAST_FREEDOM residuals.

    References:
        The variance is the second moment of cos(x + e), e Gaussian. Fit of squared residuals by their expectation: Rao,
        J. Multivar. Anal. 1, 445 (1971), with equal weights; interval from the scatter between fringes (from memory).
    """
    order = np.argsort(group, kind="stable")
    edges = np.searchsorted(group[order], np.arange(len(fringes) + 1))
    with np.errstate(divide="ignore", invalid="ignore"):
        clear = contrast[which] / (2 * np.sqrt(fringes.quadrature_variance)) > STANDS_OUT
    use = np.flatnonzero(fringes.solved & (fringes.dof > 0) & clear)
    found = []
    for h in np.unique(which[use]).tolist():
        mine = use[which[use] == h]
        if fringes.dof[mine].sum() < LEAST_FREEDOM or len(mine) < LEAST_FRINGES:
            continue
        parts = []
        for size in np.unique(fringes.shots[mine]).tolist():  # equal fringes are worked together
            rows = np.stack([order[edges[f] : edges[f + 1]] for f in mine[fringes.shots[mine] == size]])
            phi = fringes.phase_rad[group[rows[:, 0]]]
            parts.append(_Part(theta=theta[rows], y=y[rows], variance=variance[rows], x=phi[:, None] + theta[rows]))
        found.append(_one_hold(parts, float(hold_s[h]), float(contrast[h]), level))
    return tuple(found)


class _Part:
    """Fringes of equally many shots: arrays (n_fringe, n_shot), and squared residuals with what is expected of them."""

    def __init__(self, *, theta: FloatArray, y: FloatArray, variance: FloatArray, x: FloatArray) -> None:
        self.x, self.variance = x, variance
        design = np.stack([np.ones_like(theta), np.cos(theta), np.sin(theta)], axis=2)
        free = np.linalg.svd(design)[0][:, :, 3:]
        # expected squared residuals are this matrix (n, shot, shot) times the shots' variances
        rest = np.einsum("nsf,ntf->nst", free, free)
        self.expects = rest**2
        self.squared = np.einsum("nst,nt->ns", rest, y) ** 2

    def patterns(self, contrast: float, technical: float, squared: float) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Expected squared residuals (n, shot) of projection noise, and of phase noise per unit of its strength."""
        size = contrast**2 / 8 * np.expm1(squared)
        flat, twice = self.variance * (1 + technical), np.exp(-squared) * np.cos(2 * self.x)
        # the fitted phase has an error of its own, which blurs what is slope and what is top
        error = (
            4 * ((flat + size * (1 - twice)) * np.sin(self.x) ** 2).mean(axis=1) / self.x.shape[1] / (contrast**2 / 4)
        )
        blurred = twice * np.exp(-2 * np.minimum(error, 1.0))[:, None]
        projection = np.einsum("nst,nt->ns", self.expects, self.variance)
        return projection, np.einsum("nst,nt->ns", self.expects, 1 - blurred), self.squared - projection


def _one_hold(parts: list[_Part], hold_s: float, contrast: float, level: float) -> PhaseNoise:
    firsts = np.cumsum([0, *(len(part.x) for part in parts)])[:-1]
    owner = np.concatenate(
        [np.repeat(first + np.arange(len(part.x)), part.x.shape[1]) for first, part in zip(firsts, parts, strict=True)]
    )
    technical, squared, told_apart = 0.0, 0.0, True
    for _ in range(PASSES):
        patterns = [part.patterns(contrast, technical, squared) for part in parts]
        flat, turning, excess = (np.concatenate([one[k].ravel() for one in patterns]) for k in range(3))
        # what of the phase noise's pattern is not flat noise
        own = turning - flat * (flat @ turning) / (flat @ flat)
        told_apart = bool(own @ own > SPLIT * (turning @ turning))
        probe = own if told_apart else turning
        weight = probe / (probe @ turning)
        strength = float(weight @ excess)
        technical = max(float(flat @ (excess - strength * turning)) / float(flat @ flat), 0.0) if told_apart else 0.0
        squared = _squared(strength, contrast)
    deviation = np.bincount(owner, weights=weight * (excess - strength * turning - technical * flat))
    count = len(deviation)
    step = float(special.stdtrit(count - 2, 0.5 + level / 2))
    error = step * float(np.sqrt(count / (count - 2) * (deviation**2).sum()))
    return PhaseNoise(
        hold_s=hold_s,
        sigma_rad=float(np.sqrt(squared)),
        low_rad=float(np.sqrt(_squared(strength - error, contrast))) if told_apart else 0.0,
        high_rad=float(np.sqrt(_squared(strength + error, contrast))),
        technical=technical,
        told_apart=told_apart,
        freedom=int(sum(part.x.shape[0] * (part.x.shape[1] - 3) for part in parts)),
    )


def _squared(strength: float, contrast: float) -> float:
    """Variance of the phase noise in rad^2 from the strength (C^2/8)(exp(s^2) - 1) of its pattern."""
    return float(np.log1p(8 * max(strength, 0.0) / contrast**2))
