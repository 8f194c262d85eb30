"""From a sequence and its rig to the allocation for its goal."""

from math import cos, radians

import numpy as np

from planner.design.allocation.budget import Check, allocate_budget
from planner.design.allocation.decay import allocate_coherence, allocate_curve, allocate_plateau, allocate_revival
from planner.design.allocation.knowledge import Knowledge, knowledge_of
from planner.design.allocation.result import Allocation, Certificate, Share
from planner.design.allocation.signal import Scale, allocate_signal, signal_variance_rate
from planner.design.ladder import ladder
from planner.errors import PlanImpossible
from planner.physics.atoms import atom
from planner.physics.constants import HBAR
from planner.sequence.model import Rig, Sequence

GOALS = ("signal", "coherence", "curve", "plateau", "revival", "ladder", "budget")
PRIOR_RAD = 0.3  # how well the phase at the shortest hold is known before a ladder; common practice, no source
RISK = 1e-3  # of a ladder whose sequence states none


def allocate(
    sequence: Sequence, rig: Rig, dead_s: float, *, hours: float, goal: str | None = None, robust: bool = True
) -> Allocation:
    """The best use of `hours` for a goal (the sequence's own without one).

    dead_s: all of a cycle that is not hold, s.

    Raises:
        PlanImpossible: something that the goal needs is not said, or the hours are too few; the message says what.
    """
    known = knowledge_of(sequence, rig, dead_s)
    kind = goal or sequence.goal.kind
    details = sequence.goal.details
    if kind == "coherence":
        return allocate_coherence(known, hours, robust=robust)
    if kind == "curve":
        return allocate_curve(known, hours, np.array(sorted(set(_swept_holds(sequence)))))
    if kind == "plateau":
        level = _needed(details.get("plateau"), "plateau", "the contrast at which the decay may level off")
        return allocate_plateau(known, hours, plateau=level, significance=details.get("significance", 0.05))
    if kind == "revival":
        period = _needed(details.get("period"), "period", "the period of the modulation")
        depth = _needed(details.get("depth"), "depth", "its relative depth")
        return allocate_revival(
            known, hours, period_s=period, depth=depth, significance=details.get("significance", 0.01)
        )
    scale = scale_of(sequence, rig)
    if kind == "ladder":
        return _ladder(known, scale, hours, details.get("risk", RISK))
    if not sequence.goal.wanted:
        raise PlanImpossible(
            f'the goal "{kind}" needs the parity that carries the signal, such as '
            f'goal.wanted = ["{next(iter(sequence.switches), "switch")}"]'
        )
    if kind == "budget":
        return _budget(known, scale, sequence, hours, robust=robust)
    return allocate_signal(
        known,
        scale,
        hours,
        largest=details.get("signal", 0.0),
        wander_rad_per_root_s=_walk(sequence, known, scale),
        robust=robust,
    )


def _needed(value: float | None, name: str, what: str) -> float:
    if value is None:
        raise PlanImpossible(f"this goal needs goal.details.{name}: {what}")
    return value


def _swept_holds(sequence: Sequence) -> tuple[float, ...]:
    name = sequence.roles["hold"]
    for sweep in sequence.sweeps:
        if name in sweep.values:
            return sweep.values[name]
    raise PlanImpossible(f'the goal "curve" needs the holds to be measured: a sweep of {name}')


def scale_of(sequence: Sequence, rig: Rig) -> Scale:
    """Phase per signal of a sequence on its rig, along the vertical.

    Raises:
        PlanImpossible: no setting plays the separation.
    """
    name = sequence.roles.get("separation")
    if name is None:
        raise PlanImpossible("this goal needs the scale factor: declare roles.separation")
    split = sequence.roles.get("split")
    mass = atom(sequence.atom).mass_kg
    return Scale(
        per_second_m=mass / HBAR * cos(radians(rig.axis_to_vertical_deg)),
        separation_m=sequence.settings[name].rest,
        split_s=sequence.settings[split].rest if split else 0.0,
    )


def _walk(sequence: Sequence, known: Knowledge, scale: Scale) -> float:
    """How fast the common phase walks at the best hold, rad per root second, by the declared drift."""
    from planner.design.allocation.signal import best_hold

    hold = np.array([best_hold(known, scale, robust=False)])
    noise = float(np.sqrt(known.variance_at(hold)[0]) / (known.contrast_at(hold)[0] / 2))
    rate = 0.0
    for drift in sequence.drift:
        per_s = drift.wander**2 / drift.wander_over_s
        if drift.kind == "phase":
            rate += per_s * noise**2
        elif drift.kind == "acceleration":
            rate += per_s * float(scale.at(hold)[0]) ** 2
    return float(np.sqrt(rate))


def _ladder(known: Knowledge, scale: Scale, hours: float, risk: float) -> Allocation:
    def sigma(hold: float) -> float:
        one = np.array([hold])
        variance = 8 * known.variance_at(one) / (known.packet_shots * known.contrast_at(one) ** 2)
        return float(np.sqrt(variance[0]))

    found = ladder(
        shortest_s=known.shortest_s,
        longest_s=known.longest_s,
        prior_rad=PRIOR_RAD,
        sigma_of=sigma,
        scale_of=lambda hold: float(scale.at(np.array([hold]))[0]),
        cost_of=lambda hold: float(known.packet_s(np.array([hold]))[0]),
        risk=risk,
    )
    if found.rig_s > hours * 3600:
        raise PlanImpossible(
            f"the ladder takes {found.rig_s / 3600:.2f} h, the night has {hours:g} h: allow more risk or more hours"
        )
    shares = tuple(
        Share(
            hold_s=hold,
            packets=count,
            shots=count * known.packet_shots,
            kind="fringe",
            rig_s=count * float(known.packet_s(np.array([hold]))[0]),
            wanted_share=count * float(known.packet_s(np.array([hold]))[0]) / found.rig_s,
        )
        for hold, count in zip(found.holds_s, found.packets, strict=True)
    )
    finest = found.sigma_rad[-1] / float(scale.at(np.array([found.holds_s[-1]]))[0])
    return Allocation(
        goal="ladder",
        hours=hours,
        shares=shares,
        errors={"acceleration (m/s^2)": finest},
        certificate=Certificate(criterion="risk", value=found.risk, bound=risk, efficiency=1.0),
        rounded=1.0,
        lines=(
            f"{len(shares)} rungs in {found.rig_s / 60:.0f} min; wrong fringe with chance {found.risk:.2g} at most, "
            f"the phase at the shortest hold known to {PRIOR_RAD:g} rad beforehand",
        ),
        details={"risk": found.risk},
    )


def _budget(known: Knowledge, scale: Scale, sequence: Sequence, hours: float, *, robust: bool) -> Allocation:
    """Signal beside one check for each swept setting other than hold and readout.

    The offset that the slope is to bridge is taken as the largest distance of the swept values from rest: a sweep says
    how far the setting may stand from where its effect vanishes. The slope is measured between the sweep's ends.
    """
    from planner.design.allocation.signal import best_hold

    hold = best_hold(known, scale, robust=robust)
    rate = float(signal_variance_rate(known, scale, np.array([hold]))[0])
    skip = {sequence.roles["hold"], sequence.roles["readout"]}
    checks = []
    for sweep in sequence.sweeps:
        for name, values in sweep.values.items():
            span = max(values) - min(values)
            if name in skip or span <= 0.0:
                continue
            rest = sequence.settings[name].rest
            # between two ends, half of the time each, a slope has four times the variance over the span squared
            checks.append(
                Check(
                    name=name,
                    offset=max(abs(rest - min(values)), abs(rest - max(values))),
                    offset_error=0.0,
                    slope_variance_s=4 * rate / span**2,
                    slope=0.0,
                    packet_s=8 * (hold + known.dead_s),
                    shots=8,
                    hold_s=hold,
                )
            )
    if not checks:
        raise PlanImpossible('the goal "budget" needs checks: sweep the settings whose effect is to be bounded')
    return allocate_budget(
        signal_variance_s=rate,
        signal_packet_s=4 * (hold + known.dead_s),
        signal_shots=4,
        hold_s=hold,
        checks=checks,
        hours=hours,
    )
