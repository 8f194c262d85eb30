"""How well an order resists drift: added variances of its effects, in units of single-shot noise.

Three figures, each with a mean over the effects and a worst one:

    additive     declared additive drift
    coupled      declared phase and contrast drift, at each effect's worst fringe phase; parities of a non-empty
                 subset of switches only (for the empty one it is the fringe's own mean)
    any period   what no prior tells: a sinusoid of RMS 1 at every frequency from 1/(12 h) to 1/(2 min), averaged over
                 effects; mean over frequencies, and the peak

A value of 0.04 means that drift adds 4 % to the variance of an estimate: 2 % to its error bar.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt

import numpy as np

from planner.arrays import FloatArray, IntArray, SignArray
from planner.design.drift import Drifts, added_variance, at_worst_phase, coupled_form, period_grid
from planner.design.effects import Effect, coupled_pair, effects_of

FREQUENCIES_AT_ONCE = 64  # keeps the table of turning phases of 200,000 shots under 100 MB


@dataclass(frozen=True, kw_only=True)
class Quality:
    """The figures of one order. `additive`, `coupled` and `parity` map effect names to values and to the parity's
    switches."""

    additive_mean: float
    additive_worst: float
    coupled_mean: float
    coupled_worst: float
    any_period_mean: float
    any_period_peak: float
    peak_period_s: float
    additive: Mapping[str, float]
    coupled: Mapping[str, float]
    parity: Mapping[str, tuple[str, ...]]

    def of_parity(self, parity: tuple[str, ...]) -> dict[str, float]:
        """Mean and worst of the effects of one parity (its switches in any order); 0 where it has none."""
        wanted = set(parity)
        additive = [value for name, value in self.additive.items() if set(self.parity[name]) == wanted]
        coupled = [value for name, value in self.coupled.items() if set(self.parity[name]) == wanted]
        return {
            "additive_mean": float(np.mean(additive)) if additive else 0.0,
            "additive_worst": max(additive, default=0.0),
            "coupled_mean": float(np.mean(coupled)) if coupled else 0.0,
            "coupled_worst": max(coupled, default=0.0),
        }

    def figures(self) -> dict[str, float]:
        """The seven numbers that go into the logbook."""
        return {
            "additive_mean": self.additive_mean,
            "additive_worst": self.additive_worst,
            "coupled_mean": self.coupled_mean,
            "coupled_worst": self.coupled_worst,
            "any_period_mean": self.any_period_mean,
            "any_period_peak": self.any_period_peak,
            "peak_period_s": self.peak_period_s,
        }


def wider(added: float) -> float:
    """By how much an added variance widens an error bar, as a fraction: sqrt(1 + added) - 1."""
    return sqrt(1.0 + added) - 1.0


def assess(
    *,
    mid_s: FloatArray,
    total_s: float,
    point: IntArray,
    phase_rad: FloatArray,
    switches: Mapping[str, SignArray],
    drifts: Drifts,
    per_acceleration: FloatArray | None = None,
    most_frequencies: int = 4000,
) -> Quality:
    """Judge shots in running order; every array has shape (n_shot,), mid_s rising.

    per_acceleration: that of `drifts`, in running order.
    """
    effects = list(effects_of(point, phase_rad, switches))
    additive: dict[str, float] = {}
    coupled: dict[str, float] = {}
    for effect in effects:
        times = mid_s[effect.rows]
        additive[effect.name] = float(added_variance(effect.weights, times, drifts.additive))
        if effect.parity:
            u, v = coupled_pair(effect.weights, phase_rad[effect.rows])
            form = coupled_form(u, v, times, drifts.coupled)
            if per_acceleration is not None:
                factor = per_acceleration[effect.rows]
                form = form + coupled_form(u * factor, v * factor, times, drifts.acceleration)
            coupled[effect.name] = float(at_worst_phase(form))
    grid = period_grid(total_s, most_frequencies)
    power = any_period(effects, mid_s, grid)
    worst = int(power.argmax())
    return Quality(
        additive_mean=float(np.mean(list(additive.values()))),
        additive_worst=max(additive.values()),
        coupled_mean=float(np.mean(list(coupled.values()))) if coupled else 0.0,
        coupled_worst=max(coupled.values(), default=0.0),
        any_period_mean=float(power.mean()),
        any_period_peak=float(power[worst]),
        peak_period_s=float(1.0 / grid[worst]),
        additive=additive,
        coupled=coupled,
        parity={effect.name: effect.parity for effect in effects},
    )


def any_period(effects: list[Effect], mid_s: FloatArray, grid: FloatArray) -> FloatArray:
    """Mean over effects of |sum_i w_i exp(i 2 pi f t_i)|^2 at each frequency of grid (n_frequency,)."""
    groups: dict[int, list[Effect]] = {}
    for effect in effects:
        groups.setdefault(effect.point, []).append(effect)
    power = np.zeros(len(grid))
    for group in groups.values():
        weights = np.array([effect.weights for effect in group])
        times = mid_s[group[0].rows]
        step = max(1, FREQUENCIES_AT_ONCE * 4000 // max(4000, len(times)))
        for first in range(0, len(grid), step):
            turning = np.exp(2j * np.pi * np.outer(times, grid[first : first + step]))
            power[first : first + step] += (np.abs(weights @ turning) ** 2).sum(axis=0)
    return power / max(1, len(effects))
