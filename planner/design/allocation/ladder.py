"""The ladder goal: the least rig time that tells the fringe of a long hold from its neighbours, at a stated risk."""

from collections.abc import Sequence

import numpy as np

from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.result import Allocation, Certificate, Share
from planner.design.allocation.signal import Scale
from planner.design.ladder import ladder
from planner.errors import PlanImpossible

PRIOR_RAD = 0.3  # how well the phase at the shortest hold is known before a ladder; common practice, no source


def allocate_ladder(
    rigs: Sequence[Knowledge],
    scale: Scale,
    hours: float,
    *,
    longest_s: float,
    risk: float,
    prior_rad: float = PRIOR_RAD,
) -> Allocation:
    """Rungs from the shortest hold to longest_s, the hold whose fringe is to be told.

    rigs: the best guess first, then others that are as likely; the risk is the mean over them. prior_rad: standard
    deviation of the phase at the shortest hold as known beforehand.

    Raises:
        PlanImpossible: no ladder keeps the risk, or it takes longer than the hours.
    """
    best = rigs[0]
    if longest_s <= best.shortest_s:
        raise PlanImpossible(
            f"a ladder climbs from the shortest hold ({best.shortest_s:g} s) to the hold to be measured "
            f"({longest_s:g} s), which must be longer: sweep the hold that the signal is measured at"
        )

    def cost(hold: float) -> float:
        return float(best.packet_s(np.array([hold]))[0])

    found = ladder(
        shortest_s=best.shortest_s,
        longest_s=longest_s,
        prior_rad=prior_rad,
        sigma_of=lambda hold: np.array([float(rig.phase_error(np.array([hold]))[0]) for rig in rigs]),
        scale_of=lambda hold: float(scale.at(np.array([hold]))[0]),
        cost_of=cost,
        risk=risk,
    )
    if found.rig_s > hours * 3600:
        raise PlanImpossible(
            f"the ladder takes {found.rig_s / 3600:.2f} h, the night has {hours:g} h: give "
            f"{found.rig_s / 3600:.2f} h, or allow more risk"
        )
    return Allocation(
        goal="ladder",
        hours=hours,
        shares=tuple(
            Share(
                hold_s=hold,
                packets=count,
                shots=count * best.packet_shots,
                kind="fringe",
                rig_s=count * cost(hold),
                wanted_share=count * cost(hold) / found.rig_s,
            )
            for hold, count in zip(found.holds_s, found.packets, strict=True)
        ),
        errors={"acceleration (m/s^2)": found.sigma_rad[-1] / float(scale.at(np.array([longest_s]))[0])},
        certificate=Certificate(criterion="risk", value=found.risk, bound=risk, efficiency=1.0),
        rounded=1.0,
        lines=(
            f"{len(found.holds_s)} rungs in {found.rig_s / 60:.3g} min: the fringe at {longest_s:.3g} s is the wrong "
            f"one with chance {found.risk:.2g} at most, if the phase at {best.shortest_s:.3g} s is known to "
            f"{prior_rad:g} rad beforehand",
        ),
        details={"risk": found.risk},
    )
