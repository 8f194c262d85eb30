"""Ways in which contrast or atoms can fall with hold, all written in the hold at which 1/e is left.

A shape gives log f(x) for x = hold / time scale, with f(0) = 1 and f(1) = 1/e: the time scale means the same in each.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from planner.arrays import FloatArray


@dataclass(frozen=True, kw_only=True)
class Shape:
    """One way to fall. `log_fall(x, extra)` has the shape of x; `extra` are free numbers without bounds."""

    name: str
    words: str
    log_fall: Callable[[FloatArray, FloatArray], FloatArray]
    start: tuple[float, ...] = ()  # first guess of the extra parameters


def _levels_off(x: FloatArray, extra: FloatArray) -> FloatArray:
    rest = np.exp(-1) * special.expit(np.clip(extra[0], -30, 12))
    speed = np.log((1 - rest) / (np.exp(-1) - rest))
    return np.asarray(np.log((1 - rest) * np.exp(-speed * x) + rest))


def _power_law(x: FloatArray, extra: FloatArray) -> FloatArray:
    power = np.exp(np.clip(extra[0], np.log(0.1), 12))
    return np.asarray(-power * np.log1p(np.expm1(1 / power) * x))


def _two_classes(x: FloatArray, extra: FloatArray) -> FloatArray:
    odds = np.clip(extra[0], -30, 30)
    fast = special.expit(odds)
    ratio = 1 + np.exp(np.clip(extra[1], -20, 7))
    # between the all-fast and the all-slow answer
    speed = optimize.brentq(
        lambda k: fast * np.exp(-k) + (1 - fast) * np.exp(-k / ratio) - np.exp(-1), 1 - 1e-9, ratio * (1 + 1e-9)
    )
    # by logarithms, so that a fall beyond the smallest number stays a fall
    return np.asarray(np.logaddexp(special.log_expit(odds) - speed * x, special.log_expit(-odds) - speed * x / ratio))


EXPONENTIAL = Shape(name="exponential", words="one exponential", log_fall=lambda x, extra: -x)
LEVELS_OFF = Shape(name="levels-off", words="an exponential that levels off", log_fall=_levels_off, start=(-2.0,))
POWER_LAW = Shape(name="power-law", words="a power law", log_fall=_power_law, start=(1.0,))
TWO_CLASSES = Shape(name="two-classes", words="two exponentials", log_fall=_two_classes, start=(0.0, 1.0))
SHAPES = {shape.name: shape for shape in (EXPONENTIAL, LEVELS_OFF, POWER_LAW, TWO_CLASSES)}


def log_curve(shape: Shape, parameters: FloatArray, hold_s: FloatArray) -> FloatArray:
    """Log of the value at each hold, shape of `hold_s`.

    Args:
        parameters: log of the value at no hold, rate (1 / time scale) in 1/s, then the shape's own. A negative rate
        (a value that grows) is an exponential in every shape, so that a search can pass through it.
    """
    x = parameters[1] * np.asarray(hold_s, float)
    if parameters[1] <= 0:
        return np.asarray(parameters[0] - x)
    return np.asarray(parameters[0] + shape.log_fall(x, parameters[2:]))
