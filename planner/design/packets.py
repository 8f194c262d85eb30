"""The packets of a shot table, and a random order of them that spreads every point over the night.

Everything here is per packet, so that a night of a million shots is ordered as a few ten thousand packets.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

DRAWS = 24  # random rounds looked at for each round kept: balance against the predecessor


@dataclass(frozen=True, kw_only=True)
class Packets:
    """The packets of one table. Arrays of shape (n_packet,) unless said otherwise.

    `first` is the first row of each packet, `size` how many rows follow it in the packet. `point` numbers what sweeps
    and other settings set (switches and readout phase left out); `slow` numbers the state of the slow switches.
    `shape` numbers the make-up of a packet (phases, fast switches, cycle lengths), and `shape_rows` (per shape) is one
    packet's first row, to look the make-up up. `cycle_s` is the mean cycle length inside the packet.
    """

    first: IntArray
    size: IntArray
    point: IntArray
    slow: IntArray
    shape: IntArray
    shape_rows: IntArray
    cycle_s: FloatArray

    def __len__(self) -> int:
        return len(self.first)


def find_packets(table: ShotTable, sequence: Sequence) -> Packets:
    """The packets of a table whose packets are runs of neighbouring rows; check shots are in none."""
    measuring = table.measuring
    first = np.flatnonzero(np.diff(table.packet[:measuring], prepend=-1))
    size = np.diff(np.r_[first, measuring])
    readout = sequence.roles["readout"]
    columns = [np.round(values[first], 15) for name, values in table.settings.items() if name != readout]
    point = number_rows(np.column_stack([np.zeros(len(first)), *columns]))
    slow_names = [name for name, switch in sequence.switches.items() if switch.slow]
    slow = number_rows(np.column_stack([np.zeros(len(first)), *(-table.switches[name][first] for name in slow_names)]))
    shape, shape_rows = _shapes(table, sequence, first, size, point)
    total = np.add.reduceat(table.duration_s[:measuring], first) if len(first) else np.zeros(0)
    return Packets(
        first=first, size=size, point=point, slow=slow, shape=shape, shape_rows=shape_rows, cycle_s=total / size
    )


def number_rows(columns: FloatArray) -> IntArray:
    """Number the distinct rows of a matrix (n, k), in rising order: (n,)."""
    return np.unique(columns, axis=0, return_inverse=True)[1].reshape(-1).astype(np.int64)


def _shapes(
    table: ShotTable, sequence: Sequence, first: IntArray, size: IntArray, point: IntArray
) -> tuple[IntArray, IntArray]:
    """Packets of one point are alike unless their phases or fast switches differ: told apart by sums over the rows."""
    measuring = int(size.sum())
    weight = np.sin(1.0 + np.arange(size.max(initial=0)))[np.arange(measuring) - np.repeat(first, size)]
    marks = [np.add.reduceat(weight * table.phase_rad[:measuring], first)]
    for name, switch in sequence.switches.items():
        if not switch.slow:
            marks.append(np.add.reduceat(weight * table.switches[name][:measuring], first))
    keys = np.column_stack([point, size, *(np.round(mark, 9) for mark in marks)])
    _, where, shape = np.unique(keys, axis=0, return_index=True, return_inverse=True)
    return shape.reshape(-1).astype(np.int64), first[where]


def spread(kind: IntArray, rng: np.random.Generator) -> FloatArray:
    """A random place in (0, 1) for each item, such that the items of one kind are spread evenly over the night.

    The k-th of n items of a kind lies at (k + u) / n, u uniform; which item is the k-th is random too, so that each
    item's place is uniform over the night.
    """
    shuffled = rng.permutation(len(kind))
    ordered = shuffled[np.argsort(kind[shuffled], kind="stable")]
    counts = np.bincount(kind)
    starts = np.repeat(np.cumsum(counts) - counts, counts)
    place = np.empty(len(kind))
    place[ordered] = (np.arange(len(kind)) - starts + rng.random(len(kind))) / np.repeat(counts, counts)
    return place


def balanced_order(kind: IntArray, rng: np.random.Generator) -> IntArray:
    """Order items so that kinds are spread evenly and follow each other evenly: (n,) indices.

    Of a few random spreads of each stretch of the night, the one is kept that repeats the fewest pairs of neighbours:
    a kind should not always follow the same other kind, since a shot remembers the load of the one before it. The rule
    treats all kinds alike, so every item's place stays uniform.
    """
    place = spread(kind, rng)
    order = np.argsort(place, kind="stable")
    kinds = int(kind.max()) + 1
    if kinds < 3 or kinds > 500:
        return order
    seen = np.zeros((kinds, kinds))
    last = -1
    for start in range(0, len(order), kinds):
        stretch = order[start : start + kinds]
        draws = [stretch, *(rng.permutation(stretch) for _ in range(DRAWS))]
        costs = []
        for draw in draws:
            follows = kind[draw]
            before = np.r_[last, follows[:-1]]
            known = before >= 0
            costs.append(float(seen[before[known], follows[known]].sum()))
        stretch = draws[int(np.argmin(costs))]
        order[start : start + kinds] = stretch
        follows = kind[stretch]
        before = np.r_[last, follows[:-1]]
        np.add.at(seen, (before[before >= 0], follows[before >= 0]), 1.0)
        last = int(follows[-1])
    return order
