"""Which fringe? Holds that resolve the ambiguity of a phase step by step, with a stated risk.

A phase is known modulo one turn. A short hold knows the acceleration roughly and without doubt; each next rung, r times
longer, is r times finer, and its whole turns are counted by the rung before. The step is right as long as the error of
the lower rung, scaled up, and that of the higher one stay together within half a turn. With normal errors of sigma_low
and sigma_high

    P(wrong) = erfc(pi / sqrt(2 (sigma_high^2 + r^2 sigma_low^2))) .

Derived here from P(|x| > pi) for x = error_high - r error_low; agrees with tests/outside/data/phase_ladder.csv. It
holds for strong fringes only. A weak fringe, such as that of a long hold, is off by half a turn much more often, so the
ladder itself is planned with the law of the phase of a noisy fringe (phase_errors.py).
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from math import erfc, inf, pi, sqrt

import numpy as np

from planner.arrays import FloatArray
from planner.design.phase_errors import wrong_turn
from planner.errors import PlanImpossible

MOST_RUNGS = 23  # ratio 2 over seven decades of the scale factor


@dataclass(frozen=True, kw_only=True)
class Ladder:
    """Rungs by rising hold. risks[k] is that of the step to rung k, from the one before or from what is known
    beforehand; risk is their sum, a bound. sigma_rad is each rung's phase error for the first rig, all
    its packets together."""

    holds_s: tuple[float, ...]
    packets: tuple[int, ...]
    sigma_rad: tuple[float, ...]
    risks: tuple[float, ...]
    risk: float
    rig_s: float


def step_risk(ratio: float, sigma_low: float, sigma_high: float) -> float:
    """Chance of counting the wrong turn when going from one rung to one `ratio` times finer, for normal errors."""
    return erfc(pi / sqrt(2 * (sigma_high**2 + (ratio * sigma_low) ** 2)))


def ladder(
    *,
    shortest_s: float,
    longest_s: float,
    prior_rad: float,
    sigma_of: Callable[[float], FloatArray],
    scale_of: Callable[[float], float],
    cost_of: Callable[[float], float],
    risk: float,
    most_packets: int = 64,
) -> Ladder:
    """The cheapest ladder found from shortest_s to longest_s whose total risk stays under `risk`.

    sigma_of(hold): phase errors (n_rig,) of one packet of a strong fringe (its contrast error over its contrast), rad,
    for each of several rigs that are as likely; the risk is the mean over them.
    scale_of(hold): rad per m/s^2; cost_of(hold): s of rig time for one packet; prior_rad: how well the phase at the
    shortest hold is known beforehand (standard deviation). Packets of a rung are averaged as vectors.

    Ladders with a constant ratio of scale factors are tried for every number of rungs; in each, packets are added where
    the risk falls most for the rig time, until the sum of the risks is low enough.

    Raises:
        PlanImpossible: not even the shortest hold is known without doubt, or no ladder gets the risk down.
    """
    start = step_risk(1.0, prior_rad, 0.0)
    if start > risk / 2:
        raise PlanImpossible(
            f"at the shortest hold ({shortest_s:g} s) the phase is known beforehand to {prior_rad:.2g} rad only: the "
            f"first fringe would be wrong with chance {start:.1g}. Begin with a hold of {shortest_s * 0.25:g} s or less"
        )
    best: Ladder | None = None
    whole = scale_of(longest_s) / scale_of(shortest_s)
    for rungs in range(2, MOST_RUNGS + 1):
        ratio = whole ** (1 / (rungs - 1))
        holds = [_hold_of(scale_of, scale_of(shortest_s) * ratio**k, shortest_s, longest_s) for k in range(rungs)]
        cost = np.array([cost_of(hold) for hold in holds])
        if best is not None and float(cost.sum()) >= best.rig_s:
            continue
        climb = _Climb(ratio=ratio, prior_rad=prior_rad, one=np.stack([sigma_of(hold) for hold in holds]), cost=cost)
        found = climb.fill(holds, risk, most_packets)
        if found is not None and (best is None or found.rig_s < best.rig_s):
            best = found
    if best is None:
        raise PlanImpossible(
            f"no ladder from {shortest_s:g} s to {longest_s:g} s keeps the risk under {risk:g} with {most_packets} "
            "packets a rung: allow more risk, or a shorter longest hold"
        )
    return best


def _hold_of(scale_of: Callable[[float], float], wanted: float, low: float, high: float) -> float:
    for _ in range(80):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if scale_of(middle) < wanted else (low, middle)
    return 0.5 * (low + high)


@dataclass(frozen=True, kw_only=True)
class _Climb:
    """Rungs of one ladder: phase errors (n_rung, n_rig) and rig times (n_rung,) of one packet each."""

    ratio: float
    prior_rad: float
    one: FloatArray
    cost: FloatArray
    known: dict[tuple[int, int, int], float] = field(default_factory=dict)  # risks worked out before

    def step(self, counts: list[int], k: int) -> float:
        """Risk of the step to rung k."""
        key = (k, counts[k - 1] if k else 0, counts[k])
        if key not in self.known:
            high = self.one[k] / sqrt(counts[k])
            if k == 0:
                each = [wrong_turn(1.0, self.prior_rad, float(one), normal_low=True) for one in high]
            else:
                low = self.one[k - 1] / sqrt(counts[k - 1])
                each = [wrong_turn(self.ratio, float(a), float(b)) for a, b in zip(low, high, strict=True)]
            self.known[key] = float(np.mean(each))
        return self.known[key]

    def fill(self, holds: list[float], allowed: float, most: int) -> Ladder | None:
        """Packets until the risks sum to no more than allowed; None if they cannot."""
        rungs = range(len(holds))
        counts = [1] * len(holds)
        risks = [self.step(counts, k) for k in rungs]
        while sum(risks) > allowed:
            gains, tries = [], []
            for k in rungs:
                more = [*counts[:k], counts[k] + 1, *counts[k + 1 :]]
                fresh = {j: self.step(more, j) for j in (k, k + 1) if j < len(holds)}
                gain = sum(risks[j] - value for j, value in fresh.items()) / float(self.cost[k])
                gains.append(gain if counts[k] < most else -inf)
                tries.append((more, fresh))
            k = int(np.argmax(gains))
            if gains[k] <= 0.0:
                return None
            counts, fresh = tries[k]
            for j, value in fresh.items():
                risks[j] = value
        return Ladder(
            holds_s=tuple(holds),
            packets=tuple(counts),
            sigma_rad=tuple(float(value) for value in self.one[:, 0] / np.sqrt(counts)),
            risks=tuple(risks),
            risk=sum(risks),
            rig_s=float(counts @ self.cost),
        )
