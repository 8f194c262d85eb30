"""Replanning a night that stands still: what has run is read from the logbook, the rest is ordered anew and stored.

The night must not be driven meanwhile: the lease on its rig is taken for the time, and a shot that is still open at the
rig is settled first (by going on with the night), since nobody knows yet whether it counts.
"""

from dataclasses import dataclass

import numpy as np

from planner.design.ordering import Effort
from planner.design.replan import Past, Replanned, replan
from planner.design.running_order import Kind
from planner.errors import LogbookConflict, PlanImpossible
from planner.logbook.book import Logbook, NightRow
from planner.logbook.states import DONE, NIGHT_OPEN
from planner.sequence.reader import parse_sequence

SECOND_US = 1_000_000
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
        LogbookConflict: the night has not begun or has ended, is being driven, holds several requests, or has shots
            that are open at the rig.
        PlanImpossible: nothing is left to do, or nothing fits.
    """
    if night.state not in NIGHT_OPEN or night.source != "link":
        raise LogbookConflict(f"the night {night.name} is {night.state}: only a night that is open can be replanned")
    if night.begins_us is None:
        raise LogbookConflict(f"the night {night.name} has not begun: book it anew instead (nightfringe run FILE)")
    requests = book.requests(night.id)
    if len(requests) != 1:
        raise LogbookConflict(f"the night {night.name} holds {len(requests)} requests: only one can be replanned")
    driving = book.drive(night.rig_id, owner=owner, now_us=now_us, lease_us=LEASE_US)
    try:
        still_open = driving.open_attempts(night.id)
        if still_open:
            raise LogbookConflict(
                f"{len(still_open)} shot(s) of the night {night.name} are open at the rig: go on with it (nightfringe "
                "run), stop it (Ctrl-C), and replan then"
            )
        plan = book.night_plan(night.id)
        sequence = parse_sequence(requests[0].sequence_text, requests[0].title)
        table = plan.requests[0].table
        order = plan.order.columns
        next_position = night.next_position
        ends = driving.ends(night.id)
        finished = {position for position, state in ends if state == DONE}
        columns = book.night_columns(night.id)
        mid = dict(zip(columns["position"].tolist(), columns["mid_s"].tolist(), strict=True))
        last_s = float(np.nanmax(columns["start_s"] + columns["duration_s"], initial=0.0))
        measuring = [
            position
            for position in sorted(finished)
            if order["kind"][position] == int(Kind.MEASURE) and np.isfinite(mid.get(position, np.nan))
        ]
        past = Past(
            row=np.array([int(order["shot"][position]) for position in measuring], dtype=np.int64),
            mid_s=np.array([float(mid[position]) for position in measuring]),
        )
        began_s = last_s if night.clock == "simulated" else max(last_s, (now_us - night.begins_us) / SECOND_US)
        until_s = night.length_s if hours_left is None else began_s + 3600 * hours_left
        if until_s <= began_s:
            raise PlanImpossible(
                f"the window of the night {night.name} is over: give it more time with --hours-left, or end it"
            )
        later = np.arange(next_position, len(plan.order))
        later = later[order["kind"][later] == int(Kind.MEASURE)]
        # had the old order gone on, its shots would come as much later as the night now is
        shift = began_s - float(order["start_s"][next_position]) if next_position < len(plan.order) else 0.0
        middle = order["start_s"][later] + order["settle_s"][later] + order["duration_s"][later] / 2 + shift
        fits = middle < until_s
        replanned = replan(
            table,
            sequence,
            past,
            now_s=began_s,
            until_s=until_s,
            seed=_seed(book, night.id),
            effort=effort,
            packets_before=int(order["packet"].max()) + 1,
            units_before=int(order["unit"].max()) + 1,
            going_on=(order["shot"][later][fits], middle[fits]),
        )
        sent_measuring = int((order["kind"][:next_position] == int(Kind.MEASURE)).sum())
        with driving.step(night.id, now_us=now_us) as step:
            number = step.revise(
                replanned.tail,
                from_position=next_position,
                why=f"replanned: {replanned.to_come} packets to come, {replanned.dropped} dropped",
            )
        return NightReplanned(
            revision=number,
            from_position=next_position,
            done=len(measuring),
            lost=sent_measuring - len(measuring),
            began_s=began_s,
            until_s=until_s,
            plan=replanned,
        )
    finally:
        driving.release()


def _seed(book: Logbook, night_id: int) -> int:
    """A seed that no revision of the night has had, the same whenever it is asked for."""
    used = {row.seed for row in book.revisions(night_id)}
    seed = max(used) + 1
    return int(seed)
