"""Which fringe? Holds that resolve the ambiguity of a phase step by step, with a stated risk.

A phase is known modulo one turn. A short hold knows the acceleration roughly and without doubt; each next rung, r times
longer, is r times finer, and its whole turns are counted by the rung before. The step is right as long as the error of
the lower rung, scaled up, and that of the higher one stay together within half a turn; with normal errors of sigma_low
and sigma_high

    P(wrong) = erfc(pi / sqrt(2 (sigma_high^2 + r^2 sigma_low^2))) .

Derived here from P(|x| > pi) for x = error_high - r error_low; agrees with tests/outside/data/phase_ladder.csv.
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import erfc, pi, sqrt

import numpy as np

from planner.arrays import IntArray
from planner.errors import PlanImpossible


@dataclass(frozen=True, kw_only=True)
class Ladder:
    """Rungs by rising hold. risks has one entry fewer than holds: that of each step. risk is their sum, a bound."""

    holds_s: tuple[float, ...]
    packets: tuple[int, ...]
    sigma_rad: tuple[float, ...]
    risks: tuple[float, ...]
    risk: float
    rig_s: float


def step_risk(ratio: float, sigma_low: float, sigma_high: float) -> float:
    """Chance of counting the wrong turn when going from one rung to one `ratio` times finer."""
    return erfc(pi / sqrt(2 * (sigma_high**2 + (ratio * sigma_low) ** 2)))


def ladder(
    *,
    shortest_s: float,
    longest_s: float,
    prior_rad: float,
    sigma_of: Callable[[float], float],
    scale_of: Callable[[float], float],
    cost_of: Callable[[float], float],
    risk: float,
    most_packets: int = 64,
) -> Ladder:
    """The cheapest ladder found from shortest_s to longest_s whose total risk stays under `risk`.

    sigma_of(hold): phase error of one packet, rad; scale_of(hold): rad per m/s^2; cost_of(hold): s of rig time for one
    packet; prior_rad: how well the phase at the shortest hold is known beforehand (standard deviation).

    Ladders with a constant ratio of scale factors are tried for every number of rungs; in each, packets are added where
    a step's risk falls most for the rig time, until the sum of the risks is low enough.

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
    for rungs in range(2, 24):
        ratio = whole ** (1 / (rungs - 1))
        holds = [_hold_of(scale_of, scale_of(shortest_s) * ratio**k, shortest_s, longest_s) for k in range(rungs)]
        found = _fill(holds, ratio, sigma_of, cost_of, risk - start, most_packets, start)
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


def _fill(
    holds: list[float],
    ratio: float,
    sigma_of: Callable[[float], float],
    cost_of: Callable[[float], float],
    allowed: float,
    most: int,
    start: float,
) -> Ladder | None:
    one = np.array([sigma_of(hold) for hold in holds])
    cost = np.array([cost_of(hold) for hold in holds])
    packets = np.ones(len(holds), dtype=np.int64)

    def risks(counts: IntArray) -> list[float]:
        sigma = one / np.sqrt(counts)
        return [step_risk(ratio, float(sigma[k]), float(sigma[k + 1])) for k in range(len(holds) - 1)]

    now = risks(packets)
    while sum(now) > allowed:
        gains = np.full(len(holds), -np.inf)
        for k in range(len(holds)):
            if packets[k] < most:
                more = packets.copy()
                more[k] += 1
                gains[k] = (sum(now) - sum(risks(more))) / cost[k]
        if not np.isfinite(gains).any() or gains.max() <= 0.0:
            return None
        packets[int(gains.argmax())] += 1
        now = risks(packets)
    return Ladder(
        holds_s=tuple(holds),
        packets=tuple(int(count) for count in packets),
        sigma_rad=tuple(float(value) for value in one / np.sqrt(packets)),
        risks=tuple(now),
        risk=sum(now) + start,
        rig_s=float(packets @ cost),
    )
