"""A fall with hold and its time scale, common to contrast and atom number."""

from dataclasses import dataclass

import numpy as np
from scipy import special

from planner.analysis.shapes import Shape, log_curve
from planner.arrays import FloatArray
from planner.errors import NotEnoughData

# The likelihood is searched for decays this much faster than the shortest distance between holds, and no further:
# beyond it every hold but the first has lost everything and the data cannot tell rates apart.
FASTEST = 30.0


@dataclass(frozen=True, kw_only=True)
class Decay:
    """A fall with hold, with intervals.

    `time_s` is the hold at which the value has fallen to 1/e of its short-hold value; inf where no decay is seen.
    `high_s` is inf where the data allow no decay at all, `low_s` is 0 where they allow any speed.
    """

    shape: Shape
    parameters: FloatArray  # (n_parameter,) log start, rate in 1/s, then the shape's own
    covariance: FloatArray  # (n_parameter, n_parameter)
    start: float
    start_low: float
    start_high: float
    time_s: float
    low_s: float
    high_s: float
    level: float
    log_likelihood: float  # up to a constant that is the same for every shape
    goodness: float  # sum of squared deviations of the holds from the curve, over their variance
    goodness_dof: int
    goodness_p: float

    def value(self, hold_s: FloatArray) -> FloatArray:
        """The curve at `hold_s`, same shape."""
        return np.exp(log_curve(self.shape, self.parameters, hold_s))

    def band(self, hold_s: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Pointwise band of the curve at the fit's level, two arrays of the shape of `hold_s`."""
        slope = log_slopes(self.shape, self.parameters, hold_s, np.sqrt(np.diag(self.covariance)))
        error = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", slope, self.covariance, slope), 0.0))
        step = special.ndtri(0.5 + self.level / 2) * error
        return self.value(hold_s) * np.exp(-step), self.value(hold_s) * np.exp(step)


def log_slopes(shape: Shape, parameters: FloatArray, hold_s: FloatArray, scale: FloatArray) -> FloatArray:
    """Derivatives of the log curve by each parameter, (n_hold, n_parameter), by steps of a hundredth of `scale`."""
    moves = np.diag(0.01 * np.maximum(scale, 1e-9))
    ahead = [log_curve(shape, parameters + move, hold_s) for move in moves]
    behind = [log_curve(shape, parameters - move, hold_s) for move in moves]
    return np.asarray((np.array(ahead) - np.array(behind)).T / (2 * np.diag(moves)))


def search_limits(hold_s: FloatArray) -> tuple[float, float]:
    """Slowest and fastest rate that is searched, 1/s."""
    return -FASTEST / (hold_s.max() - hold_s.min()), FASTEST / float(np.diff(np.unique(hold_s)).min())


def need_two_holds(hold_s: FloatArray, what: str) -> None:
    """NotEnoughData unless there are two holds at least."""
    if len(np.unique(hold_s)) < 2:
        raise NotEnoughData(
            f"{what} was measured at {len(np.unique(hold_s))} hold: a time scale needs two holds at least, better six"
        )


def as_times(low_rate: float, high_rate: float, limits: tuple[float, float]) -> tuple[float, float]:
    """The interval of a rate as one of a time in s, open ends as 0 and inf."""
    low_s = 0.0 if high_rate >= limits[1] else float(1 / high_rate)
    return low_s, (float(1 / low_rate) if low_rate > 0 else np.inf)
