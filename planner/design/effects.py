"""Effects: the one definition of what a night estimates, for planning and for analysis.

A shot gives the fraction y = B + (C/2) cos(phi + theta) + noise, theta the readout phase. Everything that a night
estimates to first order is a weighted sum of the y: an *effect* is a weight vector w over the shots. For each point of
the sweeps (shots that differ in phase and switches only) and each subset P of the switches, with p the product of
their states (p = 1 for the empty subset):

    cos, sin    w = p cos(theta), p sin(theta)   fringe quadratures of that parity
    offset      w = p                            offset of that parity; P not empty
    slope       w = x - mean(x)                  slope against a setting x, over the whole night

and over the whole night p for each non-empty P. Every w is scaled to unit length, so that white noise of one shot's
variance gives every effect the variance 1, and added variances are in units of single-shot noise.

Drift f(t) reaches a shot through a response g, and adds (w g)'K(w g), K the covariance of f at the shots' moments:

    additive    g = 1: detection offset, background
    coupled     g = sqrt2 cos(theta + phi): a drifting phase (-sin) or contrast (cos), in units of single-shot noise;
                phi is not known beforehand, so the worst phi counts

Weights are kept by point, over that point's shots only: a night of 200,000 shots needs no matrix of effects by shots.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import combinations
from math import sqrt

import numpy as np

from planner.arrays import FloatArray, IntArray, SignArray

EMPTY = 1e-9  # a weight vector shorter than this has no shots that could show the effect


@dataclass(frozen=True, kw_only=True)
class Effect:
    """One effect. `rows` (n,) are the shots it weighs, in the order given to `effects_of`; `weights` (n,) has length 1.

    `parity` names the switches whose product it follows; `form` is "cos", "sin" or "offset"; `point` is the point of
    the sweeps, -1 for the whole night.
    """

    point: int
    parity: tuple[str, ...]
    form: str
    rows: IntArray
    weights: FloatArray

    @property
    def name(self) -> str:
        """A readable name: "point 3 kick cos"."""
        where = "night" if self.point < 0 else f"point {self.point}"
        return f"{where} {'*'.join(self.parity) or 'all'} {self.form}"


def parities(switches: Mapping[str, SignArray], n: int) -> dict[tuple[str, ...], FloatArray]:
    """Every subset of the switches and the product of its states, (n,) of +1 and -1; the empty one first."""
    names = list(switches)
    subsets = [subset for k in range(len(names) + 1) for subset in combinations(names, k)]
    return {
        subset: np.prod([switches[name].astype(np.float64) for name in subset], axis=0) if subset else np.ones(n)
        for subset in subsets
    }


def effects_of(point: IntArray, phase_rad: FloatArray, switches: Mapping[str, SignArray]) -> Iterator[Effect]:
    """All effects of a set of shots, point by point, then those of the whole night.

    point, phase_rad and each switch: shape (n_shot,). An effect that no shot can show (every weight zero) is left out.
    """
    order = np.argsort(point, kind="stable")
    names, starts = np.unique(point[order], return_index=True)
    for number, rows in zip(names, np.split(order, starts[1:]), strict=True):
        rows = np.sort(rows)
        phase = phase_rad[rows]
        cosine, sine = np.cos(phase), np.sin(phase)
        here = {name: states[rows] for name, states in switches.items()}
        for parity, product in parities(here, len(rows)).items():
            forms = [("cos", product * cosine), ("sin", product * sine)]
            if parity:
                forms.append(("offset", product))
            for form, weights in forms:
                length = float(np.linalg.norm(weights))
                if length > EMPTY * sqrt(len(rows)):
                    yield Effect(point=int(number), parity=parity, form=form, rows=rows, weights=weights / length)
    everything = np.arange(len(point))
    for parity, product in parities(switches, len(point)).items():
        if parity and len(product):
            weights = product / np.linalg.norm(product)
            yield Effect(point=-1, parity=parity, form="offset", rows=everything, weights=weights)


def slope_effect(setting: FloatArray) -> FloatArray:
    """Weights (n_shot,) of the slope against a setting (n_shot,): x - mean(x), of length 1.

    A setting that does not vary gives all zeros: no slope can be told.
    """
    centred = setting - setting.mean()
    length = float(np.linalg.norm(centred))
    return np.zeros_like(centred) if length <= EMPTY * max(1.0, float(np.abs(setting).max())) else centred / length


def coupled_pair(weights: FloatArray, phase_rad: FloatArray) -> tuple[FloatArray, FloatArray]:
    """w g for the two quadratures of a coupled response: w sqrt2 cos(theta) and -w sqrt2 sin(theta).

    The response at a fringe phase phi is their combination with cos(phi) and sin(phi).
    """
    root = sqrt(2.0)
    return root * weights * np.cos(phase_rad), -root * weights * np.sin(phase_rad)


def white_variance(effect: Effect, sigma: FloatArray) -> float:
    """Variance that white noise of standard deviations sigma (n_shot,) gives the effect: sum of w^2 sigma^2."""
    return float(np.sum((effect.weights * sigma[effect.rows]) ** 2))
