"""Nights of the demonstration sequence on the stand-in rig's model, made in one piece: no link, no logbook.

The model has two classes of atoms, spilling ones among them, phase noise that grows with hold, drifts, unlocks and
outliers: what it gives is no plain exponential of anything.
"""

from dataclasses import dataclass

import numpy as np

from planner.analysis.data import NightData
from planner.design.ordering import make_order
from planner.design.running_order import RunningOrder
from planner.link.stand_in.model import StandInModel
from planner.link.stand_in.profile import Profile, read_profile
from planner.resources import sequences_folder
from planner.sequence.compiler import compile_sequence
from planner.sequence.reader import read_sequence
from planner.sequence.rigfile import read_rig
from planner.sequence.table import ShotTable


@dataclass(frozen=True, kw_only=True)
class Scene:
    """What all nights have in common."""

    table: ShotTable
    order: RunningOrder
    profile: Profile


def scene(order_seed: int = 1) -> Scene:
    """The demonstration's sequence in one running order, and the stand-in's profile."""
    sequence = read_sequence(sequences_folder() / "hold-scan.toml")
    table = compile_sequence(sequence, read_rig(sequences_folder() / "gallery-rig.toml")).table
    order = make_order(table, sequence, seed=order_seed, effort="quick")
    return Scene(table=table, order=order, profile=read_profile(sequences_folder() / "gallery-stand-in.toml"))


def play(scene: Scene, seed: int) -> NightData:
    """A night as the logbook would hand it over."""
    model, table, order = StandInModel(scene.profile, seed), scene.table, scene.order
    row = order.shot
    start = order.start_s + order.settle_s
    settings = {name: column[row] for name, column in table.settings.items()}
    signs = {name: column[row].astype(float) for name, column in table.switches.items()}
    counts = model.night(settings, signs, start, np.arange(len(row)), load=model.loads(start, order.duration_s))
    return NightData.from_columns(
        {
            "key": np.arange(len(row)).astype(str),
            "position": np.arange(len(row)),
            "request": order.request,
            "shot": row,
            "kind": order.kind,
            "packet": order.packet,
            "cell": table.cell[row],
            "repeat": table.repeat[row],
            "unit": order.unit,
            "hold_s": table.hold_s[row],
            "phase_rad": table.phase_rad[row],
            "start_s": start,
            "mid_s": start + order.duration_s / 2,
            "duration_s": order.duration_s,
            "state": np.full(len(row), "done"),
            "atoms_a": counts.atoms_a,
            "atoms_b": counts.atoms_b,
            "background": counts.background,
            "saturated": counts.saturated,
            "flags": np.where(counts.unlocked, "unlocked", ""),
        }
        | {f"switch_{name}": column for name, column in signs.items()}
        | {f"setting_{name}": column for name, column in settings.items()}
    )
