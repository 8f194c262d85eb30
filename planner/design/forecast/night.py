"""The measured shots of a running order, as a forecast and a rehearsal need them: when, at which point, which parity.

Drift is the declared one, in the units of the sequence file: single-shot noise for additive, phase and contrast, m/s^2
for that of the acceleration.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.acceleration import noise_per_acceleration
from planner.design.allocation.choose import scale_of
from planner.design.allocation.knowledge import Knowledge
from planner.design.drift import NONE, Prior, drifts_of
from planner.design.running_order import Kind, RunningOrder
from planner.physics.atoms import atom
from planner.physics.interferometer import scale_factor
from planner.sequence.model import Rig, Sequence
from planner.sequence.table import ShotTable

WHOLE_FRINGE = 3  # phases that tell offset, contrast and phase apart


@dataclass(frozen=True, kw_only=True)
class Priors:
    """Declared drift by kind; `acceleration` in m/s^2, the others in single-shot noise."""

    additive: Prior = NONE
    phase: Prior = NONE
    contrast: Prior = NONE
    acceleration: Prior = NONE

    @property
    def any(self) -> bool:
        """Whether anything drifts."""
        return any(drifts(one) for one in (self.additive, self.phase, self.contrast, self.acceleration))


def drifts(prior: Prior) -> bool:
    """Whether a prior moves at all."""
    return prior.rate > 0.0 or bool(prior.periods_s)


@dataclass(frozen=True, kw_only=True)
class Night:
    """Measured shots in running order. Arrays of shape (n_shot,) unless said.

    done_s: when the shot's packet is complete, s after the night's start; packet: numbered along the night, its shots
    neighbours; parity: product of the wanted switches, 0 where none is wanted; stretch: coherence time over that at the
    resting depth and separation; kappa: rad per m/s^2 (0 where no setting plays the separation); per_acceleration:
    coupled drift in single-shot noise per m/s^2 (0 without drift of the acceleration); settings: those that are swept
    beside hold and readout, SI.
    """

    mid_s: FloatArray
    done_s: FloatArray
    hold_s: FloatArray
    phase_rad: FloatArray
    parity: FloatArray
    packet: IntArray
    stretch: FloatArray
    kappa: FloatArray
    per_acceleration: FloatArray
    settings: Mapping[str, FloatArray]
    drift: Priors

    def __len__(self) -> int:
        return len(self.hold_s)

    @property
    def whole_fringes(self) -> bool:
        """Whether the readout phases tell a fringe's contrast."""
        return len(np.unique(np.round(self.phase_rad, 9))) >= WHOLE_FRINGE

    @property
    def one_coherence(self) -> bool:
        """Whether one coherence time is expected at all shots."""
        return bool(np.ptp(self.stretch) <= 1e-9 * self.stretch[0])

    def contrast(self, rig: Knowledge) -> FloatArray:
        """Expected contrast of each shot."""
        return rig.contrast_at(self.hold_s / self.stretch)

    def noise(self, rig: Knowledge) -> FloatArray:
        """Variance of each shot's fraction, averaged over the fringe: the unit of drift, squared."""
        return np.asarray(rig.excess * (1 - self.contrast(rig) ** 2 / 2) / (4 * rig.atoms_at(self.hold_s)))

    def without_drift(self) -> "Night":
        """The same night on a rig that does not drift."""
        return replace(self, drift=Priors())

    def until(self, end_s: float) -> "Night":
        """The packets that are complete by a time."""
        keep = self.done_s <= end_s
        columns: dict[str, Any] = {
            name: value[keep] for name, value in vars(self).items() if isinstance(value, np.ndarray)
        }
        return replace(self, **columns, settings={name: value[keep] for name, value in self.settings.items()})


def night_of(order: RunningOrder, table: ShotTable, sequence: Sequence, rig: Rig) -> Night:
    """The night of an order.

    Raises:
        PlanImpossible: drift of the acceleration is declared, and nothing to weigh it by.
    """
    measured = order.kind == int(Kind.MEASURE)
    rows = order.shot[measured]
    packet = np.cumsum(np.diff(order.packet[measured], prepend=-2) != 0) - 1
    end = (order.start_s + order.settle_s + order.duration_s)[measured]
    done = np.maximum.reduceat(end, np.flatnonzero(np.diff(packet, prepend=-1)))[packet]
    parity = np.ones(len(rows)) if sequence.goal.wanted else np.zeros(len(rows))
    for name in sequence.goal.wanted:
        parity = parity * table.switches[name][rows]
    moved = any(one.kind == "acceleration" for one in sequence.drift)
    skip = {sequence.roles["hold"], sequence.roles["readout"]}
    swept = {name for sweep in sequence.sweeps for name in sweep.values} - skip
    return Night(
        mid_s=(order.start_s + order.settle_s + order.duration_s / 2)[measured],
        done_s=done,
        hold_s=table.hold_s[rows],
        phase_rad=table.phase_rad[rows],
        parity=parity,
        packet=packet.astype(np.int64),
        stretch=_stretch(table, sequence)[rows],
        kappa=_kappa(table, sequence, rig)[rows],
        per_acceleration=(noise_per_acceleration(table, sequence) if moved else np.zeros(len(table)))[rows],
        settings={name: table.settings[name][rows] for name in sorted(swept)},
        drift=priors_of(sequence, table),
    )


def priors_of(sequence: Sequence, table: ShotTable) -> Priors:
    """Declared drift by kind; where neither phase nor contrast is declared the reference prior counts as phase's."""

    def only(*kinds: str) -> Sequence:
        return replace(sequence, drift=tuple(one for one in sequence.drift if one.kind in kinds))

    declared = {one.kind for one in sequence.drift}
    coupled = {kind: drifts_of(only(kind), table).coupled for kind in ("phase", "contrast") if kind in declared}
    if not coupled:
        coupled = {"phase": drifts_of(only(), table).coupled}
    everything = drifts_of(sequence, table)
    return Priors(additive=everything.additive, acceleration=everything.acceleration, **coupled)


def _stretch(table: ShotTable, sequence: Sequence) -> FloatArray:
    """By how much a coherence time that follows from the coherence constant differs from that at rest, (n_row,)."""
    names = [sequence.roles.get("depth"), sequence.roles.get("separation")]
    out = np.ones(len(table))
    if sequence.expected.coherence_s is None:
        for name in names:
            if name is not None:
                out *= sequence.settings[name].rest / table.settings[name]
    return out


def _kappa(table: ShotTable, sequence: Sequence, rig: Rig) -> FloatArray:
    name, split = sequence.roles.get("separation"), sequence.roles.get("split")
    if name is None:
        return np.zeros(len(table))
    scale = scale_of(sequence, rig)
    vertical = scale_factor(
        atom(sequence.atom).mass_kg, table.settings[name], table.hold_s, table.settings[split] if split else 0.0
    )
    return np.asarray(vertical * scale.per_second_m / float(scale_factor(atom(sequence.atom).mass_kg, 1.0, 1.0)))
