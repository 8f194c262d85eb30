"""Packets in dwells of the slow switches, so that what drifts within a dwell reaches their effects as little as it can.

Dwells come in sets, one for each state, alike in their points and so in their length. No order mends a slow switch's
own effects: what walks between a dwell and its partner stays. Two random choices still matter, and of each a few draws
are looked at. How the turns of the states fall on the declared rhythms: some draws beat with the room's air handling,
most do not. And how far apart the packets of a point lie in a pair of dwells: the second dwell runs the points of the
first backwards, so that short packets next to the boundary meet their partners soon.
"""

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.drift import Drifts, added_variance
from planner.design.packets import Packets, balanced_order

TURNS = 64  # draws of the states' turns looked at
INSIDE = 8  # draws of the order inside a pair of dwells: few, so that points still follow each other at random


def dwell_order(
    packets: Packets, dwell_s: float, settle_s: float, drifts: Drifts, rng: np.random.Generator
) -> tuple[IntArray, IntArray, IntArray]:
    """Order packets into dwells of the slow switches: (order, dwell, set), each (n_packet,) along the order.

    Each dwell lasts at least `dwell_s`, after a wait of `settle_s`. Inside a set the states run in a random order, and
    in every second set in the reverse of the one before, so that a straight drift cancels. All rules treat the states
    alike, so each is as often the first.
    """
    states = int(packets.slow.max()) + 1
    model = np.flatnonzero(packets.slow == 0)
    order = model[balanced_order(packets.point[model], rng)]
    lengths = (packets.cycle_s * packets.size)[order]
    points = packets.point[order]
    sets = _cut(lengths, dwell_s)
    turns = _turns(points, sets, lengths, states, settle_s, drifts, rng)
    queues = _queues(packets, rng)
    out: list[int] = []
    dwell: list[int] = []
    for index, turn in enumerate(turns):
        mine = sets == index
        inside = _inside(points[mine], lengths[mine], states, rng)
        for nth, state in enumerate(turn):
            here = inside[::-1] if nth % 2 else inside
            out += [queues[int(state), int(point)].pop() for point in here]
            dwell += [index * states + nth] * len(here)
    numbers = np.array(dwell)
    return np.array(out), numbers, numbers // states


def _turns(
    points: IntArray,
    sets: IntArray,
    lengths: FloatArray,
    states: int,
    settle_s: float,
    drifts: Drifts,
    rng: np.random.Generator,
) -> IntArray:
    """The order of the states in each set, (n_set, n_state): of TURNS draws the one that declared drift reaches least.

    points, sets, lengths: (n_packet,) of one state. A dwell counts as if all its packets lay at its middle.
    """
    count = int(sets[-1]) + 1
    length = np.repeat(np.bincount(sets, weights=lengths) + settle_s, states)
    mid_s = np.cumsum(length) - length / 2
    shown = np.zeros((int(points.max()) + 1, count))  # packets of each point in each set
    np.add.at(shown, (points, sets), 1.0)
    shown /= np.maximum(np.linalg.norm(shown, axis=1, keepdims=True), 1.0)
    products = products_of(states)
    best, least = np.zeros((count, states), dtype=np.int64), np.inf
    for _ in range(TURNS):
        turns = rng.permuted(np.tile(np.arange(states), (count, 1)), axis=1)
        turns[1::2] = turns[: 2 * (count // 2) : 2, ::-1]
        weights = shown[None, :, :, None] * products[turns].transpose(2, 0, 1)[:, None]
        flat = weights.reshape(states - 1, len(shown), -1)
        cost = float(
            (added_variance(flat, mid_s, drifts.additive) + added_variance(flat, mid_s, drifts.coupled)).mean()
        )
        if cost < least:
            best, least = turns, cost
    return best


def products_of(states: int) -> FloatArray:
    """Products of the slow switches by state, (n_state, n_state - 1): state numbers are their bits, one subset of the
    bits for each parity."""
    bits = np.arange(states)[:, None] & np.arange(1, states)[None, :]
    return np.asarray(1.0 - 2.0 * (np.bitwise_count(bits) % 2))


def _inside(points: IntArray, lengths: FloatArray, states: int, rng: np.random.Generator) -> IntArray:
    """Points of a dwell in running order: random; in pairs of dwells rather with short packets at their boundary."""
    if states != 2:
        return np.asarray(rng.permutation(points))
    draws = [rng.permutation(len(points)) for _ in range(INSIDE)]
    apart = [float((np.cumsum(lengths[draw][::-1]) - lengths[draw][::-1] / 2).sum()) for draw in draws]
    return np.asarray(points[draws[int(np.argmin(apart))]])


def _queues(packets: Packets, rng: np.random.Generator) -> dict[tuple[int, int], list[int]]:
    queues: dict[tuple[int, int], list[int]] = {}
    for packet in rng.permutation(len(packets)):
        queues.setdefault((int(packets.slow[packet]), int(packets.point[packet])), []).append(int(packet))
    return queues


def _cut(lengths: FloatArray, dwell_s: float) -> IntArray:
    """Cut a run of packets into sets that each last at least dwell_s; a short rest joins the last: (n,) set numbers."""
    number, filled = 0, 0.0
    sets = np.empty(len(lengths), dtype=np.int64)
    for i, length in enumerate(lengths):
        if filled >= dwell_s:
            number, filled = number + 1, 0.0
        sets[i] = number
        filled += length
    if filled < dwell_s and number > 0:
        sets[sets == number] = number - 1
    return sets
