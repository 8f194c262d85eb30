"""The same shots in the orders that people use without a planner, and what an order does to the wanted parity."""

import numpy as np

from planner.arrays import IntArray
from planner.design.drift import Drifts
from planner.design.ordering import judge, quality_of
from planner.design.quality import Quality
from planner.design.running_order import Kind, RunningOrder
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable


def shuffled_and_swept(table: ShotTable, sequence: Sequence, drifts: Drifts, *, seed: int) -> dict[str, Quality]:
    """Quality of the same shots in a plain shuffle, and in the same sweep again and again; settle waits left out."""
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(9,)))
    count = table.measuring
    sweep = np.lexsort((np.arange(count), table.repeat[:count]))
    return {
        "shuffled": _judge(table, sequence, rng.permutation(count), drifts),
        "swept": _judge(table, sequence, sweep, drifts),
    }


def _judge(table: ShotTable, sequence: Sequence, rows: IntArray, drifts: Drifts) -> Quality:
    duration = table.duration_s[rows]
    mid = np.cumsum(duration) - duration / 2
    return judge(table, sequence, rows, mid, np.full(len(rows), int(Kind.MEASURE)), drifts)


def parity_figures(
    table: ShotTable, sequence: Sequence, order: RunningOrder, number: int = 0
) -> dict[str, dict[str, float]]:
    """Added variance of the wanted parity's effects, and of each slow switch's own, which dwells leave to slow drift:
    {"collar*kick": {"additive_mean", "additive_worst", "coupled_mean", "coupled_worst"}, ...}; of request `number`."""
    shown = [tuple(sequence.goal.wanted)] if sequence.goal.wanted else []
    shown += [(name,) for name, switch in sequence.switches.items() if switch.slow and (name,) not in shown]
    quality = quality_of(order, table, sequence, number)
    return {"*".join(parity): quality.of_parity(parity) for parity in shown}
