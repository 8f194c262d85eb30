"""Which way of falling describes the contrast: shapes compared, and the one to report."""

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from planner.analysis.contrast_decay import ContrastLikelihood, expected_squared, fit_contrast_decay, likeliest
from planner.analysis.decay import Decay
from planner.analysis.holds import HoldContrast
from planner.analysis.shapes import EXPONENTIAL, SHAPES, Shape
from planner.arrays import FloatArray

# A shape must score this much better than one exponential to be taken for it. At 2, twice the log likelihood has grown
# by 6: by chance once in 70 nights for one more parameter.
CLEARLY = 2.0

STARTS = (0.0, 2.0, -2.0)  # added to a shape's own first guess in the quick look


@dataclass(frozen=True, kw_only=True)
class ShapeScore:
    """How well one shape describes the holds; larger is better in each but `parameters`."""

    shape: Shape
    parameters: int
    log_likelihood: float
    score: float  # log likelihood less one for each parameter (Akaike's criterion over -2)
    predictive: float  # sum of the log density of each hold, predicted from the others


def open_shapes(holds: HoldContrast) -> tuple[Shape, ...]:
    """The shapes that leave at least one hold to be judged by, the simplest first."""
    return tuple(shape for shape in SHAPES.values() if len(holds) > 2 + len(shape.start))


def fit_best(holds: HoldContrast, *, level: float = 0.95) -> Decay:
    """The fall of contrast in the shape with the best Akaike score; one exponential where nothing is clearly better.

    A shape with more parameters is tried only where there are holds enough to contradict it.

    Args:
        holds: contrast per hold. level: coverage of the intervals.

    Returns:
        Decay of the chosen shape. Its interval takes the shape as given.

    Raises:
        NotEnoughData: as `fit_contrast_decay`.

    References:
        Akaike, IEEE Trans. Autom. Control 19, 716 (1974); the margin: Burnham and Anderson, Model Selection and
        Multimodel Inference (2002), section 2.6 (both from memory).
    """
    plain = fit_contrast_decay(holds, shape=EXPONENTIAL, level=level)
    best, top = EXPONENTIAL, plain.log_likelihood - len(plain.parameters) + CLEARLY
    for shape in open_shapes(holds):
        if shape.start and _might_win(holds, shape, plain):
            likelihood = ContrastLikelihood(holds, shape)
            found, _ = likeliest(likelihood)
            score = likelihood(found) - len(found)
            if score > top:
                best, top = shape, score
    return plain if best == EXPONENTIAL else fit_contrast_decay(holds, shape=best, level=level)


def _might_win(holds: HoldContrast, shape: Shape, plain: Decay) -> bool:
    """Whether least squares on the squared contrasts gain half of what the likelihood would have to: a quick look.

    Near the truth the sum of squares falls by twice what the log likelihood gains; half is asked for, so that the quick
    look decides nothing close.
    """
    root = np.sqrt(holds.expected_squared_variance(expected_squared(holds, EXPONENTIAL, plain.parameters)))

    def rest(parameters: FloatArray, of: Shape = shape) -> FloatArray:
        return np.asarray((holds.squared - expected_squared(holds, of, parameters)) / root)

    least = float((rest(optimize.least_squares(rest, plain.parameters, args=(EXPONENTIAL,)).x, EXPONENTIAL) ** 2).sum())
    gained = 0.0
    for first in STARTS:
        start = np.concatenate([plain.parameters, np.array(shape.start) + first])
        found = optimize.least_squares(rest, start, x_scale="jac", max_nfev=60)
        gained = max(gained, least - 2 * float(found.cost))
    return gained > CLEARLY + len(shape.start)


def compare_shapes(holds: HoldContrast) -> tuple[ShapeScore, ...]:
    """All shapes that the number of holds can fix, the best score first.

    Args:
        holds: contrast per hold.

    Returns:
        A score for each shape; log likelihoods share one constant.

    References:
        Akaike, IEEE Trans. Autom. Control 19, 716 (1974) (from memory).
    """
    scores = []
    for shape in open_shapes(holds):
        whole = ContrastLikelihood(holds, shape)
        best, _ = likeliest(whole)
        predictive = 0.0
        for out in range(len(holds)):
            fitted, _ = likeliest(ContrastLikelihood(holds.without(out), shape))
            predictive += float(whole.per_hold(expected_squared(holds, shape, fitted))[out])
        top = whole(best)
        scores.append(
            ShapeScore(
                shape=shape,
                parameters=len(best),
                log_likelihood=top,
                score=top - len(best),
                predictive=predictive,
            )
        )
    return tuple(sorted(scores, key=lambda entry: -entry.score))
