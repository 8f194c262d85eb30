"""The same shots in the orders that people use without a planner, and what an order does to the wanted parity."""

import numpy as np

from planner.arrays import IntArray
from planner.design.drift import Drifts
from planner.design.ordering import judge
from planner.design.quality import Quality
from planner.design.running_order import Kind, RunningOrder
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable


def shuffled_and_swept(table: ShotTable, sequence: Sequence, drifts: Drifts, *, seed: int) -> dict[str, Quality]:
    """Quality of the same shots in a plain shuffle, and in the same sweep again and again; settle waits left out."""
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(9,)))
    sweep = np.lexsort((np.arange(len(table)), table.repeat))
    return {
        "shuffled": _judge(table, sequence, rng.permutation(len(table)), drifts),
        "swept": _judge(table, sequence, sweep, drifts),
    }


def _judge(table: ShotTable, sequence: Sequence, rows: IntArray, drifts: Drifts) -> Quality:
    duration = table.duration_s[rows]
    mid = np.cumsum(duration) - duration / 2
    return judge(table, sequence, rows, mid, np.full(len(rows), int(Kind.MEASURE)), drifts)


def wanted_figures(table: ShotTable, sequence: Sequence, order: RunningOrder, drifts: Drifts) -> dict[str, float]:
    """Mean added variance over the effects of the wanted parity alone; empty where no parity is wanted."""
    if not sequence.goal.wanted:
        return {}
    quality = judge(
        table, sequence, order.shot, order.start_s + order.settle_s + order.duration_s / 2, order.kind, drifts
    )
    names = set(sequence.goal.wanted)

    def mean(values: dict[str, float]) -> float:
        mine = [value for name, value in values.items() if set(name.rsplit(" ", 2)[-2].split("*")) == names]
        return float(np.mean(mine)) if mine else 0.0

    return {"additive_mean": mean(dict(quality.additive)), "coupled_mean": mean(dict(quality.coupled))}
