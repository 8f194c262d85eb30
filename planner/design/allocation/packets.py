"""From the shares of an allocation to packets of a sequence: full fringes in all states of its switches."""

import numpy as np

from planner.design.allocation.result import Allocation
from planner.design.rounding import counts_in_budget
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence


def packets_for(found: Allocation, sequence: Sequence, dead_s: float) -> dict[float, int]:
    """How many packets of each hold (s) spend the night as the allocation says, in rig time.

    A sequence knows full fringes only: rig time that the allocation gives to two phases at mid-fringe goes into full
    fringes at the same hold. Checks of a budget are sequences of their own and are left out.

    Raises:
        PlanImpossible: the hours are too few for one packet of every hold.
    """
    signal = [share for share in found.shares if found.goal != "budget" or share.kind == "signal"]
    holds = np.array(sorted({share.hold_s for share in signal}))
    rig_s = np.array([sum(share.rig_s for share in signal if share.hold_s == hold) for hold in holds])
    shots = len(sequence.fringe.phases_rad) * 2 ** len(sequence.switches)
    others = [sweep for sweep in sequence.sweeps if sequence.roles["hold"] not in sweep.values]
    points = int(np.prod([sum(sweep.packets) or len(sweep) for sweep in others])) if found.goal != "budget" else 1
    cost = points * shots * (holds + dead_s)
    budget = float(rig_s.sum())
    if budget < cost.sum():
        raise PlanImpossible(
            f"one packet of every hold in all states takes {cost.sum() / 3600:.2f} h, the allocation has "
            f"{budget / 3600:.2f} h for them: give it more hours"
        )
    counts = counts_in_budget(rig_s / budget, cost, budget)
    return {float(hold): int(count) for hold, count in zip(holds, counts, strict=True)}
