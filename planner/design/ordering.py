"""A running order that is random and good: packets spread over the night, arranged so that drift can hardly reach them.

Four steps, each with its own stream of random numbers from one seed:

1. packets in a random order that spreads every point over the night (packets.py); with a slow switch, whole dwells;
2. for each make-up of packets, the pool of arrangements that walks of drift reach least (arrangements.py);
3. for each packet the arrangement of the pool that lets rhythms cancel over the night (choosing.py);
4. the wanted switch flipped by a draw from all flips that keep every figure under its bar (restricted.py).

Times are the rig's: a quarter-second hold and a minute's hold make shot number and time very different things.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray, SignArray
from planner.design import flips
from planner.design.arrangements import Patterns, Score, best_arrangements, patterns_of
from planner.design.choosing import Shape, choose, limits_for
from planner.design.clock import settle_waits, starts
from planner.design.drift import Drifts, Prior, drifts_of, period_grid
from planner.design.layout import Layout, lay_out
from planner.design.packets import Packets, find_packets
from planner.design.quality import Quality, assess
from planner.design.restricted import RestrictedSet
from planner.design.running_order import Kind, RunningOrder
from planner.design.weaving import Lane, alone_on_the_clock
from planner.errors import InputError, NotEnoughData
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

Effort = Literal["quick", "full"]
PASSES = {"quick": 0, "full": 2}
Progress = Callable[[str, float], None]


@dataclass(frozen=True, kw_only=True)
class Draft:
    """An order before its last draw: what `make_order` and the randomisation test both start from.

    choice (n_packet,): each packet's arrangement, (size,) each, in running order; shapes by number.
    """

    table: ShotTable
    sequence: Sequence
    packets: Packets
    layout: Layout
    shapes: Mapping[int, Shape]
    arrangement: list[IntArray]
    start_s: FloatArray  # (n_packet,) first measured shot's cycle start
    drifts: Drifts
    total_s: float


def make_order(
    table: ShotTable, sequence: Sequence, *, seed: int, effort: Effort = "full", progress: Progress | None = None
) -> RunningOrder:
    """Order the shots of a table; the same table, sequence, seed and effort give the same order.

    effort "quick" leaves out step 3. progress(step, fraction) is called now and then.

    Raises:
        PlanImpossible: a dwell longer than the measurement, an empty table.
    """
    draft = draft_order(table, sequence, seed=seed, effort=effort, progress=progress)
    if progress is not None:
        progress("drawing the flips of the wanted switch", 0.0)
    allowed = flips.restricted_set(draft, seed=seed)
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(4,)))
    signs = allowed.draw(1, rng)[0] if allowed is not None else np.ones(flips.units_of(draft).count)
    return assemble(draft, signs, seed=seed, effort=effort, allowed=allowed)


def randomisation_group(order: RunningOrder, table: ShotTable, sequence: Sequence) -> tuple[RestrictedSet, FloatArray]:
    """The set that an order's last draw was made from, and the member that was drawn: signs (n_unit,).

    Made again from the order's seed and effort, and compared with the order, so that the set is the one of that night.

    Raises:
        NotEnoughData: no parity is wanted, so nothing was drawn.
        InputError: the order was not made from this table, sequence and version of the program.
    """
    draft = draft_order(table, sequence, seed=order.seed, effort=order.notes.get("effort", "full"))
    allowed = flips.restricted_set(draft, seed=order.seed)
    if allowed is None:
        raise NotEnoughData(
            "no parity is wanted in this sequence, so nothing was drawn at random at the end of ordering; name the "
            "switches of the signal in goal.wanted before the night"
        )
    signs = np.ones(allowed.n_unit)
    inside = order.unit >= 0
    signs[order.unit[inside]] = order.flip[inside]
    rows, _ = flips.flipped_rows(draft, flips.units_of(draft), signs)
    if not np.array_equal(rows, order.shot[order.kind == int(Kind.MEASURE)]):
        raise InputError(
            f"the order of seed {order.seed} is not what this sequence gives with this version of Nightfringe: use the "
            "sequence text and the version that are stored with the night"
        )
    return allowed, signs


def redraw(
    order: RunningOrder, table: ShotTable, sequence: Sequence, *, n: int, rng: np.random.Generator
) -> FloatArray:
    """n uniform draws from the set that the order's last draw was made from: signs (n, n_unit) of its units.

    A shot's switch state in draw k is its own times signs[k, unit] * flip, `unit` and `flip` as the order has them.
    Raises as `randomisation_group` does.
    """
    allowed, _ = randomisation_group(order, table, sequence)
    return allowed.draw(n, rng)


def lane_of(table: ShotTable, sequence: Sequence, *, seed: int) -> Lane:
    """Step 1: packets in a random, spread order, with the times of a night of their own; check shots left out.

    Raises:
        PlanImpossible: a dwell longer than the measurement, an empty table.
    """
    packets = find_packets(table, sequence)
    layout = lay_out(packets, table, sequence, drifts_of(sequence, table), _streams(seed)[0])
    return Lane(packets=packets, table=table, sequence=sequence, layout=layout)


def _streams(seed: int) -> list[np.random.Generator]:
    return [np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(k,))) for k in range(4)]


def draft_order(
    table: ShotTable, sequence: Sequence, *, seed: int, effort: Effort = "full", progress: Progress | None = None
) -> Draft:
    """Steps 1 to 3: everything but the flips of the wanted switch."""
    lane = lane_of(table, sequence, seed=seed)
    if len(table) > table.measuring:
        lane = replace(lane, layout=alone_on_the_clock(lane))
    total = float(table.duration_s[: table.measuring].sum())
    return draft_of(lane, total_s=total, seed=seed, effort=effort, progress=progress)


def draft_of(
    lane: Lane, *, total_s: float, seed: int, effort: Effort = "full", progress: Progress | None = None
) -> Draft:
    """Steps 2 and 3 for packets that have their times; total_s is the length of the night that they are part of."""
    table, sequence, packets, layout = lane.table, lane.sequence, lane.packets, lane.layout
    streams = _streams(seed)
    drifts = drifts_of(sequence, table)
    wanted = flips.flipping_switch(sequence)
    omega = drifts.omega
    shapes = {
        int(number): _shape(table, sequence, packets, int(number), wanted, drifts, omega, streams[1])
        for number in np.unique(packets.shape)
    }
    ordered = layout.packet
    start = layout.start_s
    if effort == "quick" or PASSES[effort] == 0:
        choice = np.array([streams[2].integers(len(shapes[int(s)].pool)) for s in packets.shape[ordered]])
    else:
        grid = period_grid(total_s)
        n_band = limits_for(len(ordered), max(len(one.patterns.importance) for one in shapes.values()))[1]
        count = min(n_band, len(grid))
        picked = ((np.arange(count) + streams[2].random(count)) * (len(grid) / count)).astype(int)
        choice = choose(
            shapes=shapes,
            shape=packets.shape[ordered],
            point=packets.point[ordered],
            start_s=start,
            slow_sign=slow_signs(table, sequence, packets.first[ordered]),
            omega=omega,
            band=2 * np.pi * grid[np.minimum(picked, len(grid) - 1)],
            rng=streams[3],
            passes=PASSES[effort],
            progress=None if progress is None else lambda done: progress("letting rhythms cancel", done),
        )
    arrangement = [shapes[int(s)].pool[c] for s, c in zip(packets.shape[ordered], choice, strict=True)]
    return Draft(
        table=table,
        sequence=sequence,
        packets=packets,
        layout=layout,
        shapes=shapes,
        arrangement=arrangement,
        start_s=start,
        drifts=drifts,
        total_s=total_s,
    )


def slow_signs(table: ShotTable, sequence: Sequence, rows: IntArray) -> FloatArray:
    """Product of the slow switches of each subset at some rows: (n_row, 2^slow), the empty subset first."""
    signs = np.ones((len(rows), 1))
    for name, switch in sequence.switches.items():
        if switch.slow:
            signs = np.concatenate([signs, signs * table.switches[name][rows].astype(np.float64)[:, None]], axis=1)
    return signs


def _shape(
    table: ShotTable,
    sequence: Sequence,
    packets: Packets,
    number: int,
    wanted: str | None,
    drifts: Drifts,
    omega: FloatArray,
    rng: np.random.Generator,
) -> Shape:
    first = int(packets.shape_rows[number])
    one = int(np.flatnonzero(packets.first == first)[0])
    rows = slice(first, first + int(packets.size[one]))
    fast = {
        name: table.switches[name][rows].astype(np.float64)
        for name, switch in sequence.switches.items()
        if not switch.slow
    }
    slow = sum(switch.slow for switch in sequence.switches.values())
    patterns = patterns_of(table.phase_rad[rows], fast, slow, wanted)
    prior = drifts.coupled_at(first)
    power = _powers(patterns, drifts.additive, prior, omega)
    rates = np.where(patterns.coupled, prior.rate, drifts.additive.rate)
    score = Score(patterns, cycle_s=float(packets.cycle_s[one]), rates=rates, omega=omega, power=power)
    size, _ = limits_for(len(packets), len(patterns.importance))
    pool, scores = best_arrangements(score, int(packets.size[one]), size, rng)
    return Shape(patterns=patterns, pool=pool, scores=scores, cycle_s=float(packets.cycle_s[one]), power=power)


def _powers(patterns: Patterns, additive: Prior, coupled: Prior, omega: FloatArray) -> FloatArray:
    """Squared amplitudes of the declared rhythms for each pattern, (n_pattern, n_period)."""

    def on_grid(prior: Prior) -> FloatArray:
        out = np.zeros(len(omega))
        np.add.at(out, np.searchsorted(omega, prior.omega), prior.power)
        return out

    return np.asarray(np.where(patterns.coupled[:, None], on_grid(coupled), on_grid(additive)))


@dataclass(frozen=True, kw_only=True)
class Positions:
    """The shots of a draft with its units flipped, in running order; arrays of shape (n_position,).

    `place`: the packet in running order that a shot is in or comes before; the number of packets behind the last.
    """

    shot: IntArray
    kind: IntArray
    settle_s: FloatArray
    packet: IntArray
    unit: IntArray
    flip: SignArray
    place: IntArray


def positions_of(draft: Draft, signs: FloatArray) -> Positions:
    """The positions of a draft with its units flipped by signs (n_unit,)."""
    table, sequence, layout = draft.table, draft.sequence, draft.layout
    units = flips.units_of(draft)
    rows, sign = flips.flipped_rows(draft, units, signs)
    sizes = draft.packets.size[layout.packet]
    packet = np.repeat(np.arange(len(sizes)), sizes)
    unit = units.of_packet[packet]
    first_of_packet = np.cumsum(sizes) - sizes
    extra = layout.extra
    at = np.r_[first_of_packet, len(rows)][extra.before_packet]
    everything = np.insert(rows, at, extra.row)
    kind = np.insert(np.full(len(rows), int(Kind.MEASURE)), at, extra.kind)
    boundary = np.insert(_boundaries(layout, first_of_packet, len(rows)), at, extra.boundary)
    place = np.insert(packet, at, extra.before_packet)
    packet = np.insert(packet, at, -1)
    opens = np.diff(packet, prepend=-2) != 0
    return Positions(
        shot=everything,
        kind=kind,
        settle_s=settle_waits(table, sequence, everything, boundary, opens),
        packet=packet,
        unit=np.insert(unit, at, -1),
        flip=np.insert(sign, at, 1).astype(np.int8),
        place=place,
    )


def assemble(
    draft: Draft, signs: FloatArray, *, seed: int, effort: Effort, allowed: RestrictedSet | None
) -> RunningOrder:
    """The running order of a draft with its units flipped by signs (n_unit,)."""
    table, sequence = draft.table, draft.sequence
    found = positions_of(draft, signs)
    duration = table.duration_s[found.shot]
    start = starts(duration, found.settle_s)
    mid = start + found.settle_s + duration / 2
    return RunningOrder(
        request=np.zeros(len(found.shot), dtype=np.int64),
        shot=found.shot,
        kind=found.kind,
        start_s=start,
        settle_s=found.settle_s,
        duration_s=duration,
        packet=found.packet,
        unit=found.unit,
        flip=found.flip,
        seed=seed,
        figures=judge(table, sequence, found.shot, mid, found.kind, draft.drifts).figures(),
        notes={"effort": effort, **draw_notes(allowed, flips.units_of(draft))},
    )


def _boundaries(layout: Layout, first_of_packet: IntArray, n: int) -> BoolArray:
    boundary = np.zeros(n, dtype=np.bool_)
    opens = np.flatnonzero(np.diff(layout.dwell, prepend=-1))
    boundary[first_of_packet[opens]] = ~layout.opened_by_extra[opens]
    return boundary


def draw_notes(allowed: RestrictedSet | None, units: "flips.Units") -> dict[str, Any]:
    """What the last draw was made of, for the record: switch, units, size of the set, bars."""
    notes: dict[str, Any] = {"flipped_switch": units.switch, "units": units.count}
    if allowed is not None:
        notes["log2_members"] = round(allowed.log2_size, 2)
        # a bar that asks for nothing is infinite, which no logbook and no JSON can hold: left out
        bars = {name: float(value) for name, value in vars(allowed.bars).items()}
        notes["bars"] = {name: value for name, value in bars.items() if np.isfinite(value)}
    return notes


def quality_of(order: RunningOrder, table: ShotTable, sequence: Sequence, number: int = 0) -> Quality:
    """The quality of an order for the sequence of its request `number`, effect by effect."""
    mine = order.request == number
    mid = (order.start_s + order.settle_s + order.duration_s / 2)[mine]
    return judge(table, sequence, order.shot[mine], mid, order.kind[mine], drifts_of(sequence, table))


def judge(
    table: ShotTable, sequence: Sequence, rows: IntArray, mid_s: FloatArray, kind: IntArray, drifts: Drifts
) -> Quality:
    """The quality of the measured shots of an order; rows, mid_s, kind of shape (n_position,)."""
    measured = kind == int(Kind.MEASURE)
    mine = rows[measured]
    packets = find_packets(table, sequence)
    point_of_row = np.repeat(packets.point, packets.size)
    return assess(
        mid_s=mid_s[measured],
        total_s=float(mid_s[-1] + table.duration_s[rows[-1]] / 2),
        point=point_of_row[mine],
        phase_rad=table.phase_rad[mine],
        switches={name: states[mine] for name, states in table.switches.items()},
        drifts=drifts,
        per_acceleration=None if drifts.per_acceleration is None else drifts.per_acceleration[mine],
        most_frequencies=4000 if len(mine) < 30_000 else 400,
    )
