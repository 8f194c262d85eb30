"""Nights and rigs that the tests of the forecast share."""

from dataclasses import replace
from functools import cache

import numpy as np

from planner.design.allocation.knowledge import Knowledge, knowledge_of
from planner.design.drift import Prior
from planner.design.forecast.night import Night, Priors, night_of
from planner.design.ordering import make_order
from planner.design.running_order import Kind, RunningOrder
from planner.sequence.model import Sequence
from planner.sequence.rigfile import rig_of
from planner.sequence.table import ShotTable
from tests.design.nights import night as table_of

# invented, as in the example sequences; the reference nights say nothing of their rig
EXPECTED = """
[expected]
contrast           = "0.62 +- 0.05"
coherence_constant = "900 +- 200 s Er um"
atoms              = "12000 +- 1500"
lifetime           = "38 +- 6 s"
excess_noise       = "2.0 +- 0.5"

[goal]"""
KNOWN = ("[goal]", EXPECTED)
Made = tuple[Night, Knowledge, Sequence]


@cache
def ordered(name: str, *changes: tuple[str, str]) -> tuple[RunningOrder, ShotTable, Sequence]:
    """The quick running order of an example night, its table and its sequence."""
    table, sequence = table_of(name, *changes)
    return make_order(table, sequence, seed=1, effort="quick"), table, sequence


@cache
def shuffled(name: str, *changes: tuple[str, str]) -> tuple[RunningOrder, ShotTable, Sequence]:
    """Packets in random order, one after the other and no wait between: at once, where a good order takes seconds."""
    table, sequence = table_of(name, *changes)
    rng = np.random.default_rng(7)
    rows = np.lexsort((rng.random(len(table)), rng.permutation(int(table.packet.max()) + 1)[table.packet]))
    duration = table.duration_s[rows]
    packet = np.cumsum(np.diff(table.packet[rows], prepend=-1) != 0) - 1
    return (
        RunningOrder(
            request=np.zeros(len(rows), dtype=np.int64),
            shot=rows,
            kind=np.full(len(rows), int(Kind.MEASURE)),
            start_s=np.cumsum(duration) - duration,
            settle_s=np.zeros(len(rows)),
            duration_s=duration,
            packet=packet,
            unit=packet,
            flip=np.ones(len(rows), dtype=np.int8),
            seed=7,
        ),
        table,
        sequence,
    )


def along(made: tuple[RunningOrder, ShotTable, Sequence]) -> Made:
    """The night of an order, what is known of its rig, and its sequence."""
    order, table, sequence = made
    rig = rig_of(sequence)
    known = knowledge_of(sequence, rig, float((table.duration_s - table.hold_s).mean()))
    return night_of(order, table, sequence, rig), known, sequence


def night_a() -> Made:
    """Reference night A: twelve holds, four phases, one fast switch; shuffled."""
    return along(shuffled("reference-night-a.toml", KNOWN))


def night_b(repeats: int = 124) -> Made:
    """Reference night B: two holds, two phases, a slow and a fast switch; shuffled."""
    return along(shuffled("reference-night-b.toml", KNOWN, ("repeats = 124", f"repeats = {repeats}")))


def hold_scan() -> Made:
    """The hold scan: eight holds, four phases, a slow switch; shuffled."""
    return along(shuffled("hold-scan.toml"))


def with_contrast_drift(night: Night) -> Night:
    """The same night where only the contrast drifts: a walk to half a shot's noise, and a slow rhythm."""
    slow = Prior(rate=0.5**2 / 36000, periods_s=(9000.0,), amplitudes=(0.2,))
    return replace(night, drift=Priors(contrast=slow))
