"""Where in the night each packet lies: packets in a random, spread order, dwells of slow switches, warm-up shots.

The layout fixes which packet runs when; what happens inside packets is decided afterwards.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.design.drift import Drifts
from planner.design.dwells import dwell_order
from planner.design.packets import Packets, balanced_order
from planner.design.running_order import Kind
from planner.errors import PlanImpossible
from planner.quantities import format_quantity
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable


@dataclass(frozen=True, kw_only=True)
class Extra:
    """Shots that are run and belong to no packet: warm-up. Arrays of shape (n_extra,).

    `before_packet`: the packet in running order that they come before. `boundary`: this one opens a dwell.
    """

    row: IntArray
    kind: IntArray
    before_packet: IntArray
    boundary: BoolArray


@dataclass(frozen=True, kw_only=True)
class Layout:
    """Packets in running order. Arrays of shape (n_packet,).

    `dwell` numbers the dwells of the slow switches (all 0 without one), `dwell_set` the sets of dwells that are alike.
    `opened_by_extra`: the packet's dwell is opened by a warm-up shot, which then carries the settle wait. `start_s`:
    cycle start of the packet's first shot, waits inside packets left out.
    """

    packet: IntArray
    dwell: IntArray
    dwell_set: IntArray
    opened_by_extra: BoolArray
    start_s: FloatArray
    extra: Extra


def lay_out(packets: Packets, table: ShotTable, sequence: Sequence, drifts: Drifts, rng: np.random.Generator) -> Layout:
    """A random layout; drifts decide on the turns of slow switches.

    Raises:
        PlanImpossible: no packets, or a dwell that the whole measurement cannot fill.
    """
    if len(packets) == 0:
        raise PlanImpossible("the shot table is empty: give every sweep at least one value and one repeat")
    slow = [switch for switch in sequence.switches.values() if switch.slow]
    length = packets.cycle_s * packets.size
    if slow:
        dwell_s = max(switch.dwell_s for switch in slow)
        states = int(packets.slow.max()) + 1
        if float(length.sum()) / states < dwell_s:
            have, need = format_quantity(float(length.sum()), "min"), format_quantity(dwell_s, "min")
            repeats = int(np.ceil(dwell_s * states / float(length.sum()))) * sequence.fringe.repeats
            raise PlanImpossible(
                f"a dwell of {need} in each of {states} states is longer than the whole measurement ({have}); "
                f"set fringe.repeats to {repeats} or more, or shorten the dwell"
            )
        settle = max(switch.settle_s for switch in slow)
        order, dwell, dwell_set = dwell_order(packets, dwell_s, settle, drifts, rng)
    else:
        order = balanced_order(packets.point, rng)
        dwell = np.zeros(len(order), dtype=np.int64)
        dwell_set = dwell
        settle = 0.0
    opens = np.flatnonzero(np.diff(dwell, prepend=-1)) if slow else np.zeros(0, dtype=np.int64)
    extra = _warm_up(packets, order, sequence, opens if settle > sequence.memory.fades_s else opens[:1])
    opened = np.zeros(len(order), dtype=np.bool_)
    opened[extra.before_packet[extra.boundary]] = True
    before = np.zeros(len(order))
    before[opens] += settle
    np.add.at(before, extra.before_packet, table.duration_s[extra.row])
    busy = length[order] + before
    return Layout(
        packet=order,
        dwell=dwell,
        dwell_set=dwell_set,
        opened_by_extra=opened,
        start_s=np.cumsum(busy) - length[order],
        extra=extra,
    )


def _warm_up(packets: Packets, order: IntArray, sequence: Sequence, opens: IntArray) -> Extra:
    """Warm-up shots at the start of the night, and of the dwells that begin at `opens` (n_gap,) in the packet order:
    the following packet's own shots, run before it and not counted."""
    count = sequence.memory.warm_up
    gaps = opens if len(opens) else np.zeros(1, dtype=np.int64)
    inside = np.tile(np.arange(count), len(gaps))
    before = np.repeat(gaps, count)
    chosen = order[before]
    return Extra(
        row=(packets.first[chosen] + inside % packets.size[chosen]).astype(np.int64),
        kind=np.full(len(before), int(Kind.WARM_UP)),
        before_packet=before.astype(np.int64),
        boundary=(inside == 0) & (len(opens) > 0),
    )
