"""The rest of a night ordered anew, from any point of it: after lost shots, an hour's outage, or with fewer hours left.

What stays to be done is worked out in whole packets: those whose shots have run, or enough of them, stand; the others
are run, or run again. If not all fit into what is left of the night, every point and every state of the slow switches
gives up packets alike, so that the night, done and to come, stays balanced to within a packet. What is left is then
ordered like a night of its own: balanced against drift in itself, whatever the part before it was, with warm-up shots
after the gap and a draw of its own at the end.

Only times and what became of shots are looked at, never a result. So the draw before and the draw after are independent
of what was measured, and an exact randomisation test draws from both: the group of a replanned night is the product of
the groups of its parts, each as it was drawn.
"""

from dataclasses import dataclass, replace

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.design.drift import drifts_of
from planner.design.fitting import one_of_each_s, packets_that_fit, part_of
from planner.design.ordering import Effort, judge, make_order
from planner.design.packets import Packets, find_packets
from planner.design.quality import Quality
from planner.design.running_order import Kind, RunningOrder
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

STANDS = 0.75  # share of its shots with which a packet stands; below, it is run again whole
LEAST_PHASES = 3  # readout phases without which it has no fringe, and does not stand


@dataclass(frozen=True, kw_only=True)
class Past:
    """The measuring shots that have run to a result, in running order; arrays of shape (n_shot,).

    row: of the shot table. mid_s: middle of each, s from the night's start.
    """

    row: IntArray
    mid_s: FloatArray


@dataclass(frozen=True, kw_only=True)
class Replanned:
    """What comes, and what it makes of the night.

    tail: the new order; its start_s count from the night's start, its packets and units on from those before. standing,
    to_come, dropped: packets. again: packets of those to come that had begun. whole: figures of the night, done and to
    come; unchanged: the same if the old order simply went on, None where that was not asked.
    """

    tail: RunningOrder
    standing: int
    to_come: int
    again: int
    dropped: int
    whole: Quality
    unchanged: Quality | None


def replan(
    table: ShotTable,
    sequence: Sequence,
    past: Past,
    *,
    now_s: float,
    until_s: float,
    seed: int,
    effort: Effort = "full",
    packets_before: int = 0,
    units_before: int = 0,
    going_on: tuple[IntArray, FloatArray] | None = None,
) -> Replanned:
    """The next revision of a night.

    Args:
        table, sequence: what was booked. past: what has run. now_s, until_s: when the rest begins and when it must be
        over, s from the night's start. seed: of the new order; another than any before. packets_before, units_before:
        how many numbers of packets and units are taken. going_on: rows and middles that the old order would still run,
        for comparison.

    Raises:
        PlanImpossible: nothing is left to do, or not even one packet of each point fits.
    """
    packets = find_packets(table, sequence)
    owner = np.full(len(table), -1, dtype=np.int64)
    owner[: table.measuring] = np.repeat(np.arange(len(packets)), packets.size)
    stands, begun = _standing(table, packets, owner, past.row)
    if stands.all():
        raise PlanImpossible("every packet of the night has run: there is nothing left to order")
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(11,)))
    place = rng.permutation(len(packets))  # which packets of a cell give way is chance
    room_s = until_s - now_s
    for_packets = room_s
    while True:
        chosen = packets_that_fit(packets, stands, place, for_packets)
        if not chosen.any():
            raise PlanImpossible(
                f"{max(room_s, 0.0) / 60:.0f} min are left, and one packet of every point takes "
                f"{one_of_each_s(packets) / 60:.0f} min and more: end the night, or give it more hours"
            )
        part, rows = part_of(table, np.flatnonzero(chosen), sequence)
        order = make_order(part, sequence, seed=seed, effort=effort)
        length = float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])
        if length <= room_s:
            break
        # waits of switches and warm-up shots are known only now
        for_packets -= max(length - room_s, float((packets.cycle_s * packets.size).min()))
    tail = replace(
        order,
        shot=rows[order.shot],
        start_s=order.start_s + now_s,
        packet=np.where(order.packet < 0, -1, order.packet + packets_before),
        unit=np.where(order.unit < 0, -1, order.unit + units_before),
        notes={
            **order.notes,
            "replanned": True,
            "packets": np.flatnonzero(chosen).tolist(),
            "packets_before": packets_before,
            "units_before": units_before,
        },
    )
    whole = _judged(table, sequence, past, tail.shot, tail.start_s + tail.settle_s + tail.duration_s / 2, tail.kind)
    unchanged = None
    if going_on is not None and len(going_on[0]):
        kind = np.full(len(going_on[0]), int(Kind.MEASURE))
        unchanged = _judged(table, sequence, past, going_on[0], going_on[1], kind)
    return Replanned(
        tail=replace(tail, figures=whole.figures()),
        standing=int(stands.sum()),
        to_come=int(chosen.sum()),
        again=int((chosen & begun).sum()),
        dropped=int((~stands & ~chosen).sum()),
        whole=whole,
        unchanged=unchanged,
    )


def drawn_part(tail: RunningOrder, table: ShotTable, sequence: Sequence) -> tuple[RunningOrder, ShotTable]:
    """A replanned tail as an order of its own table again: what `randomisation_group` and `redraw` take."""
    part, rows = part_of(table, np.asarray(tail.notes["packets"], dtype=np.int64), sequence)
    number = np.full(len(table), -1, dtype=np.int64)
    number[rows] = np.arange(len(rows))
    return (
        replace(
            tail,
            shot=number[tail.shot],
            start_s=tail.start_s - tail.start_s[0],
            packet=np.where(tail.packet < 0, -1, tail.packet - tail.notes["packets_before"]),
            unit=np.where(tail.unit < 0, -1, tail.unit - tail.notes["units_before"]),
        ),
        part,
    )


def _standing(table: ShotTable, packets: Packets, owner: IntArray, done: IntArray) -> tuple[BoolArray, BoolArray]:
    """Which packets stand as they are, and which have begun, (n_packet,) each."""
    ran = np.zeros(len(table), dtype=np.bool_)
    ran[done] = True
    count = np.bincount(owner[owner >= 0], weights=ran[owner >= 0], minlength=len(packets))
    # distinct phases among the shots that ran: a packet without three has no fringe, unless it was never to have one
    phase = np.round(table.phase_rad / (2 * np.pi) * 3600).astype(np.int64) % 3600
    ran &= owner >= 0
    planned = _distinct(owner[owner >= 0], phase[owner >= 0], len(packets))
    found = _distinct(owner[ran], phase[ran], len(packets))
    stands = (count >= STANDS * packets.size) & (found >= np.minimum(planned, LEAST_PHASES))
    return stands, count > 0


def _distinct(owner: IntArray, value: IntArray, count: int) -> IntArray:
    pairs = np.unique(np.stack([owner, value]), axis=1)
    return np.bincount(pairs[0], minlength=count)


def _judged(
    table: ShotTable, sequence: Sequence, past: Past, row: IntArray, mid_s: FloatArray, kind: IntArray
) -> Quality:
    """Quality of the whole night: what has run at its true times, what comes at its planned ones."""
    return judge(
        table,
        sequence,
        np.concatenate([past.row, row]),
        np.concatenate([past.mid_s, mid_s]),
        np.concatenate([np.full(len(past.row), int(Kind.MEASURE)), kind]),
        drifts_of(sequence, table),
    )
