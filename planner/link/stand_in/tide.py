"""The tide of the stand-in: a slow vertical acceleration as a sum of waves, and its mean over a shot's hold.

The phase of a shot is (m / hbar) dz times the acceleration summed over the hold, so that what counts is the mean over
the hold, not the value at its middle: a wave of angular frequency w, averaged over T about its middle, keeps
sin(w T / 2) / (w T / 2) of its amplitude. Source: the integral of a cosine.
"""

from collections.abc import Sequence

import numpy as np

from planner.arrays import FloatArray
from planner.link.stand_in.profile import Wave


def mean_acceleration(waves: Sequence[Wave], begin_s: FloatArray, hold_s: FloatArray) -> FloatArray:
    """Mean of sum A cos(2 pi t / P + phase) over each hold, (n_shot,), m/s^2; holds begin at begin_s (n_shot,)."""
    total = np.zeros(len(begin_s))
    middle = begin_s + hold_s / 2
    for wave in waves:
        kept = np.sinc(hold_s / wave.period_s)  # numpy's sinc has the pi inside
        total += wave.amplitude * kept * np.cos(2 * np.pi * middle / wave.period_s + wave.phase_rad)
    return total
