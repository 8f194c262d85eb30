"""Goals about how contrast and atoms fall with hold: coherence, curve, plateau, revival.

Each is a classical problem of optimal design with rig time as the cost; see optimal.py and maximin.py for the proofs.
"""

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.result import Allocation, Certificate, Share
from planner.design.maximin import maximin
from planner.design.optimal import information, l_optimal
from planner.design.rounding import counts_for_worst, counts_in_budget
from planner.errors import PlanImpossible

GRID = 120  # candidate holds, log-spaced
REVIVAL_PER_PERIOD = 12  # candidate holds in a period of the modulation
MOST_CANDIDATES = 600
COHERENCE, LIFETIME = "coherence time (s)", "population lifetime (s)"  # names of the errors
SMALL = 0.004  # shares of rig time below this are merged into their neighbours


def candidates(rig: Knowledge, count: int = GRID) -> FloatArray:
    """Holds that could be run, (n,)."""
    return np.geomspace(max(rig.shortest_s, 1e-3), rig.longest_s, count)


def contrast_factors(rig: Knowledge, hold_s: FloatArray) -> FloatArray:
    """Factors (n, 1, 2) about (log C_0, log tau_c), for one second of rig time at each hold."""
    contrast = rig.contrast_at(hold_s)
    slope = np.stack([contrast, contrast * hold_s / rig.coherence_s], axis=1)
    return np.asarray((slope * np.sqrt(rig.contrast_information(hold_s) / rig.packet_s(hold_s))[:, None])[:, None, :])


def atom_factors(rig: Knowledge, hold_s: FloatArray) -> FloatArray:
    """Factors (n, 1, 2) about (log N_0, log tau_n)."""
    atoms = rig.atoms_at(hold_s)
    slope = np.stack([atoms, atoms * hold_s / rig.lifetime_s], axis=1)
    return np.asarray((slope * np.sqrt(rig.atom_information(hold_s) / rig.packet_s(hold_s))[:, None])[:, None, :])


def allocate_coherence(
    rig: Knowledge, hours: float, *, lifetime_weight: float = 0.0, robust: bool = True
) -> Allocation:
    """Smallest relative error of the coherence time (c-optimal), or of both time scales.

    With a lifetime_weight above 0: the sum of relative variances, the lifetime's times the weight (L-optimal). robust:
    averaged over what is uncertain.
    """
    hold = candidates(rig)
    rigs = rig.draws() if robust and rig.spread else [rig]
    wanted = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 0.0], [0.0, np.sqrt(lifetime_weight)]])
    if lifetime_weight == 0.0:
        wanted = wanted[:, :1]

    def factors(holds_s: FloatArray) -> FloatArray:
        return np.stack([_both(one, holds_s) for one in rigs])

    design = l_optimal(factors(hold), wanted)
    points, weights = _merge(hold, design.weights)
    counts = counts_in_budget(weights, rig.packet_s(points), hours * 3600)
    reached = _variance(factors(points), counts * rig.packet_s(points), wanted)
    variances = _variances(_both(rig, points), counts * rig.packet_s(points))
    errors = {
        COHERENCE: rig.coherence_s * float(np.sqrt(variances[1])),
        LIFETIME: rig.lifetime_s * float(np.sqrt(variances[3])),
    }
    return _allocation(
        "coherence",
        rig,
        hours,
        points,
        weights,
        counts,
        errors,
        Certificate(
            criterion="c" if wanted.shape[1] == 1 and len(rigs) == 1 else "L",
            value=design.value / len(rigs),
            bound=design.bound / len(rigs),
            efficiency=design.efficiency,
        ),
        rounded=design.bound / (hours * 3600) / reached,
        lines=[
            f"coherence time to {100 * np.sqrt(variances[1]):.2g} %, "
            f"population lifetime to {100 * np.sqrt(variances[3]):.2g} %",
            f"{len(points)} holds are best if the decay is exponential, and cannot show that it is: for that there is "
            "the goal plateau",
        ],
    )


def _both(rig: Knowledge, hold: FloatArray) -> FloatArray:
    """Factors (n, 2, 4): the first row about contrast, the second about atoms."""
    out = np.zeros((len(hold), 2, 4))
    out[:, 0, :2] = contrast_factors(rig, hold)[:, 0]
    out[:, 1, 2:] = atom_factors(rig, hold)[:, 0]
    return out


def allocate_curve(rig: Knowledge, hours: float, holds_s: FloatArray, *, relative: bool = True) -> Allocation:
    """Contrast at the given holds with equal errors, relative or absolute, as small as the hours allow (minimax).

    Each hold is a parameter of its own, so the largest error is smallest when all are equal: rig time goes as
    cost x variance, and the value is its sum over the holds; nothing beats it, since sum_j w_j = 1.
    """
    information_each = rig.contrast_information(holds_s) * (rig.contrast_at(holds_s) ** 2 if relative else 1.0)
    need = rig.packet_s(holds_s) / information_each
    weights = need / need.sum()
    counts = counts_for_worst(information_each, rig.packet_s(holds_s), hours * 3600)
    value = float(need.sum())
    reached = 1 / (counts * information_each)
    worst = float(np.sqrt(reached.max()))
    return _allocation(
        "curve",
        rig,
        hours,
        holds_s,
        weights,
        counts,
        {
            f"contrast at {hold:.3g} s": float(1 / np.sqrt(count * one))
            for hold, count, one in zip(holds_s, counts, rig.contrast_information(holds_s), strict=True)
        },
        Certificate(criterion="minimax", value=value, bound=value, efficiency=1.0),
        rounded=value / (hours * 3600) / float(reached.max()),
        lines=[f"every hold to {100 * worst:.2g} %" if relative else f"every hold to {worst:.2g}"],
    )


def allocate_plateau(rig: Knowledge, hours: float, *, plateau: float, significance: float = 0.05) -> Allocation:
    """Most power to tell one exponential from a decay that levels off at `plateau` (T-optimal).

    The distance is between the levelling curve and the nearest exponential, in standard errors; twice the log
    likelihood ratio is then noncentral chi-squared with that square as its noncentrality.
    """
    hold = candidates(rig)
    if not 0.0 < plateau < rig.contrast:
        raise PlanImpossible(
            f"a plateau at {plateau:g} is not between 0 and the contrast at short hold ({rig.contrast:g})"
        )
    curve = plateau + (rig.contrast - plateau) * np.exp(-hold / rig.coherence_s)
    precision = rig.contrast_information(hold, curve) / rig.packet_s(hold)
    taus = np.geomspace(rig.coherence_s / 5, rig.coherence_s * 60, 1500)
    shapes = np.exp(-hold[None] / taus[:, None])

    def nearest(share: FloatArray) -> FloatArray:
        weight = share * precision
        start = (shapes * curve) @ weight / np.maximum((shapes * shapes) @ weight, 1e-300)
        distance = ((start[:, None] * shapes - curve) ** 2) @ weight
        best = int(distance.argmin())
        return np.asarray(((start[best] * shapes[best] - curve) ** 2 * precision)[None])

    weights_all, value, bound = maximin(nearest, len(hold))
    points, weights = _merge(hold, weights_all)
    counts = counts_in_budget(weights, rig.packet_s(points), hours * 3600)
    spent = np.zeros(len(hold))
    spent[np.searchsorted(hold, points)] = counts * rig.packet_s(points)
    reached = float((nearest(spent) @ spent)[0])
    power = _power(reached, 1, significance)
    return _allocation(
        "plateau",
        rig,
        hours,
        points,
        weights,
        counts,
        {},
        Certificate(criterion="T", value=value, bound=bound, efficiency=value / bound),
        rounded=reached / (bound * hours * 3600),
        lines=[
            f"a plateau at {plateau:g} lies {np.sqrt(reached):.2g} standard errors from the nearest exponential: seen "
            f"with chance {100 * power:.0f} % at a false-alarm rate of {100 * significance:g} %"
        ],
        details={"distance": float(np.sqrt(reached)), "power": power},
    )


def allocate_revival(
    rig: Knowledge,
    hours: float,
    *,
    period_s: float,
    depth: float,
    significance: float = 0.01,
    window_s: tuple[float, float] | None = None,
) -> Allocation:
    """Most power to see a modulation of contrast of known period and unknown phase: L-optimal for its two quadratures,
    with start and coherence time free. window_s: where to look; anywhere without it."""
    first, last = window_s or (rig.shortest_s, rig.longest_s)
    low = max(first, period_s / 50)
    count = int(min(MOST_CANDIDATES, max(48, REVIVAL_PER_PERIOD * (last - low) / period_s)))
    stop = min(last, low + count * period_s / REVIVAL_PER_PERIOD)
    hold = np.linspace(low, stop, count)
    contrast = rig.contrast_at(hold)
    turn = 2 * np.pi * hold / period_s
    slope = np.stack(
        [contrast, contrast * hold / rig.coherence_s, contrast * np.cos(turn), contrast * np.sin(turn)], axis=1
    )
    factors = (slope * np.sqrt(rig.contrast_information(hold) / rig.packet_s(hold))[:, None])[:, None, :]
    wanted = np.zeros((4, 2))
    wanted[2, 0] = wanted[3, 1] = 1.0
    design = l_optimal(factors, wanted)
    keep = design.weights > 1e-3
    points, weights = hold[keep], design.weights[keep] / design.weights[keep].sum()
    counts = _counts(points, weights, rig, hours)
    chosen = counts > 0
    reached = _variance(factors[keep][chosen], (counts * rig.packet_s(points))[chosen], wanted)
    noncentrality = depth**2 / (reached / 2)
    power = _power(noncentrality, 2, significance)
    nights = _nights(noncentrality, significance)
    return _allocation(
        "revival",
        rig,
        hours,
        points[chosen],
        weights[chosen],
        counts[chosen],
        {"modulation depth": float(np.sqrt(reached / 2))},
        Certificate(criterion="L", value=design.value, bound=design.bound, efficiency=design.efficiency),
        rounded=design.bound / (hours * 3600) / reached,
        lines=[
            f"a modulation of depth {depth:g} and period {period_s:g} s is seen with chance {100 * power:.0f} % in one "
            f"such night; {nights:.2g} nights give 90 %"
            if nights > 1.0
            else f"a modulation of depth {depth:g} and period {period_s:g} s is seen with chance 90 % after "
            f"{hours * nights:.2g} h of this plan"
        ],
        details={"power": power, "nights": nights},
    )


def _counts(points: FloatArray, weights: FloatArray, rig: Knowledge, hours: float) -> IntArray:
    """Counts in a budget that may be too short for a packet at every point: the smallest shares go first."""
    order = np.argsort(-weights)
    cost = rig.packet_s(points)
    most = int(np.searchsorted(np.cumsum(cost[order]), hours * 3600, side="right"))
    if most < 4:
        raise PlanImpossible(
            f"{hours:g} h are too few for four different holds; "
            f"give {float(np.sort(cost)[:4].sum()) / 3600:.2f} h or more"
        )
    used = np.sort(order[: max(4, min(most, len(points)))])
    counts = np.zeros(len(points), dtype=np.int64)
    counts[used] = counts_in_budget(weights[used] / weights[used].sum(), cost[used], hours * 3600)
    return counts


def _merge(hold: FloatArray, weights: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Neighbouring candidates of one optimum point become that point: the candidate nearest their weighted mean."""
    points, shares = [], []
    used = np.flatnonzero(weights > 1e-6)
    for run in np.split(used, np.flatnonzero(np.diff(used) > 2) + 1):
        share = float(weights[run].sum())
        if share < SMALL:
            continue
        centre = float(np.exp(weights[run] @ np.log(hold[run]) / share))
        points.append(float(hold[int(np.abs(np.log(hold / centre)).argmin())]))
        shares.append(share)
    return np.array(points), np.array(shares) / sum(shares)


def _variance(factors: FloatArray, seconds: FloatArray, wanted: FloatArray) -> float:
    """Sum of the variances of the wanted combinations, over all rigs where factors has several."""
    inverse = np.linalg.pinv(information(factors, seconds), hermitian=True)
    return float((wanted * (inverse @ wanted)).sum())


def _variances(factors: FloatArray, seconds: FloatArray) -> FloatArray:
    return np.asarray(np.diag(np.linalg.pinv(information(factors, seconds))))


def _power(noncentrality: float, dof: int, significance: float) -> float:
    from scipy.special import chdtri, chndtr

    return float(1 - chndtr(chdtri(dof, significance), dof, noncentrality))


def _nights(noncentrality: float, significance: float, power: float = 0.9) -> float:
    """How many such nights give that power: the noncentrality grows in proportion."""
    low, high = 1e-6, 1e6
    for _ in range(80):
        middle = float(np.sqrt(low * high))
        low, high = (low, middle) if _power(noncentrality * middle, 2, significance) >= power else (middle, high)
    return high


def _allocation(
    goal: str,
    rig: Knowledge,
    hours: float,
    points: FloatArray,
    weights: FloatArray,
    counts: IntArray,
    errors: dict[str, float],
    certificate: Certificate,
    *,
    rounded: float,
    lines: list[str],
    details: dict[str, float] | None = None,
) -> Allocation:
    shares = tuple(
        Share(
            hold_s=float(hold),
            packets=int(count),
            shots=int(count) * rig.packet_shots,
            kind="fringe",
            rig_s=float(count * rig.packet_s(np.array([hold]))[0]),
            wanted_share=float(share),
        )
        for hold, share, count in zip(points, weights, counts, strict=True)
    )
    return Allocation(
        goal=goal,
        hours=hours,
        shares=shares,
        errors=errors,
        certificate=certificate,
        rounded=rounded,
        lines=tuple(lines),
        details=details or {},
    )
