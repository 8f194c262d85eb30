"""Contrast against hold: how long the two places stay one atom.

Atoms come in a colder and a warmer class. In each the contrast falls exponentially with its own coherence time; the
fringe is their sum. That a coherence time falls as one over lattice depth times separation is common practice, no
source: an empirical scaling, to be fitted and not believed.
"""

import numpy as np

from planner.arrays import FloatArray


def coherence_time(
    constant: float,
    depth: FloatArray | float,
    separation_m: FloatArray | float,
    *,
    depth_power: float = 1.0,
    separation_power: float = 1.0,
) -> FloatArray:
    """constant / (depth^p separation^q), s; constant in s Er m for the powers 1."""
    spread = (
        np.asarray(depth, dtype=np.float64) ** depth_power
        * np.asarray(separation_m, dtype=np.float64) ** separation_power
    )
    return np.asarray(constant / spread)


def one_class(hold_s: FloatArray, contrast: float, coherence_s: FloatArray | float) -> FloatArray:
    """contrast exp(-T / coherence_s)."""
    return np.asarray(contrast * np.exp(-np.asarray(hold_s, dtype=np.float64) / coherence_s))


def two_classes(
    hold_s: FloatArray,
    contrast: FloatArray | float,
    cold_share: FloatArray | float,
    cold_s: FloatArray | float,
    warm_s: FloatArray | float,
) -> FloatArray:
    """contrast (f exp(-T / cold_s) + (1 - f) exp(-T / warm_s)), f the share of colder atoms."""
    hold = np.asarray(hold_s, dtype=np.float64)
    share = np.asarray(cold_share, dtype=np.float64)
    return np.asarray(contrast * (share * np.exp(-hold / cold_s) + (1 - share) * np.exp(-hold / warm_s)))
