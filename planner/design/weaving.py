"""When every packet of a night runs: the requests of a night woven by rig time, and check shots between packets.

Each request comes with a layout of its own (layout.py), random and spread over the whole of it. Woven, each keeps that
order, and at any time of the night each has had about the same part of its own length: what is spread over a request
is then spread over the night. A pair of sets of dwells of a slow switch, the second in the reverse order of the first,
is never broken into by another request: what drifts between a dwell and its partners is what the switch's own effects
suffer from.
"""

from collections.abc import Sequence as Items
from dataclasses import dataclass, replace

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.drift import added_variance, drifts_of
from planner.design.dwells import products_of
from planner.design.layout import Extra, Layout
from planner.design.packets import Packets
from planner.design.running_order import Kind
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

MOST_STEPS, WORK = 4000, 6_000_000  # trials where dwells must fall well on the rhythms; fewer of them in long nights
RENEWED = 0.05  # share of a lane's blocks that a trial draws anew


@dataclass(frozen=True, kw_only=True)
class Lane:
    """One request of a night on its way to a place in it; `table` may end in check shots."""

    packets: Packets
    table: ShotTable
    sequence: Sequence
    layout: Layout

    @property
    def length_s(self) -> FloatArray:
        """Of each packet in running order, waits inside packets left out: (n_packet,)."""
        return (self.packets.cycle_s * self.packets.size)[self.layout.packet]

    @property
    def slow_settle_s(self) -> float:
        """The wait that opens a dwell; 0 without slow switches."""
        return max((switch.settle_s for switch in self.sequence.switches.values() if switch.slow), default=0.0)


def weave(lanes: Items[Lane], rng: np.random.Generator) -> IntArray:
    """Which lane runs the next packet, (n_packet of all lanes,).

    The i-th block of a lane, a packet or a pair of sets of dwells, that takes up a to b of the lane's length lies at a
    random place between a and b of the night. Where a lane has slow switches, places of its blocks are drawn anew, some
    at a time, and kept where its dwells then fall better on the declared rhythms; all draws treat the states alike.
    """
    blocks = [_Blocks(lane) for lane in lanes]
    slow = [number for number, one in enumerate(blocks) if one.weights is not None]
    shifts = [one.draw(rng) for one in blocks]
    turns = _turns(blocks, shifts)
    if not slow:
        return turns
    least = _cost(blocks, slow, turns)
    for _ in range(int(np.clip(WORK // len(turns), 16, MOST_STEPS))):
        number = slow[rng.integers(len(slow))]
        tried = list(shifts)
        tried[number] = np.where(rng.random(len(shifts[number])) < RENEWED, blocks[number].draw(rng), shifts[number])
        other = _turns(blocks, tried)
        cost = _cost(blocks, slow, other)
        if cost < least:
            shifts, turns, least = tried, other, cost
    return turns


def _turns(blocks: "Items[_Blocks]", shifts: list[FloatArray]) -> IntArray:
    place = [one.places(shift) for one, shift in zip(blocks, shifts, strict=True)]
    lane = np.repeat(np.arange(len(place)), [len(one) for one in place])
    return np.asarray(lane[np.argsort(np.concatenate(place), kind="stable")])


def _cost(blocks: "Items[_Blocks]", slow: list[int], turns: IntArray) -> float:
    busy = np.zeros(len(turns))
    for number, one in enumerate(blocks):
        busy[turns == number] = one.busy_s
    mid_s = np.cumsum(busy) - busy / 2
    return sum(blocks[number].cost(mid_s[turns == number]) for number in slow)


class _Blocks:
    """What weaving needs of a lane. busy_s (n_packet,): packets with the settle waits before them; weights
    (n_effect, n_dwell): of the slow switches' own effects, None without such switches."""

    def __init__(self, lane: Lane) -> None:
        layout, packets = lane.layout, lane.packets
        self.slow = any(switch.slow for switch in lane.sequence.switches.values())
        block = layout.dwell_set // 2 if self.slow else np.arange(len(layout.packet))
        self._block = np.cumsum(np.diff(block, prepend=block[0]) != 0)
        self.busy_s = lane.length_s.copy()
        self.weights: FloatArray | None = None
        self._dwell, self._drifts = layout.dwell, drifts_of(lane.sequence, lane.table)
        if self.slow:
            self.busy_s[np.flatnonzero(np.diff(layout.dwell, prepend=-1))] += lane.slow_settle_s
            self.weights = _slow_weights(packets, layout)
        length = np.bincount(self._block, weights=self.busy_s)
        self._before, self._length = np.cumsum(length) - length, length
        self._alone = 1.0
        if self.slow:
            self._alone = max(self.cost(np.cumsum(self.busy_s) - self.busy_s / 2), 1e-12)

    def draw(self, rng: np.random.Generator) -> FloatArray:
        """Where in its own stretch of the night each block lies, (n_block,) of 0 to 1."""
        return rng.random(len(self._length))

    def places(self, shift: FloatArray) -> FloatArray:
        """A place in the night for every packet, (n_packet,) of 0 to 1, rising from block to block."""
        at = (self._before + shift * self._length) / self._length.sum()
        return np.asarray(at[self._block])

    def cost(self, mid_s: FloatArray) -> float:
        """Mean variance that declared drift adds to the slow switches' own effects, over what it adds in a night of
        their own; a dwell as if all its packets lay at its middle; mid_s (n_packet,)."""
        if self.weights is None:
            return 0.0
        middle = np.bincount(self._dwell, weights=mid_s) / np.bincount(self._dwell)
        added = [added_variance(self.weights, middle, prior) for prior in (self._drifts.additive, self._drifts.coupled)]
        return float(np.sum(added, axis=0).mean()) / self._alone


def _slow_weights(packets: Packets, layout: Layout) -> FloatArray:
    states, points, dwells = int(packets.slow.max()) + 1, int(packets.point.max()) + 1, int(layout.dwell.max()) + 1
    shown = np.zeros((points, dwells))
    np.add.at(shown, (packets.point[layout.packet], layout.dwell), 1.0)
    shown /= np.maximum(np.linalg.norm(shown, axis=1, keepdims=True), 1.0)
    state = np.zeros(dwells, dtype=np.int64)
    state[layout.dwell] = packets.slow[layout.packet]
    return np.concatenate([shown * products_of(states)[state, parity] for parity in range(states - 1)])


@dataclass
class _Due:
    """One kind of check shots of one lane: when it comes next."""

    lane: int
    rows: IntArray
    busy_s: float
    every_s: float
    due_s: float = 0.0
    last_s: float = -np.inf


@dataclass(frozen=True, kw_only=True)
class Placed:
    """Check shots: rows (n,) of their lane's table, run before the packet of that turn, or at the end."""

    lane: int
    rows: IntArray
    turn: int


def on_the_clock(lanes: Items[Lane], turns: IntArray) -> tuple[list[Layout], list[Placed]]:
    """The lanes' layouts with their times in the night, and where the check shots come.

    Check shots come before the first packet that begins when they are due: first after the first packet of the night,
    then every so often, and once at the end where the last ones were long ago.

    Args:
        turns: as `weave` gives them.
    """
    checks = [
        _Due(
            lane=number,
            rows=rows,
            busy_s=float(lane.table.duration_s[rows].sum()),
            every_s=check.every_s,
        )
        for number, lane in enumerate(lanes)
        for kind, check in enumerate(lane.sequence.checks)
        if len(rows := np.flatnonzero(lane.table.cell == -1 - kind))
    ]
    lengths = [lane.length_s for lane in lanes]
    before = [_before(lane) for lane in lanes]
    start = [np.zeros(len(lane.layout.packet)) for lane in lanes]
    placed: list[Placed] = []
    next_of = [0] * len(lanes)
    now_s = 0.0
    for turn, lane in enumerate(turns.tolist()):
        place = next_of[lane]
        for check in checks:
            if turn and check.due_s <= now_s:
                placed.append(Placed(lane=check.lane, rows=check.rows, turn=turn))
                check.last_s, check.due_s = now_s, check.every_s * (np.floor(now_s / check.every_s) + 1)
                now_s += check.busy_s
        now_s += before[lane][place]
        start[lane][place] = now_s
        now_s += lengths[lane][place]
        next_of[lane] = place + 1
    for check in checks:
        if now_s - check.last_s >= check.every_s / 2:
            placed.append(Placed(lane=check.lane, rows=check.rows, turn=len(turns)))
            now_s += check.busy_s
    return [replace(lane.layout, start_s=begins) for lane, begins in zip(lanes, start, strict=True)], placed


def alone_on_the_clock(lane: Lane) -> Layout:
    """The same for a night of one request: its layout, check shots in it."""
    (layout,), placed = on_the_clock([lane], np.zeros(len(lane.packets), dtype=np.int64))
    return replace(layout, extra=_with_checks(layout.extra, placed))


def _before(lane: Lane) -> FloatArray:
    """Settle waits and warm-up shots before each packet, (n_packet,) s."""
    layout = lane.layout
    before = np.zeros(len(layout.packet))
    before[np.flatnonzero(np.diff(layout.dwell, prepend=-1))] += lane.slow_settle_s
    np.add.at(before, layout.extra.before_packet, lane.table.duration_s[layout.extra.row])
    return before


def _with_checks(extra: Extra, added: list[Placed]) -> Extra:
    """Check shots come before the warm-up shots of the same place: those open the dwell that they warm up for."""
    if not added:
        return extra
    rows = np.concatenate([one.rows for one in added])
    places = np.concatenate([np.full(len(one.rows), one.turn) for one in added])
    before = np.r_[places, extra.before_packet]
    order = np.argsort(before, kind="stable")
    return Extra(
        row=np.r_[rows, extra.row][order],
        kind=np.r_[np.full(len(rows), int(Kind.CHECK)), extra.kind][order],
        before_packet=before[order],
        boundary=np.r_[np.zeros(len(rows), dtype=np.bool_), extra.boundary][order],
    )
