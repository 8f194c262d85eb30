"""Which shots come again, and in what order: by what happened to them, never by what they measured."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest

from planner.design.running_order import Kind
from planner.logbook.orders import in_force
from planner.logbook.plans import NightPlan, RequestPlan
from planner.night.replacements import first_rows, missed_positions, replacement_order
from tests.night.nights import DETAILS, small_order, small_request


def plan(kinds: Sequence[Kind] = ()) -> NightPlan:
    order = small_order()
    if kinds:
        order = replace(order, kind=np.array([*kinds, *[Kind.MEASURE] * (8 - len(kinds))], dtype=np.int64))
    request = RequestPlan(
        id=1, number=0, title="small", table=small_request().table, timelines=("a", "b"), details=DETAILS
    )
    return NightPlan(night_id=1, order=in_force([(1, 0, order)]), requests=(request,))


@pytest.mark.parametrize(
    ("ends", "missed"),
    [
        ([(p, "done") for p in range(8)], []),
        ([(0, "failed"), (1, "done"), (2, "lost"), (3, "withdrawn")], [0, 2, 3]),
        ([(0, "withdrawn"), (0, "done")], []),  # taken back by a stop, measured at the next start
        ([(0, "failed"), (0, "failed"), (0, "failed")], []),  # given up
        ([(0, "withdrawn")] * 5, [0]),  # what never ran does not count as a try
    ],
)
def test_what_is_missed(ends: list[tuple[int, str]], missed: list[int]) -> None:
    """A shot without a result comes again until it has been tried three times."""
    assert missed_positions(plan(), ends, next_position=8).tolist() == missed


def test_what_has_not_been_sent_is_not_missed() -> None:
    """A shot taken back by a stop is still to come in the order itself."""
    assert missed_positions(plan(), [(3, "withdrawn"), (2, "lost")], next_position=3).tolist() == [2]


def test_warm_ups_and_checks_belong_to_their_moment() -> None:
    """They are not made good later."""
    ends = [(0, "failed"), (1, "failed"), (2, "failed")]
    assert missed_positions(plan([Kind.WARM_UP, Kind.CHECK]), ends, next_position=8).tolist() == [2]


def test_slow_switches_move_once() -> None:
    """Shots of the state that the switch stands in come first; the other state after one settle wait."""
    tail = replacement_order(plan(), np.array([0, 2, 5, 7]), seed=1)
    assert tail.shot.tolist() == [5, 7, 0, 2]
    assert tail.settle_s.tolist() == [0.0, 0.0, 25.0, 0.0]
    # the order ends at 8 shots of 10 s and one settle wait of 25 s
    assert tail.start_s.tolist() == [105.0, 115.0, 125.0, 160.0]
    assert tail.packet.tolist() == [3, 3, 2, 2]
    assert tail.unit.tolist() == [1, 1, 0, 0]


def test_the_first_rows_of_an_order_are_an_order() -> None:
    """Cutting keeps every column in step, and the seed."""
    cut = first_rows(small_order(), 3)
    assert len(cut) == 3
    assert len(cut.flip) == 3
    assert cut.seed == 3
