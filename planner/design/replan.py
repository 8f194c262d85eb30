"""The rest of a night ordered anew, from any point of it: after lost shots, an hour's outage, or with fewer hours left.

What stays to be done is worked out in whole packets: those whose shots have run, or enough of them, stand; the others
are run, or run again. If not all fit into what is left of the night, every point and every state of the slow switches
gives up packets alike, so that the night, done and to come, stays balanced to within a packet; of several requests each
gives up the same share of its plan. What is left is then ordered like a night of its own: balanced against drift in
itself, with warm-up shots after the gap and a draw of its own at the end. Where slow switches are, of a few such orders
the one is taken that goes best with what has run.

Only times and what became of shots are looked at, never a result. So the draw before and the draw after are independent
of what was measured, and an exact randomisation test draws from both: the group of a replanned night is the product of
the groups of its parts, each as it was drawn.
"""

from collections.abc import Mapping
from collections.abc import Sequence as Items
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.design.drift import drifts_of
from planner.design.fitting import one_of_each_s, packets_that_fit, part_of
from planner.design.merging import Part, figures_of_night, order_night, randomisation_group_of, undrawn_night
from planner.design.ordering import Effort, judge, randomisation_group
from planner.design.packets import Packets, find_packets
from planner.design.restricted import RestrictedSet
from planner.design.running_order import Kind, RunningOrder
from planner.errors import NotEnoughData, PlanImpossible
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

CANDIDATES = 4  # orders of the rest that are looked at where slow switches are
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
    come; unchanged: the same if the old order simply went on, None where that was not asked. Figures of a night of
    several requests as merging.order_night has them.
    """

    tail: RunningOrder
    standing: int
    to_come: int
    again: int
    dropped: int
    whole: Mapping[str, float]
    unchanged: Mapping[str, float] | None

    @property
    def why(self) -> str:
        """The reason that the revision is stored with."""
        return f"replanned: {self.to_come} packets to come, {self.dropped} dropped"


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
    """The next revision of a night of one request: as `replan_requests`."""
    return replan_requests(
        [Part(table=table, sequence=sequence)],
        [past],
        now_s=now_s,
        until_s=until_s,
        seed=seed,
        effort=effort,
        packets_before=packets_before,
        units_before=units_before,
        going_on=None if going_on is None else [going_on],
    )


def replan_requests(
    parts: Items[Part],
    past: Items[Past],
    *,
    now_s: float,
    until_s: float,
    seed: int,
    effort: Effort = "full",
    packets_before: int = 0,
    units_before: int = 0,
    going_on: Items[tuple[IntArray, FloatArray]] | None = None,
) -> Replanned:
    """The next revision of a night.

    Args:
        parts: what was booked, request by request. past: what has run of each. now_s, until_s: when the rest begins and
        when it must be over, s from the night's start. seed: of the new order; another than any before.
        packets_before, units_before: how many numbers of packets and units are taken. going_on: rows and middles that
        the old order would still run of each request, for comparison.

    Raises:
        PlanImpossible: nothing is left to do, or not even one packet of each point fits.
    """
    found = [find_packets(part.table, part.sequence) for part in parts]
    packets, number = _all_packets(found)
    states = [_standing(part.table, one, done.row) for part, one, done in zip(parts, found, past, strict=True)]
    stands, begun = (np.concatenate(which) for which in zip(*states, strict=True))
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
        mine = [np.flatnonzero(chosen[number == n]) for n in range(len(parts))]
        left = [_Left(n, part, which) for n, (part, which) in enumerate(zip(parts, mine, strict=True)) if len(which)]
        started = _seed_for(left, parts, past, now_s, seed)
        order = order_night([one.part for one in left], seed=started, effort=effort)
        length = float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])
        if length <= room_s:
            break
        # waits of switches and warm-up shots are known only now
        for_packets -= max(length - room_s, float((packets.cycle_s * packets.size).min()))
    tail = _tail(order, left, len(parts), now_s, packets_before, units_before)
    mid_s = tail.start_s + tail.settle_s + tail.duration_s / 2
    every = [tail.request == n for n in range(len(parts))]
    coming = [(tail.shot[which], mid_s[which], tail.kind[which]) for which in every]
    unchanged = None
    if going_on is not None and any(len(rows) for rows, _ in going_on):
        kinds = [np.full(len(rows), int(Kind.MEASURE)) for rows, _ in going_on]
        unchanged = _judged(parts, past, [(*pair, kind) for pair, kind in zip(going_on, kinds, strict=True)])
    whole = _judged(parts, past, coming)
    return Replanned(
        tail=replace(tail, figures=whole),
        standing=int(stands.sum()),
        to_come=int(chosen.sum()),
        again=int((chosen & begun).sum()),
        dropped=int((~stands & ~chosen).sum()),
        whole=whole,
        unchanged=unchanged,
    )


class _Left:
    """What is left of one request: its number, the packets that come, and their shots as a part of their own."""

    def __init__(self, number: int, part: Part, packets: IntArray) -> None:
        self.number, self.packets = number, packets
        table, self.rows = part_of(part.table, packets, part.sequence)
        self.part = Part(table=table, sequence=part.sequence)


def _all_packets(found: Items[Packets]) -> tuple[Packets, IntArray]:
    """The packets of all requests as one, points numbered on, and the request of each: every point of every request
    has a claim to the same share of its plan."""
    points = np.cumsum([0, *(int(one.point.max(initial=-1)) + 1 for one in found)])
    empty = np.zeros(0, dtype=np.int64)
    return (
        Packets(
            first=np.concatenate([one.first for one in found]),
            size=np.concatenate([one.size for one in found]),
            point=np.concatenate([one.point + points[n] for n, one in enumerate(found)]),
            slow=np.concatenate([one.slow for one in found]),
            shape=np.concatenate([one.shape for one in found]),
            shape_rows=empty,
            cycle_s=np.concatenate([one.cycle_s for one in found]),
        ),
        np.repeat(np.arange(len(found)), [len(one) for one in found]),
    )


def _seed_for(left: Items[_Left], parts: Items[Part], past: Items[Past], now_s: float, seed: int) -> int:
    """The seed of the rest: where slow switches are, of a few the one whose dwells go best with those that have run.

    Compared are orders before their last draw, so that the draw itself is as free as ever, and the exact test with it.
    """
    if not any(switch.slow for one in left for switch in one.part.sequence.switches.values()):
        return seed
    best, least = seed, np.inf
    for tried in range(seed, seed + CANDIDATES):
        order = undrawn_night([one.part for one in left], seed=tried)
        mid_s = now_s + order.start_s + order.settle_s + order.duration_s / 2
        cost = 0.0
        for n, one in enumerate(left):
            which = order.request == n
            coming = (one.rows[order.shot[which]], mid_s[which], order.kind[which])
            figures = _judged_one(parts[one.number], past[one.number], *coming)
            cost += figures["additive_mean"] + figures["coupled_mean"]
        if cost < least:
            best, least = tried, cost
    return best


def _tail(
    order: RunningOrder, left: Items[_Left], requests: int, now_s: float, packets_before: int, units_before: int
) -> RunningOrder:
    """The order of the rest in the numbers of the whole night."""
    shot = np.empty_like(order.shot)
    for n, one in enumerate(left):
        which = order.request == n
        shot[which] = one.rows[order.shot[which]]
    notes: dict[str, Any] = {"replanned": True, "packets_before": packets_before, "units_before": units_before}
    if requests == 1:
        notes |= {**order.notes, "packets": left[0].packets.tolist()}
    else:
        own = order.notes.get("requests") or [{**order.notes, "first_unit": 0}]
        notes |= {
            "effort": order.notes["effort"],
            "requests": [
                {**note, "number": one.number, "packets": one.packets.tolist()}
                for note, one in zip(own, left, strict=True)
            ],
        }
    return replace(
        order,
        request=np.array([one.number for one in left], dtype=np.int64)[order.request],
        shot=shot,
        start_s=order.start_s + now_s,
        packet=np.where(order.packet < 0, -1, order.packet + packets_before),
        unit=np.where(order.unit < 0, -1, order.unit + units_before),
        notes=notes,
    )


def drawn_part(tail: RunningOrder, table: ShotTable, sequence: Sequence) -> tuple[RunningOrder, ShotTable]:
    """A replanned tail of a night of one request as an order of its own table again: what `randomisation_group` and
    `redraw` take."""
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


def group_of(order: RunningOrder, parts: Items[Part], number: int) -> tuple[RestrictedSet, FloatArray, int]:
    """The set that the last draw of one request was made from in one revision of a night, whatever kind it is.

    Args:
        order: the revision, as it was stored. parts: all requests of the night, as booked. number: the request.

    Returns:
        The set, the member that was drawn (n_unit,), and the number that its first unit has in the order.

    Raises:
        NotEnoughData: the request wants no parity, or has no part in this revision.
        InputError: the order was not made from these parts and this version of the program.
    """
    before = int(order.notes.get("units_before", 0))
    notes = order.notes.get("requests")
    if notes is None:
        part = parts[number]
        if order.notes.get("replanned"):
            own, table = drawn_part(order, part.table, part.sequence)
        else:
            own, table = order, part.table
        return (*randomisation_group(own, table, part.sequence), before)
    left = list(range(len(parts)))
    if order.notes.get("replanned"):
        left = [int(note["number"]) for note in notes]
        if number not in left:
            raise NotEnoughData(f"{parts[number].sequence.title} has no shots in this part of the night")
        order, parts = _own_numbers(order, parts)
    place = left.index(number)
    first = before + int(notes[place]["first_unit"])
    if len(parts) == 1:
        return (*randomisation_group(order, parts[0].table, parts[0].sequence), first)
    return (*randomisation_group_of(order, parts, place), first)


def _own_numbers(tail: RunningOrder, parts: Items[Part]) -> tuple[RunningOrder, list[Part]]:
    """A replanned tail of a night of several requests as a night of its own."""
    shot, request = np.empty_like(tail.shot), np.empty_like(tail.request)
    chosen = []
    for place, note in enumerate(tail.notes["requests"]):
        part = parts[int(note["number"])]
        table, rows = part_of(part.table, np.asarray(note["packets"], dtype=np.int64), part.sequence)
        inside = np.full(len(part.table), -1, dtype=np.int64)
        inside[rows] = np.arange(len(rows))
        which = tail.request == int(note["number"])
        shot[which], request[which] = inside[tail.shot[which]], place
        chosen.append(Part(table=table, sequence=part.sequence))
    unit = np.where(tail.unit < 0, -1, tail.unit - tail.notes["units_before"])
    return replace(tail, shot=shot, request=request, unit=unit), chosen


def _standing(table: ShotTable, packets: Packets, done: IntArray) -> tuple[BoolArray, BoolArray]:
    """Which packets stand as they are, and which have begun, (n_packet,) each."""
    measuring = table.measuring
    owner = np.repeat(np.arange(len(packets)), packets.size)
    ran = np.zeros(len(table), dtype=np.bool_)
    ran[done] = True
    ran = ran[:measuring]
    count = np.bincount(owner, weights=ran, minlength=len(packets))
    # distinct phases among the shots that ran: a packet without three has no fringe, unless it was never to have one
    phase = np.round(table.phase_rad[:measuring] / (2 * np.pi) * 3600).astype(np.int64) % 3600
    planned = _distinct(owner, phase, len(packets))
    found = _distinct(owner[ran], phase[ran], len(packets))
    stands = (count >= STANDS * packets.size) & (found >= np.minimum(planned, LEAST_PHASES))
    return stands, count > 0


def _distinct(owner: IntArray, value: IntArray, count: int) -> IntArray:
    pairs = np.unique(np.stack([owner, value]), axis=1)
    return np.bincount(pairs[0], minlength=count)


def _judged(
    parts: Items[Part], past: Items[Past], coming: Items[tuple[IntArray, FloatArray, IntArray]]
) -> dict[str, float]:
    """Figures of the whole night: what has run at its true times, what comes (rows, middles, kinds) at its planned."""
    figures = [
        _judged_one(part, done, *then)
        for part, done, then in zip(parts, past, coming, strict=True)
        if len(done.row) or len(then[0])
    ]
    return figures[0] if len(figures) == 1 else figures_of_night(figures)


def _judged_one(part: Part, past: Past, row: IntArray, mid_s: FloatArray, kind: IntArray) -> dict[str, float]:
    return judge(
        part.table,
        part.sequence,
        np.concatenate([past.row, row]),
        np.concatenate([past.mid_s, mid_s]),
        np.concatenate([np.full(len(past.row), int(Kind.MEASURE)), kind]),
        drifts_of(part.sequence, part.table),
    ).figures()
