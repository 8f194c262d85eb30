"""Shots that were missed (failed, lost, withdrawn) come again at the end of the order, in a revision of their own.

What is looked at is what happened to a shot, never its result. A shot that keeps the block of the restricted draw that
it had: had that block been flipped, its replacement would have been flipped with it.
"""

from collections import Counter
from collections.abc import Callable, Iterable
from contextlib import AbstractContextManager
from dataclasses import replace

import numpy as np

from planner.arrays import IntArray
from planner.design.running_order import Kind, RunningOrder
from planner.logbook.book import Logbook
from planner.logbook.driving import Driving, Step
from planner.logbook.orders import ORDER_COLUMNS
from planner.logbook.plans import NightPlan
from planner.logbook.states import DONE, WITHDRAWN

MOST_TRIES = 3  # sendings of one shot in a night; what fails so often has a reason that a repeat will not cure

ONCE = (Kind.WARM_UP, Kind.CHECK)  # these belong to their moment: there is nothing to make good later


def missed_positions(plan: NightPlan, ends: Iterable[tuple[int, str]], *, next_position: int) -> IntArray:
    """Positions whose shot has no result yet and may be tried again, at most one a shot, in running order.

    Args:
        ends: position and end of every attempt that has ended.
        next_position: positions from here on have not been sent and are not missed.
    """
    order = plan.order.columns
    tried: Counter[tuple[int, int]] = Counter()
    latest: dict[tuple[int, int], int] = {}
    done: set[tuple[int, int]] = set()
    for position, state in ends:
        if position >= next_position or order["kind"][position] in ONCE:
            continue
        shot = (int(order["request"][position]), int(order["shot"][position]))
        tried[shot] += state != WITHDRAWN  # what was withdrawn never ran
        latest[shot] = max(position, latest.get(shot, position))
        if state == DONE:
            done.add(shot)
    again = [position for shot, position in latest.items() if shot not in done and tried[shot] < MOST_TRIES]
    return np.array(sorted(again), dtype=np.int64)


def replacement_order(plan: NightPlan, missed: IntArray, *, seed: int) -> RunningOrder:
    """The missed shots as the tail of a new revision.

    Shots of one state of the slow switches stay together, so that a slow switch moves as seldom as can be. Each old
    packet becomes a packet of its own here: its shots are neighbours again, but not of those measured before.
    """
    order = plan.order.columns
    slow = [_slow_states(plan, int(position)) for position in missed]
    measured = np.flatnonzero(~np.isin(order["kind"], ONCE))
    last = _slow_states(plan, int(measured[-1]))
    groups = sorted(set(slow), key=lambda state: (state != last, state))
    rows = np.array([p for group in groups for p, state in zip(missed, slow, strict=True) if state == group])
    states = [_slow_states(plan, int(position)) for position in rows]
    settle_s = np.zeros(len(rows))
    before = last
    for row, state in enumerate(states):
        if state != before:
            settle_s[row] = _settle_s(plan, int(rows[row]))
        before = state
    duration_s = order["duration_s"][rows]
    first_s = float(order["start_s"][-1] + order["settle_s"][-1] + order["duration_s"][-1])
    busy_s = settle_s + duration_s
    old_packet = order["packet"][rows]
    fresh = np.unique(old_packet, return_inverse=True)[1].reshape(-1) + int(order["packet"].max()) + 1
    return RunningOrder(
        request=order["request"][rows],
        shot=order["shot"][rows],
        kind=order["kind"][rows],
        start_s=first_s + np.cumsum(busy_s) - busy_s,
        settle_s=settle_s,
        duration_s=duration_s,
        packet=np.where(old_packet < 0, -1, fresh),
        unit=order["unit"][rows],
        flip=order["flip"][rows],
        seed=seed,
        notes={"replaces": [int(position) for position in rows]},
    )


def append_missed(
    book: Logbook,
    driving: Driving,
    step: Callable[[], AbstractContextManager[Step]],
    night_id: int,
    *,
    room_s: float,
) -> int:
    """Append the missed shots of a night whose order is through, as far as they fit into `room_s`; how many."""
    plan = book.night_plan(night_id)
    missed = missed_positions(plan, driving.ends(night_id), next_position=len(plan.order))
    if not len(missed):
        return 0
    tail = replacement_order(plan, missed, seed=len(plan.order))
    fits = int(np.count_nonzero(np.cumsum(tail.settle_s + tail.duration_s) <= room_s))
    with step() as writing:
        if fits < len(tail):
            writing.audit("missed_shots_left", {"missed": len(tail), "repeated": fits})
        if fits:
            writing.revise(first_rows(tail, fits), from_position=len(plan.order), why=f"{fits} missed shots again")
    return fits


def first_rows(order: RunningOrder, count: int) -> RunningOrder:
    """The first `count` positions of an order."""
    columns = {name: getattr(order, name)[:count] for name in ORDER_COLUMNS}
    return replace(order, **columns)


def _slow_states(plan: NightPlan, position: int) -> tuple[tuple[str, int], ...]:
    request = plan.requests[int(plan.order.columns["request"][position])]
    row = int(plan.order.columns["shot"][position])
    switches = request.details["switches"]
    return tuple((name, int(signs[row])) for name, signs in request.table.switches.items() if switches[name]["dwell_s"])


def _settle_s(plan: NightPlan, position: int) -> float:
    request = plan.requests[int(plan.order.columns["request"][position])]
    return max((float(part["settle_s"]) for part in request.details["switches"].values()), default=0.0)
