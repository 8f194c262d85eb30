"""The signal goal: the smallest error on the wanted parity, in the signal's unit, for the rig time.

One shot at mid-fringe knows the phase with variance excess / (C^2 N); divided by the scale factor squared it is the
signal's. The best hold T minimises (T + dead) excess / (C(T)^2 N(T) kappa(T)^2): longer holds have more scale, less
contrast, fewer atoms and cost more time. With zero dead time, no loss of atoms and kappa proportional to T the optimum
is T = tau_c / 2, and with dead time alone counting T = tau_c (derived: the derivative of T exp(-2T/tau_c) and of
T^2 exp(-2 T / tau_c)).

Mid-fringe packets (two phases, a quarter turn either side of the fringe) tell phase best and know nothing of contrast;
full fringes tell contrast and find the fringe. How many of which is a c-optimal design for the signal s in
y = B + (C/2) cos(phi + p kappa s + theta), with phi, B and log C free, at the largest signal thought possible: the
larger the signal, the more its scale, the contrast, matters. Between packets the fringe walks and the tide moves it;
mid-fringe packets follow it as well as they measure it, and tell less where they miss the slopes (tracking.py).
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.allocation.result import Allocation, Certificate, Share
from planner.design.optimal import information, l_optimal
from planner.design.rounding import counts_in_budget
from planner.design.tracking import Motion, kept_information, motion, variance_before
from planner.errors import PlanImpossible
from planner.sequence.model import Sinusoid

GRID = 400
SIGNAL = "signal (m/s^2)"  # the name of its error
MID_SHOTS = 4  # of a packet at mid-fringe: two phases, both signs of the parity
LEAST_FULL = 2  # full fringes that find the fringe at the start of a night, whatever the design says


@dataclass(frozen=True, kw_only=True)
class Scale:
    """Phase per signal: per_second_m (rad per m/s^2, per s of hold and m of separation) is mass / hbar."""

    per_second_m: float
    separation_m: float
    split_s: float = 0.0

    def at(self, hold_s: FloatArray) -> FloatArray:
        """kappa, rad per m/s^2."""
        return np.asarray(self.per_second_m * self.separation_m * (hold_s + self.split_s))


def signal_variance_rate(rig: Knowledge, scale: Scale, hold_s: FloatArray) -> FloatArray:
    """Variance of the signal times rig time for mid-fringe shots, (m/s^2)^2 s, at each hold."""
    phase = rig.excess / (rig.contrast_at(hold_s) ** 2 * rig.atoms_at(hold_s))
    return np.asarray(phase * (hold_s + rig.dead_s) / scale.at(hold_s) ** 2)


def best_hold(rig: Knowledge, scale: Scale, *, robust: bool = True) -> float:
    """The hold with the smallest error per root hour; robust: on average over what is uncertain, each rig's error in
    units of its own best."""
    hold = np.geomspace(max(rig.shortest_s, 1e-3), rig.longest_s, GRID)
    loss = np.zeros(GRID)
    for one in rig.draws() if robust and rig.spread else [rig]:
        rate = signal_variance_rate(one, scale, hold)
        loss += rate / rate.min()
    return float(hold[int(loss.argmin())])


def packet_factors(rig: Knowledge, scale: Scale, hold_s: float, signal: float) -> FloatArray:
    """Factors (2, n_row, 4) of a mid-fringe and a full packet about (s, phi, B, log C), for one second of rig time.

    Rows are shots: phases x the two signs of the parity, the fringe followed so that phi = 0 puts +-90 degrees at its
    slopes. Each packet's cost is its number of shots; both hold every phase with both signs.
    """
    hold = np.array([hold_s])
    contrast, kappa = float(rig.contrast_at(hold)[0]), float(scale.at(hold)[0])
    atoms = float(rig.atoms_at(hold)[0])
    out = np.zeros((2, 2 * rig.phases, 4))
    for which, phases in enumerate((np.array([-0.5, 0.5]) * np.pi, 2 * np.pi * np.arange(rig.phases) / rig.phases)):
        theta = np.repeat(phases, 2)
        sign = np.tile([1.0, -1.0], len(phases))
        angle = theta + sign * kappa * signal
        y = np.clip(0.5 + contrast / 2 * np.cos(angle), 1e-6, 1 - 1e-6)
        sigma = np.sqrt(rig.excess * y * (1 - y) / atoms)
        slope = -contrast / 2 * np.sin(angle)
        rows = np.stack([slope * sign * kappa, slope, np.ones_like(slope), contrast / 2 * np.cos(angle)], axis=1)
        out[which, : len(rows)] = rows / (sigma * np.sqrt(len(rows) * (hold_s + rig.dead_s)))[:, None]
    return out


@dataclass(frozen=True, kw_only=True)
class Wander:
    """Declared drift of the phase common to both signs of the parity.

    `phase_rate` in rad^2/s and `acceleration_rate` in (m/s^2)^2/s are those of random walks; the rhythms' amplitudes
    (RMS) are in rad and m/s^2.
    """

    phase_rate: float = 0.0
    phase_rhythms: tuple[Sinusoid, ...] = ()
    acceleration_rate: float = 0.0
    acceleration_rhythms: tuple[Sinusoid, ...] = ()

    def between(self, kappa: float, spacing_s: float) -> Motion:
        """How the phase moves in spacing_s at a scale factor kappa, rad per m/s^2."""
        return motion(self.phase_rate, self.phase_rhythms, spacing_s) + motion(
            self.acceleration_rate, self.acceleration_rhythms, spacing_s, kappa
        )


def allocate_signal(
    rig: Knowledge,
    scale: Scale,
    hours: float,
    *,
    largest: float = 0.0,
    wander: Wander | None = None,
    hold_s: float | None = None,
    robust: bool = True,
) -> Allocation:
    """Hold, and full and mid-fringe packets, for the smallest error of the signal.

    largest: largest signal thought possible, m/s^2. wander: how the common phase drifts; it makes the mid-fringe
    phases miss the slopes, and the error larger.

    Raises:
        PlanImpossible: the hours are too few for the packets that find the fringe and one at mid-fringe.
    """
    hold = best_hold(rig, scale, robust=robust) if hold_s is None else hold_s
    factors = packet_factors(rig, scale, hold, largest)
    wanted = np.array([[1.0], [0.0], [0.0], [0.0]])
    design = l_optimal(factors, wanted)
    cost = np.array([MID_SHOTS, 2.0 * rig.phases]) * (hold + rig.dead_s)
    budget = hours * 3600
    if budget < LEAST_FULL * cost[1] + cost[0]:
        raise PlanImpossible(
            f"{hours:g} h are too few at a hold of {hold:.3g} s: {LEAST_FULL} fringes to find it and one packet at its "
            f"slopes take {(LEAST_FULL * cost[1] + cost[0]) / 3600:.2f} h; give that or more"
        )
    weights = np.maximum(design.weights, [0.0, LEAST_FULL * cost[1] / budget])
    counts = counts_in_budget(np.maximum(weights, 1e-9) / weights.sum(), cost, budget)
    if counts[1] < LEAST_FULL:
        counts[1] = LEAST_FULL
        counts[0] = max(1, int((budget - counts[1] * cost[1]) / cost[0]))
    spent = counts * cost
    ideal = float(np.linalg.pinv(information(factors, spent))[0, 0])
    one = np.array([hold])
    measured = float(rig.excess / (rig.contrast_at(one)[0] ** 2 * rig.atoms_at(one)[0])) / MID_SHOTS
    moved = (wander or Wander()).between(float(scale.at(one)[0]), float(spent.sum() / counts.sum()))
    missed = variance_before(moved, measured)
    kept = kept_information(missed)
    error = float(np.sqrt(ideal / kept))
    shares = tuple(
        Share(
            hold_s=hold,
            packets=int(count),
            shots=int(count) * per,
            kind=kind,
            rig_s=float(seconds),
            wanted_share=float(weight),
        )
        for count, per, kind, seconds, weight in zip(
            counts, (MID_SHOTS, 2 * rig.phases), ("mid", "fringe"), spent, design.weights, strict=True
        )
    )
    return Allocation(
        goal="signal",
        hours=hours,
        shares=shares,
        errors={SIGNAL: error},
        certificate=Certificate(criterion="c", value=design.value, bound=design.bound, efficiency=design.efficiency),
        rounded=design.bound / budget / ideal,
        lines=(
            f"best hold {hold:.3g} s; the signal to {error:.2g} m/s^2 in {hours:g} h, "
            f"{error * np.sqrt(hours):.2g} m/s^2 in one hour",
            f"{counts[1]} full fringes find the fringe and know its contrast; packets at its slopes follow it: before "
            f"each its phase is known to {np.sqrt(missed):.2g} rad, and {100 * (1 - kept):.2g} % of the time is lost "
            "to missed slopes",
        ),
        details={
            "hold_s": hold,
            "rate": float(signal_variance_rate(rig, scale, one)[0]),
            "missed_rad": float(np.sqrt(missed)),
            "kept": kept,
        },
    )
