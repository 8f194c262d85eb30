"""Following a fringe: how well its phase is known when the next packet is set to its slopes, and what a miss costs.

Each packet measures the phase with variance r, and the estimate moves by a share K of what it was off. From packet to
packet the phase walks by a variance q and is carried along by its rhythms, by v (a tide is a ramp over minutes). The
error before a packet then settles at

    mean square = (q + K^2 r) / (K (2 - K)) + v^2 / K^2 ,

from e' = (1 - K) e + walk - K noise + v: the first part is the stationary variance of that recursion, the second its
lag behind a ramp. The best K is used; without rhythms it is the Kalman filter's, whose variance is
q / 2 + sqrt(q^2 / 4 + q r). (Derived here; the filter: Kalman, J. Basic Eng. 82, 35 (1960), from memory.)

A packet that misses the slopes by a normal delta of variance P tells E[cos^2 delta] = (1 + exp(-2 P)) / 2 of what it
would at the slopes.
"""

from collections.abc import Iterable
from dataclasses import dataclass
from math import exp, pi

import numpy as np

from planner.sequence.model import Sinusoid

GAINS = np.geomspace(1e-4, 1.0, 801)  # the minimum is flat: a step of 1.2 % in K changes it by less than 1e-4


@dataclass(frozen=True, kw_only=True)
class Motion:
    """What moves the phase between packets: q of the walk in rad^2 and v^2 of the rhythms, its mean, in rad^2."""

    walk: float = 0.0
    carried: float = 0.0

    def __add__(self, other: "Motion") -> "Motion":
        return Motion(walk=self.walk + other.walk, carried=self.carried + other.carried)


def motion(walk_rate: float, rhythms: Iterable[Sinusoid], spacing_s: float, scale: float = 1.0) -> Motion:
    """Motion in spacing_s: walk_rate in unit^2/s, amplitudes (RMS) in a unit that `scale` turns into rad."""
    carried = sum((scale * one.amplitude * 2 * pi / one.period_s * spacing_s) ** 2 for one in rhythms)
    return Motion(walk=scale**2 * walk_rate * spacing_s, carried=carried)


def variance_before(moved: Motion, measured: float) -> float:
    """Mean square error of the phase as known before each packet, rad^2; measured is r, rad^2."""
    settled = (moved.walk + GAINS**2 * measured) / (GAINS * (2 - GAINS)) + moved.carried / GAINS**2
    return float(settled.min())


def kept_information(variance: float) -> float:
    """Mean share of a packet's phase information that is left when it misses the slopes with this variance, rad^2."""
    return (1 + exp(-2 * variance)) / 2
