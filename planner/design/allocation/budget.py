"""The budget goal: rig time split between the signal and checks of systematic effects, for the smallest total error.

Each check k measures a slope with variance v_k / t_k after t_k seconds; with an offset o_k of its setting (known to
u_k) it adds o_k^2 v_k / t_k + slope_k^2 u_k^2 to the variance of the signal. The second part no rig time mends. So

    total = v_s / t_s + sum_k o_k^2 v_k / t_k + fixed ,   t_s + sum t_k = T,

whose minimum has t proportional to sqrt(v_s) and |o_k| sqrt(v_k), and the value (sum of those roots)^2 / T + fixed: by
Cauchy and Schwarz (sum x_i)^2 <= (sum x_i^2 / t_i)(sum t_i), which is the certificate.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.design.allocation.result import Allocation, Certificate, Share
from planner.design.rounding import counts_in_budget

TOTAL = "signal, all told (m/s^2)"  # names of the errors
FIXED = "signal, the part that no rig time mends (m/s^2)"


@dataclass(frozen=True, kw_only=True)
class Check:
    """A check of one systematic effect.

    offset: how far the setting stands from where the effect vanishes, in its unit; offset_error its standard error;
    slope_variance_s: variance of the slope after one second of rig time, (signal per unit)^2 s; slope: its size, for
    the part that rig time does not mend; packet_s, shots: rig time and shots of one packet; hold_s for the table.
    """

    name: str
    offset: float
    offset_error: float
    slope_variance_s: float
    slope: float
    packet_s: float
    shots: int
    hold_s: float


def allocate_budget(
    *,
    signal_variance_s: float,
    signal_packet_s: float,
    signal_shots: int,
    hold_s: float,
    checks: Sequence[Check],
    hours: float,
    scale_error: float = 0.0,
    stated_share: float | None = None,
) -> Allocation:
    """Split the hours between the signal (variance after one second of rig time) and the checks.

    scale_error: what the error of the scale factor makes of the signal, m/s^2; no rig time mends it. stated_share: a
    share of the signal, 0 to 1, that somebody had in mind: what it would cost is said.

    Raises:
        PlanImpossible: the hours are too few for a packet of each.
    """
    roots = np.sqrt([signal_variance_s, *(check.offset**2 * check.slope_variance_s for check in checks)])
    used = roots > 0.0
    weights = roots / roots.sum()
    cost = np.array([signal_packet_s, *(check.packet_s for check in checks)])
    counts = np.zeros(len(roots), dtype=np.int64)
    counts[used] = counts_in_budget(weights[used], cost[used], hours * 3600)
    with np.errstate(divide="ignore", invalid="ignore"):
        reached = float(np.where(used, roots**2 / (counts * cost), 0.0).sum())
    bound = float(roots.sum()) ** 2
    fixed = sum((check.slope * check.offset_error) ** 2 for check in checks) + scale_error**2
    names = ["signal", *(check.name for check in checks)]
    shots = [signal_shots, *(check.shots for check in checks)]
    holds = [hold_s, *(check.hold_s for check in checks)]
    return Allocation(
        goal="budget",
        hours=hours,
        shares=tuple(
            Share(
                hold_s=holds[i],
                packets=int(counts[i]),
                shots=int(counts[i]) * shots[i],
                kind=names[i],
                rig_s=float(counts[i] * cost[i]),
                wanted_share=float(weights[i]),
            )
            for i in range(len(names))
            if used[i]
        ),
        errors={TOTAL: float(np.sqrt(reached + fixed)), FIXED: float(np.sqrt(fixed))},
        certificate=Certificate(criterion="closed form", value=bound, bound=bound, efficiency=1.0),
        rounded=bound / (hours * 3600) / reached,
        lines=(
            f"{100 * weights[0]:.0f} % of the rig time for the signal, the rest for checks",
            *_other_share(roots, weights, stated_share),
        ),
    )


def _other_share(roots: FloatArray, weights: FloatArray, share: float | None) -> list[str]:
    """What a share of the signal other than the best one costs, the checks' rest split as well as can be."""
    if share is None or not 0.0 < share < 1.0 or weights[0] >= 1.0:
        return []
    more = (roots[0] ** 2 / share + roots[1:].sum() ** 2 / (1 - share)) / roots.sum() ** 2 - 1
    return [f"{100 * share:.0f} % for the signal, as the sequence has it, would need {100 * more:.2g} % more hours"]
