"""The goal's target: when it is reached, how many such nights it takes, and which nearby plans do it sooner."""

from dataclasses import dataclass, replace

import numpy as np

from planner.design.allocation.knowledge import Knowledge
from planner.design.forecast.curve import OWN, Forecast, Plan, errors_of
from planner.design.forecast.progress import progress_of
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence

HOLD_FACTORS = (0.5, 0.7, 0.85, 1.15, 1.4, 2.0)  # of the hold, looked at beside it
WORTH_SAYING = 0.02  # a change of the hours smaller than this is no alternative


@dataclass(frozen=True, kw_only=True)
class Reached:
    """A target in the quantity's unit; reached_s None if not in this night; nights: such nights that reach it."""

    quantity: str
    target: float
    unit: str
    reached_s: float | None
    nights: float | None


@dataclass(frozen=True, kw_only=True)
class Alternative:
    """A change of the plan, in words, and the hours for the same error over the present hours."""

    words: str
    hours_ratio: float


def target_of(sequence: Sequence, rig: Knowledge) -> float | None:
    """The goal's target in its quantity's unit: a share of the coherence time becomes seconds."""
    goal = sequence.goal
    if goal.target is None or goal.kind not in OWN:
        return None
    relative = goal.target_unit in ("", "%")
    return goal.target * rig.coherence_s if goal.kind == "coherence" and relative else goal.target


def reached(plan: Plan, found: list[Forecast], target: float) -> Reached:
    """When the goal's quantity reaches the target.

    Later nights are as good as this one, so the part of the variance that rig time mends falls as their number.

    Raises:
        PlanImpossible: no night reaches it; the message names the nearest that one does.
    """
    mine = found[0]
    last = float(mine.error[-1])
    fixed = plan.fixed if mine.name == "signal, all told" else 0.0
    if target <= fixed:
        raise PlanImpossible(
            f"no night reaches {target:.3g} {mine.unit}: {fixed:.3g} {mine.unit} are left by the error of the scale "
            f"factor however long it is; this night reaches {last:.3g} {mine.unit}. Set goal.target above {fixed:.3g} "
            f"{mine.unit}, for {1.5 * fixed:.3g} {mine.unit} about {_nights(last, 1.5 * fixed, fixed):.2g} such nights "
            "do, or know the scale factor better"
        )
    return Reached(
        quantity=mine.name,
        target=target,
        unit=mine.unit,
        reached_s=mine.reached_s(target),
        nights=_nights(last, target, fixed) if last < np.inf else None,
    )


def _nights(error: float, target: float, fixed: float) -> float:
    return (error**2 - fixed**2) / (target**2 - fixed**2)


def drift_share(plan: Plan, rig: Knowledge) -> dict[str, float]:
    """How much wider drift makes each error at the end of the night, as a fraction of the error without it."""
    steady = replace(
        plan,
        progress=progress_of(plan.night.without_drift(), plan.time_s),
        points=None if plan.points is None else replace(plan.points, drift=np.zeros(len(plan.time_s))),
    )
    calm = errors_of(steady, rig)
    return {
        name: float(error[-1] / calm[name][-1]) - 1
        for name, error in errors_of(plan, rig).items()
        if np.isfinite(error[-1]) and calm[name][-1] > 0.0
    }


def alternatives(plan: Plan, rig: Knowledge) -> list[Alternative]:
    """Nearby plans by the hours they need for the same error of the goal's quantity, best first."""
    own = OWN.get(plan.goal.kind)
    if own == "signal" and plan.points is not None and len(plan.points.hold_s) == 1:
        return _other_holds(plan, rig)
    if own in ("coherence time", "contrast at the worst hold", "plateau", "modulation depth"):
        return _other_packets(plan, rig, own)
    return []


def _other_holds(plan: Plan, rig: Knowledge) -> list[Alternative]:
    """Another hold for a signal: shots of the same phases there, at the same cost of dead time."""
    night = plan.night
    hold, kappa, stretch = float(night.hold_s[0]), float(night.kappa[0]), float(night.stretch[0])

    def hours(at: float) -> float:
        one = np.array([at])
        contrast, atoms = float(rig.contrast_at(one / stretch)[0]), float(rig.atoms_at(one)[0])
        return (at + rig.dead_s) / (contrast**2 * atoms * (kappa * at / hold) ** 2)

    holds = [hold * f for f in HOLD_FACTORS if rig.shortest_s <= hold * f <= rig.longest_s]
    return _sorted([Alternative(words=f"a hold of {at:.3g} s", hours_ratio=hours(at) / hours(hold)) for at in holds])


def _other_packets(plan: Plan, rig: Knowledge, own: str) -> list[Alternative]:
    """One hold left out, or run twice as often, the rest as planned."""
    progress = plan.progress
    spent = progress.counts[-1] * progress.shots * (progress.hold_s + rig.dead_s)
    now = float(errors_of(plan, rig)[own][-1])
    if not np.isfinite(now):
        return []
    out = []
    for h, hold in enumerate(progress.hold_s):
        for factor, words in ((0, f"no hold of {hold:.3g} s"), (2, f"twice the packets at a hold of {hold:.3g} s")):
            if factor == 0 and own == "contrast at the worst hold":
                continue  # the goal asks for the contrast at every hold of the sweep
            times = np.ones(len(progress.hold_s), dtype=np.int64)
            times[h] = factor
            other = replace(plan, progress=replace(progress, counts=progress.counts * times), points=None)
            error = float(errors_of(other, rig).get(own, np.array([np.inf]))[-1])
            if np.isfinite(error):
                ratio = float((spent * times).sum() / spent.sum()) * (error / now) ** 2
                out.append(Alternative(words=words, hours_ratio=ratio))
    return _sorted(out)


def _sorted(found: list[Alternative]) -> list[Alternative]:
    kept = [one for one in found if abs(one.hours_ratio - 1) >= WORTH_SAYING]
    return sorted(kept, key=lambda one: one.hours_ratio)
