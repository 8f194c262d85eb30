"""A night replanned after an outage: balanced as a whole, nothing done is moved, and no result is looked at."""

import inspect

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.design.ordering import make_order, quality_of, randomisation_group
from planner.design.packets import find_packets
from planner.design.replan import Past, Replanned, drawn_part, replan
from planner.design.running_order import Kind, RunningOrder
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable
from tests.design.nights import night_a, night_b

HOUR = 3600.0


def outage(
    table: ShotTable,
    sequence: Sequence,
    order: RunningOrder,
    *,
    at_s: float,
    for_s: float,
    until_s: float,
    lost: float = 0.0,
) -> tuple[Past, Replanned]:
    """What has run by a time, and the night replanned after a break; `lost`: share of shots without a result."""
    mid = order.start_s + order.settle_s + order.duration_s / 2
    ran = (mid < at_s) & (order.kind == int(Kind.MEASURE))
    ran &= np.random.default_rng(4).random(len(ran)) >= lost
    later = (mid >= at_s) & (order.kind == int(Kind.MEASURE)) & (mid + for_s < until_s)
    past = Past(row=order.shot[ran], mid_s=mid[ran])
    return past, replan(
        table,
        sequence,
        past,
        now_s=at_s + for_s,
        until_s=until_s,
        seed=99,
        effort="quick",
        packets_before=int(order.packet.max()) + 1,
        units_before=int(order.unit.max()) + 1,
        going_on=(order.shot[later], mid[later] + for_s),
    )


def counts(table: ShotTable, sequence: Sequence, rows: np.ndarray) -> np.ndarray:
    """Shots of each point and state of the slow switches."""
    packets = find_packets(table, sequence)
    cell = np.repeat(packets.point * 2 + packets.slow, packets.size)
    return np.bincount(cell[rows], minlength=int(cell.max()) + 1)


def test_an_hour_lost_from_the_middle() -> None:
    """Reference night A with an hour's outage: the whole night beats going on unchanged, and stays balanced."""
    table, sequence = night_a()
    order = make_order(table, sequence, seed=1, effort="quick")
    end = float(order.start_s[-1] + order.duration_s[-1])
    past, found = outage(table, sequence, order, at_s=4.5 * HOUR, for_s=HOUR, until_s=end)
    tail = found.tail
    assert found.unchanged is not None
    assert found.dropped > 0
    assert tail.start_s[0] == 5.5 * HOUR
    assert tail.start_s[-1] + tail.duration_s[-1] <= end
    measured = tail.shot[tail.kind == int(Kind.MEASURE)]
    per_point = counts(table, sequence, np.concatenate([past.row, measured]))
    per_point = per_point[per_point > 0]
    # within a packet of eight shots, and those that were cut by the outage
    assert np.ptp(per_point) <= 2 * 8
    undisturbed = quality_of(order, table, sequence)
    for figure in ("additive_mean", "coupled_mean"):
        assert found.whole[figure] < 2.0 * getattr(undisturbed, figure)
        assert found.whole[figure] <= 1.05 * found.unchanged[figure]
    # what had run stays: no shot of a packet that stands comes again
    assert len(np.intersect1d(past.row, measured)) < 8 * 2


def test_dwells_and_waits_hold_after_a_break() -> None:
    """Reference night B: after the break every dwell is long enough, opened by a settle wait, both states alike."""
    table, sequence = night_b()
    order = make_order(table, sequence, seed=1, effort="quick")
    end = float(order.start_s[-1] + order.duration_s[-1])
    past, found = outage(table, sequence, order, at_s=3.3 * HOUR, for_s=HOUR, until_s=end)
    tail = found.tail
    state = table.switches["collar"][tail.shot]
    opens = np.flatnonzero(np.r_[True, state[1:] != state[:-1]])
    assert (tail.settle_s[opens] >= 25.0).all()
    busy = tail.settle_s + tail.duration_s
    lengths = np.add.reduceat(busy, opens)
    assert (lengths[:-1] >= 8 * 60).all()
    measured = tail.kind == int(Kind.MEASURE)
    assert abs(int(state[measured].sum())) == 0
    rows = np.concatenate([past.row, tail.shot[measured]])
    near = table.switches["collar"][rows] > 0
    # the break cut one dwell: no more than that apart
    assert abs(near.sum() - (~near).sum()) * 15 < 3 * 8 * 60


def test_lost_shots_come_again_where_it_matters() -> None:
    """With one shot in eight lost, packets that kept three quarters stand; the others come again, whole."""
    table, sequence = night_a()
    order = make_order(table, sequence, seed=2, effort="quick")
    past, found = outage(table, sequence, order, at_s=5 * HOUR, for_s=60.0, until_s=14 * HOUR, lost=0.125)
    packets = find_packets(table, sequence)
    ran = np.zeros(len(table))
    ran[past.row] = 1
    count = np.add.reduceat(ran, packets.first)
    chosen = np.zeros(len(packets), dtype=bool)
    chosen[found.tail.notes["packets"]] = True
    assert not (chosen & (count >= 7)).any()
    assert chosen[count < 6].all()
    assert found.again == int((chosen & (count > 0)).sum())
    assert found.dropped == 0


def test_the_draw_of_the_rest_can_be_made_again() -> None:
    """The randomisation group of a replanned part is rebuilt from what is stored, and holds what was drawn."""
    table, sequence = night_a()
    order = make_order(table, sequence, seed=1, effort="quick")
    end = float(order.start_s[-1] + order.duration_s[-1])
    _, found = outage(table, sequence, order, at_s=2 * HOUR, for_s=HOUR, until_s=end)
    allowed, signs = randomisation_group(*drawn_part(found.tail, table, sequence), sequence)
    assert allowed.contains(signs[None])[0]
    assert allowed.log2_size > 20


def test_no_result_is_looked_at() -> None:
    """What goes in are rows, times and seeds: there is no way in for a count of atoms."""
    assert set(Past.__dataclass_fields__) == {"row", "mid_s"}
    assert not any("atoms" in name or "result" in name for name in inspect.signature(replan).parameters)


@settings(max_examples=2, deadline=None)
@given(st.floats(0.5, 9.0), st.floats(0.01, 3.0), st.integers(0, 5))
def test_any_break_leaves_a_night_that_fits(at_h: float, lost_h: float, seed: int) -> None:
    """Wherever the break, the rest fits into the night, every packet is whole, and numbers go on from those before."""
    table, sequence = night_a(repeats=3)
    order = make_order(table, sequence, seed=seed, effort="quick")
    end = float(order.start_s[-1] + order.duration_s[-1])
    at_s = at_h / 9.6 * end
    try:
        _, found = outage(table, sequence, order, at_s=at_s, for_s=lost_h * HOUR / 4, until_s=end)
    except PlanImpossible as error:
        assert "nothing left" in str(error) or "min are left" in str(error)  # noqa: PT017 - either is an answer
        return
    tail = found.tail
    assert tail.start_s[-1] + tail.settle_s[-1] + tail.duration_s[-1] <= end + 1e-6
    measured = tail.kind == int(Kind.MEASURE)
    assert tail.packet[measured].min() == order.packet.max() + 1
    assert (np.bincount(tail.packet[measured] - int(order.packet.max()) - 1) == 8).all()
    assert len(np.unique(tail.shot[measured])) == measured.sum()


def test_what_cannot_be_replanned() -> None:
    """A night that is through, and one with minutes left, are answered in words."""
    table, sequence = night_a(repeats=3)
    order = make_order(table, sequence, seed=1, effort="quick")
    mid = order.start_s + order.duration_s / 2
    measured = order.kind == int(Kind.MEASURE)
    everything = Past(row=order.shot[measured], mid_s=mid[measured])
    with pytest.raises(PlanImpossible, match="nothing left to order"):
        replan(table, sequence, everything, now_s=1e5, until_s=2e5, seed=5)
    nothing = Past(row=np.zeros(0, dtype=np.int64), mid_s=np.zeros(0))
    with pytest.raises(PlanImpossible, match=r"5 min are left, and one packet of every point takes \d+ min"):
        replan(table, sequence, nothing, now_s=0.0, until_s=300.0, seed=5)
