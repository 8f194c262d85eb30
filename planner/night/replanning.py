"""Replanning a night: what has run is read from the logbook, the rest is ordered anew and stored as the next revision.

Two ways lead here. Somebody asks for it (nightfringe replan) while the night stands still: then the lease on its rig is
taken for the time, and a shot that is still open at the rig is settled first, since nobody knows yet whether it counts.
Or the dispatcher sees that the night has slipped (taking_over.py).
"""

from dataclasses import dataclass, replace

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.merging import Part
from planner.design.ordering import Effort
from planner.design.replan import Past, Replanned, replan_requests
from planner.design.running_order import Kind
from planner.errors import LogbookConflict, PlanImpossible
from planner.logbook.book import Logbook, NightRow
from planner.logbook.driving import Driving
from planner.logbook.states import DONE, NIGHT_OPEN
from planner.sequence.reader import parse_sequence

SECOND_US = 1_000_000
SEEDS = 16  # apart: a replan may look at a few seeds, and none must be one that a revision has had
LEASE_US = 600 * SECOND_US  # ordering a long night takes half a minute


@dataclass(frozen=True, kw_only=True)
class NightReplanned:
    """What became of it. `done`, `lost`: measuring shots; `began_s` and `until_s` on the night's axis."""

    revision: int
    from_position: int
    done: int
    lost: int
    began_s: float
    until_s: float
    plan: Replanned


@dataclass(frozen=True, kw_only=True)
class Standing:
    """How a night stands, all that replanning it needs: plain values that another process can be handed.

    parts, past and going_on by request; from_position: where the new order takes over; now_s and until_s: when, and
    when the night must be over, s from its start; sent: measuring shots of the order before from_position.
    """

    parts: tuple[Part, ...]
    past: tuple[Past, ...]
    going_on: tuple[tuple[IntArray, FloatArray], ...]
    from_position: int
    now_s: float
    until_s: float
    seed: int
    packets_before: int
    units_before: int
    sent: int

    @property
    def done(self) -> int:
        """Measuring shots that have run, or will have when the new order takes over."""
        return sum(len(past.row) for past in self.past)


def how_it_stands(
    book: Logbook,
    driving: Driving,
    night: NightRow,
    *,
    from_position: int,
    now_s: float,
    until_s: float,
) -> Standing:
    """Read how a night stands.

    Args:
        from_position: where the new order would take over. Positions before it that have not been sent count as run at
        the times that they then have. now_s: when it would begin.
    """
    plan = book.night_plan(night.id)
    order = plan.order.columns
    parts = tuple(
        Part(table=one.table, sequence=replace(parse_sequence(row.sequence_text, row.title), title=row.title))
        for one, row in zip(plan.requests, book.requests(night.id), strict=True)
    )
    columns = book.night_columns(night.id)
    mid = dict(zip(columns["position"].tolist(), columns["mid_s"].tolist(), strict=True))
    finished = {position for position, state in driving.ends(night.id) if state == DONE}
    count = len(plan.order)
    measuring = order["kind"] == int(Kind.MEASURE)
    # had the old order gone on, its shots would come as much later as the night now is
    shift = now_s - float(order["start_s"][from_position]) if from_position < count else 0.0
    planned = order["start_s"] + order["settle_s"] + order["duration_s"] / 2 + shift
    next_position = book.night(night.id).next_position
    middle = np.full(count, np.nan)
    for position in finished:
        middle[position] = mid.get(position, np.nan)
    middle[next_position:from_position] = planned[next_position:from_position]
    ran = measuring & np.isfinite(middle) & (np.arange(count) < from_position)
    later = measuring & (np.arange(count) >= from_position) & (planned < until_s)
    past, going_on = [], []
    for number in range(len(parts)):
        mine = order["request"] == number
        past.append(Past(row=order["shot"][ran & mine], mid_s=middle[ran & mine]))
        going_on.append((order["shot"][later & mine], planned[later & mine]))
    return Standing(
        parts=parts,
        past=tuple(past),
        going_on=tuple(going_on),
        from_position=from_position,
        now_s=now_s,
        until_s=until_s,
        seed=max(row.seed for row in book.revisions(night.id)) + SEEDS,
        packets_before=int(order["packet"].max()) + 1,
        units_before=int(order["unit"].max()) + 1,
        sent=int(measuring[:from_position].sum()),
    )


def plan_the_rest(standing: Standing, effort: Effort = "full") -> Replanned:
    """The next revision of a night that stands like this.

    Raises:
        PlanImpossible: nothing is left to do, or nothing fits.
    """
    return replan_requests(
        standing.parts,
        standing.past,
        now_s=standing.now_s,
        until_s=standing.until_s,
        seed=standing.seed,
        effort=effort,
        packets_before=standing.packets_before,
        units_before=standing.units_before,
        going_on=standing.going_on,
    )


def replan_night(
    book: Logbook,
    night: NightRow,
    *,
    now_us: int,
    owner: str,
    hours_left: float | None = None,
    effort: Effort = "full",
) -> NightReplanned:
    """Order what is left of a night anew, and store it as the next revision.

    Args:
        night: begun, and driven by nobody. now_us: this computer's time; on a real clock the rest begins now, on a
        simulated one where the last shot ended. hours_left: from there; without it, what is left of the night's window.

    Raises:
        LogbookConflict: the night has not begun or has ended, is being driven, or has shots that are open at the rig.
        PlanImpossible: nothing is left to do, or nothing fits.
    """
    if night.state not in NIGHT_OPEN or night.source != "link":
        raise LogbookConflict(f"the night {night.name} is {night.state}: only a night that is open can be replanned")
    if night.begins_us is None:
        raise LogbookConflict(f"the night {night.name} has not begun: book it anew instead (nightfringe run FILE)")
    driving = book.drive(night.rig_id, owner=owner, now_us=now_us, lease_us=LEASE_US)
    try:
        still_open = driving.open_attempts(night.id)
        if still_open:
            raise LogbookConflict(
                f"{len(still_open)} shot(s) of the night {night.name} are open at the rig: go on with it (nightfringe "
                "run), stop it (Ctrl-C), and replan then"
            )
        columns = book.night_columns(night.id)
        last_s = float(np.nanmax(columns["start_s"] + columns["duration_s"], initial=0.0))
        began_s = last_s if night.clock == "simulated" else max(last_s, (now_us - night.begins_us) / SECOND_US)
        until_s = night.length_s if hours_left is None else began_s + 3600 * hours_left
        if until_s <= began_s:
            raise PlanImpossible(
                f"the window of the night {night.name} is over: give it more time with --hours-left, or end it"
            )
        position = book.night(night.id).next_position
        standing = how_it_stands(book, driving, night, from_position=position, now_s=began_s, until_s=until_s)
        plan = plan_the_rest(standing, effort)
        with driving.step(night.id, now_us=now_us) as step:
            number = step.revise(plan.tail, from_position=position, why=plan.why)
        return NightReplanned(
            revision=number,
            from_position=position,
            done=standing.done,
            lost=standing.sent - standing.done,
            began_s=began_s,
            until_s=until_s,
            plan=plan,
        )
    finally:
        driving.release()
