"""How many packets of each point fit into a time, so that what runs is balanced."""

import numpy as np

from planner.arrays import BoolArray, IntArray
from planner.design.packets import Packets, find_packets
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

STEPS = 40  # of the bisection for how much fits


def packets_that_fit(packets: Packets, stands: BoolArray, place: IntArray, room_s: float) -> BoolArray:
    """Which packets come, (n_packet,): of every point as many as keep the night balanced and fit into room_s.

    Every point aims at the same share of its plan, done and to come, to within a packet; each state of the slow
    switches has as many to come as any other, since their dwells come in sets.

    Args:
        packets: all that are planned. stands (n_packet,): those that need not come. place (n_packet,): which packets
        and points give way first is chance: a random permutation. room_s: time for the packets alone, without waits
        of switches, warm-up and check shots.
    """
    cell = packets.point * (int(packets.slow.max()) + 1) + packets.slow
    cells = np.unique(cell)
    planned = {int(c): int((cell == c).sum()) for c in cells}
    done = {int(c): int(((cell == c) & stands).sum()) for c in cells}
    length = packets.cycle_s * packets.size

    def wanted(part: float) -> dict[int, int]:
        out = {}
        for point in np.unique(packets.point):
            mine = [int(c) for c in cells if (packets.point[cell == c] == point).all()]
            need = max(int(np.floor(part * planned[c] + 1e-9)) - done[c] for c in mine)
            most = min(planned[c] - done[c] for c in mine)
            out.update(dict.fromkeys(mine, max(0, min(need, most))))
        return out

    def time_of(counts: dict[int, int]) -> float:
        return float(sum(counts[int(c)] * length[cell == c].mean() for c in cells))

    low, high = 0.0, 1.0
    if time_of(wanted(1.0)) <= room_s:
        low = 1.0
    else:
        for _ in range(STEPS):
            middle = (low + high) / 2
            if time_of(wanted(middle)) <= room_s:
                low = middle
            else:
                high = middle
    counts = wanted(low)
    if any(counts.values()):  # less than one packet of each point is no part of a balanced night
        _fill(counts, packets, cell, planned, done, place, room_s - time_of(counts))
    chosen = np.zeros(len(packets), dtype=np.bool_)
    for c in cells:
        free = np.flatnonzero((cell == c) & ~stands)
        chosen[free[np.argsort(place[free], kind="stable")][: counts[int(c)]]] = True
    return chosen


def _fill(
    counts: dict[int, int],
    packets: Packets,
    cell: IntArray,
    planned: dict[int, int],
    done: dict[int, int],
    place: IntArray,
    left_s: float,
) -> None:
    """One packet more of some points, in random order, into what time is left."""
    length = packets.cycle_s * packets.size
    shuffled = packets.point[np.argsort(place)]
    for point in shuffled[np.sort(np.unique(shuffled, return_index=True)[1])]:
        mine = [int(c) for c in np.unique(cell[packets.point == point])]
        needs = float(sum(length[cell == c].mean() for c in mine))
        if needs <= left_s and all(done[c] + counts[c] < planned[c] for c in mine):
            for c in mine:
                counts[c] += 1
            left_s -= needs


def one_of_each_s(packets: Packets) -> float:
    """How long one packet of every point takes in every state of the slow switches."""
    _, first = np.unique(np.stack([packets.point, packets.slow]), axis=1, return_index=True)
    return float((packets.cycle_s * packets.size)[first].sum())


def part_of(table: ShotTable, packets: IntArray, sequence: Sequence) -> tuple[ShotTable, IntArray]:
    """The shots of some packets as a table of their own with all check shots, and the rows that they have in the whole.

    Args:
        packets: numbers of packets along the table, rising.
    """
    found = find_packets(table, sequence)
    rows = np.concatenate(
        [
            *(np.arange(found.first[p], found.first[p] + found.size[p]) for p in packets),
            np.arange(table.measuring, len(table)),
        ]
    )
    return table.rows(rows), rows
