"""Expected error of each quantity against time through the night, with a band from what is uncertain of the rig.

The running order says which packets are complete when and what drift does to them (progress.py, signals.py); their
information adds up (decays.py, signals.py). The band comes from other rigs that are as likely: log-normal draws of what
is known with an uncertainty.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.forecast.decays import level_error, modulation_error, time_scale_errors, worst_contrast_error
from planner.design.forecast.night import Night
from planner.design.forecast.progress import Progress, progress_of
from planner.design.forecast.signals import Points, points_of, signal_errors
from planner.sequence.model import GoalSpec, Sequence

DRAWS = 2000  # rigs behind the band: its ends then lie within a half percent of their quantiles
BAND = (0.05, 0.95)
UNITS = {
    "modulation depth": "relative",
    "plateau": "contrast",
    "contrast": "relative",
    "contrast at the worst hold": "relative",
    "coherence time": "s",
    "population lifetime": "s",
    "signal": "m/s^2",
    "signal, all told": "m/s^2",
}
OWN = {
    "coherence": "coherence time",
    "curve": "contrast at the worst hold",
    "plateau": "plateau",
    "revival": "modulation depth",
    "signal": "signal",
    "ladder": "signal",
    "budget": "signal, all told",
}


@dataclass(frozen=True, kw_only=True)
class Forecast:
    """One quantity. Arrays of shape (n_time,): expected standard error and its band. inf before anything is known."""

    name: str
    unit: str
    time_s: FloatArray
    error: FloatArray
    low: FloatArray
    high: FloatArray

    def reached_s(self, target: float) -> float | None:
        """When the expected error has fallen to the target for good, s from the night's start; None if it has not."""
        above = np.flatnonzero(~(self.error <= target))
        after = int(above[-1]) + 1 if len(above) else 0
        return float(self.time_s[after]) if after < len(self.time_s) else None


@dataclass(frozen=True, kw_only=True)
class Plan:
    """What is forecast: a night up to some hours, and what it is for."""

    goal: GoalSpec
    night: Night
    progress: Progress
    points: Points | None  # None where no parity is wanted or the scale is unknown
    offset: FloatArray | None  # of each swept setting, for a budget
    fixed: float = 0.0  # m/s^2, error of the signal that no rig time mends

    @property
    def time_s(self) -> FloatArray:
        """Times at which the errors are given."""
        return self.progress.time_s


def plan_of(sequence: Sequence, night: Night, rig: Knowledge, time_s: FloatArray) -> Plan:
    """The forecast's question for a night at some times; `rig` weighs drift against noise."""
    goal = sequence.goal
    tells = bool(goal.wanted) and bool((night.kappa > 0.0).all())
    offset = None
    if goal.kind == "budget" and night.settings:
        offset = np.array(
            [np.abs(value - sequence.settings[name].rest).max() for name, value in night.settings.items()]
        )
    return Plan(
        goal=goal,
        night=night,
        progress=progress_of(night, time_s),
        points=points_of(night, rig, time_s) if tells else None,
        offset=offset,
        fixed=goal.details.get("scale_factor_error", 0.0) * goal.details.get("signal", 0.0),
    )


def errors_of(plan: Plan, rig: Knowledge) -> dict[str, FloatArray]:
    """Expected errors (n_time,) of all that the night can tell, the goal's own first."""
    found: dict[str, FloatArray] = {}
    progress, asked, kind = plan.progress, plan.goal.details, plan.goal.kind
    told = plan.night.whole_fringes and plan.night.one_coherence
    if told and kind == "revival":
        found["modulation depth"] = modulation_error(rig, progress, asked["period_s"])
    if told and kind == "plateau" and "plateau" in asked:
        found["plateau"] = level_error(rig, progress, asked["plateau"])
    if told and (kind == "curve" or len(progress.hold_s) == 1):
        name = "contrast at the worst hold" if kind == "curve" else "contrast"
        found[name] = worst_contrast_error(rig, progress)
    if len(progress.hold_s) > 1:
        found |= time_scale_errors(rig, progress, contrast=told)
    if plan.points is not None:
        # the last packets can be left out beforehand where drift makes them do harm, as in half a pair of dwells
        raw = signal_errors(rig, plan.points, offset=plan.offset, fixed=plan.fixed)
        found |= {name: np.minimum.accumulate(error) for name, error in raw.items()}
    own = OWN.get(kind, "")
    order = sorted(found, key=lambda name: name != own)
    scales = {"coherence time": rig.coherence_s, "population lifetime": rig.lifetime_s}
    return {name: found[name] for name in order if name == own or found[name][-1] < scales.get(name, np.inf)}


def best_signal_s(plan: Plan, rig: Knowledge) -> float:
    """The time up to which packets count for the smallest error of the signal: the end, or where drift does less."""
    if plan.points is None:
        return float(plan.time_s[-1])
    return float(plan.time_s[int(np.argmin(signal_errors(rig, plan.points)["signal"]))])


def forecasts(plan: Plan, rig: Knowledge, *, seed: int = 0, draws: int = DRAWS) -> list[Forecast]:
    """Every quantity of a plan with its band; a time scale that stays less sure than itself is left out."""
    centre = errors_of(plan, rig)
    others = [errors_of(plan, one) for one in (rig.draws(seed, draws) if rig.spread else [rig])]
    out = []
    for name, error in centre.items():
        band = np.array([other.get(name, np.full(len(error), np.inf)) for other in others])
        low, high = np.quantile(band, BAND, axis=0, method="higher")
        out.append(Forecast(name=name, unit=UNITS[name], time_s=plan.time_s, error=error, low=low, high=high))
    return out
