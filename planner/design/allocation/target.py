"""Is the goal's target within reach, and if not, what would do?"""

from dataclasses import replace

from planner.design.allocation.result import Allocation
from planner.errors import PlanImpossible


def with_target(found: Allocation, *, name: str, unit: str, target: float, fixed: float = 0.0) -> Allocation:
    """The allocation with a line that says how many hours reach the target.

    name: the error of `found.errors` that the target is for; fixed: the part of it that no rig time mends. The rest of
    its square goes as one over the hours.

    Raises:
        PlanImpossible: the target lies below the fixed part: no night reaches it. The message names the nearest that
            one does.
    """
    error = found.errors[name]
    if target <= fixed:
        raise PlanImpossible(
            f"no night reaches {target:.3g} {unit}: {fixed:.3g} {unit} are left however long it is; {found.hours:g} h "
            f"reach {error:.3g} {unit}. Aim above {fixed:.3g} {unit}, or know the scale factor and the offsets of the "
            "checked settings better"
        )
    hours = found.hours * (error**2 - fixed**2) / (target**2 - fixed**2)
    nights = hours / found.hours
    words = (
        f"target of {target:.3g} {unit}: reached after about {hours:.2g} h of this plan"
        if nights <= 1.0
        else f"target of {target:.3g} {unit}: not in {found.hours:g} h, which reach {error:.3g} {unit}; it takes "
        f"{hours:.3g} h, or {nights:.2g} such nights"
    )
    return replace(found, lines=(*found.lines, words), details={**found.details, "target_hours": hours})
