"""From a sequence and its rig to the allocation for its goal."""

from dataclasses import replace
from math import cos, radians

import numpy as np

from planner.design.allocation.budget import FIXED, TOTAL, Check, allocate_budget
from planner.design.allocation.decay import (
    COHERENCE,
    allocate_coherence,
    allocate_curve,
    allocate_plateau,
    allocate_revival,
)
from planner.design.allocation.knowledge import Knowledge, knowledge_of
from planner.design.allocation.ladder import allocate_ladder
from planner.design.allocation.result import Allocation
from planner.design.allocation.signal import (
    SIGNAL,
    Scale,
    Wander,
    allocate_signal,
    best_hold,
    signal_variance_rate,
)
from planner.design.allocation.target import with_target
from planner.errors import PlanImpossible
from planner.physics.atoms import atom
from planner.physics.constants import HBAR
from planner.sequence.model import Rig, Sequence, Sinusoid

DECAY_GOALS = ("coherence", "curve", "plateau", "revival")
SIGNAL_GOALS = ("signal", "ladder", "budget")
GOALS = (*SIGNAL_GOALS, *DECAY_GOALS)
RISK = 1e-3  # of a ladder whose sequence states none


def allocate(
    sequence: Sequence, rig: Rig, dead_s: float, *, hours: float, goal: str | None = None, robust: bool = True
) -> Allocation:
    """The best use of `hours` for a goal (the sequence's own without one).

    dead_s: all of a cycle that is not hold, s.

    Raises:
        PlanImpossible: something that the goal needs is not said, the hours are too few, or no night reaches the
            target; the message says what would do.
    """
    known = knowledge_of(sequence, rig, dead_s)
    kind = goal or sequence.goal.kind
    if kind in DECAY_GOALS:
        found = _about_decay(sequence, known, kind, hours, robust=robust)
    elif kind in SIGNAL_GOALS:
        found = _about_signal(sequence, rig, known, kind, hours, robust=robust)
    else:
        raise PlanImpossible(
            f'the goal "{kind}" has no allocation of rig time; choose one with --goal: {", ".join(GOALS)}'
        )
    target = sequence.goal.target
    if target is None or kind != sequence.goal.kind:
        return found
    if kind == "coherence":
        absolute = target * known.coherence_s if sequence.goal.target_unit in ("", "%") else target
        return with_target(found, name=COHERENCE, unit="s", target=absolute)
    if kind == "signal":
        return with_target(found, name=SIGNAL, unit="m/s^2", target=target)
    if kind == "budget":
        return with_target(found, name=TOTAL, unit="m/s^2", target=target, fixed=found.errors[FIXED])
    return found


def _about_decay(sequence: Sequence, known: Knowledge, kind: str, hours: float, *, robust: bool) -> Allocation:
    details = sequence.goal.details
    if kind == "coherence":
        return allocate_coherence(known, hours, robust=robust)
    if kind == "curve":
        return allocate_curve(known, hours, np.array(sorted(set(_swept_holds(sequence)))))
    if kind == "plateau":
        level = _needed(details.get("plateau"), "plateau", "the contrast at which the decay may level off")
        return allocate_plateau(known, hours, plateau=level, significance=details.get("significance", 0.05))
    period = _needed(details.get("period_s"), "period", "the period of the modulation")
    depth = _needed(details.get("depth"), "depth", "its relative depth")
    name = sequence.roles["hold"]
    swept = next((sweep.values[name] for sweep in sequence.sweeps if name in sweep.values), ())
    window = (min(swept), max(swept)) if swept and max(swept) - min(swept) >= period else None
    return allocate_revival(
        known,
        hours,
        period_s=period,
        depth=depth,
        significance=details.get("significance", 0.01),
        window_s=window,
    )


def _about_signal(
    sequence: Sequence, rig: Rig, known: Knowledge, kind: str, hours: float, *, robust: bool
) -> Allocation:
    details = sequence.goal.details
    scale = scale_of(sequence, rig)
    if kind == "ladder":
        return allocate_ladder(
            known.draws() if robust and known.spread else [known],
            scale,
            hours,
            longest_s=_longest_swept(sequence),
            risk=details.get("risk", RISK),
        )
    if not sequence.goal.wanted:
        raise PlanImpossible(
            f'the goal "{kind}" needs the parity that carries the signal, such as '
            f'goal.wanted = ["{next(iter(sequence.switches), "switch")}"]'
        )
    if kind == "budget":
        return _budget(known, scale, sequence, hours, robust=robust)
    hold = best_hold(known, scale, robust=robust)
    found = allocate_signal(
        known, scale, hours, largest=details.get("signal", 0.0), wander=wander_of(sequence, known, hold), hold_s=hold
    )
    return replace(found, lines=(*found.lines, *_shallower(sequence, rig, known, scale, found.errors[SIGNAL])))


def _shallower(sequence: Sequence, rig: Rig, known: Knowledge, scale: Scale, error: float) -> list[str]:
    """What another lattice depth would bring, if coherence time x depth x separation is as constant as is said.

    Under that scaling the shallowest lattice is always the best, so the answer is a limit, not an optimum: atoms that a
    shallow lattice loses are not in it.
    """
    name = sequence.roles.get("depth")
    if name is None or sequence.expected.coherence_constant is None or sequence.expected.coherence_s is not None:
        return []
    setting = sequence.settings[name]
    low, _ = rig.setting_limits.get(name, (setting.low, setting.high))
    depth = max(setting.low, low)
    if not 0.0 < depth < setting.rest:
        return []
    other = replace(known, coherence_s=known.coherence_s * setting.rest / depth)
    hold = best_hold(other, scale, robust=False)
    now = best_hold(known, scale, robust=False)
    ratio = float(
        signal_variance_rate(other, scale, np.array([hold]))[0] / signal_variance_rate(known, scale, np.array([now]))[0]
    )
    return [
        f"{name} at its lowest, {depth:.3g} instead of {setting.rest:.3g} Er, with a hold of {hold:.3g} s: the signal "
        f"to {error * ratio**0.5:.2g} m/s^2, or {100 * (1 - ratio):.0f} % fewer hours, if the coherence constant holds "
        "there and no more atoms are lost; measure both before believing it"
    ]


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


def _longest_swept(sequence: Sequence) -> float:
    name = sequence.roles["hold"]
    return max(
        (max(sweep.values[name]) for sweep in sequence.sweeps if name in sweep.values),
        default=sequence.settings[name].rest,
    )


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


def wander_of(sequence: Sequence, known: Knowledge, hold_s: float) -> Wander:
    """The declared drift of the common phase at a hold: phase drift there is given in single-shot noise of y."""
    hold = np.array([hold_s])
    noise = float(np.sqrt(known.variance_at(hold)[0]) / (known.contrast_at(hold)[0] / 2))  # rad, per unit of that
    rate = {"phase": 0.0, "acceleration": 0.0}
    rhythms: dict[str, list[Sinusoid]] = {"phase": [], "acceleration": []}
    for drift in sequence.drift:
        if drift.kind in rate:
            unit = noise if drift.kind == "phase" else 1.0
            rate[drift.kind] += (unit * drift.wander) ** 2 / drift.wander_over_s
            rhythms[drift.kind] += [replace(one, amplitude=unit * one.amplitude) for one in drift.sinusoids]
    return Wander(
        phase_rate=rate["phase"],
        phase_rhythms=tuple(rhythms["phase"]),
        acceleration_rate=rate["acceleration"],
        acceleration_rhythms=tuple(rhythms["acceleration"]),
    )


def _budget(known: Knowledge, scale: Scale, sequence: Sequence, hours: float, *, robust: bool) -> Allocation:
    """Signal beside one check for each swept setting other than hold and readout.

    The offset that the slope is to bridge is what the sweep says under `offset`; without it, the largest distance of
    the swept values from rest. The slope is measured between the sweep's ends. As nothing is known of it before it is
    measured, what the offset's own uncertainty adds to the total is left out.
    """
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
            stands, unsure = sweep.offsets.get(name, (max(abs(rest - min(values)), abs(rest - max(values))), 0.0))
            # between two ends, half of the time each, a slope has four times the variance over the span squared
            checks.append(
                Check(
                    name=name,
                    offset=stands,
                    offset_error=unsure,
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
        scale_error=sequence.goal.details.get("scale_factor_error", 0.0) * sequence.goal.details.get("signal", 0.0),
        stated_share=sequence.goal.details.get("share"),
    )
