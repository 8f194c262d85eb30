"""Storing a night that no link saw: results written down by hand, marked so."""

import secrets
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, insert, select, update

from planner.logbook.book import add_audit
from planner.logbook.booking import NewNight, store_night
from planner.logbook.driving import Outcome, result_row
from planner.logbook.states import NIGHT_DONE
from planner.logbook.tables import Attempt, Night, Request, Result

BY_HAND = "recorded by hand"


@dataclass(frozen=True, kw_only=True)
class HandEnd:
    """How one shot ended: "done" or "failed", and what was measured."""

    state: str
    outcome: Outcome


def store_record(
    connection: Connection,
    new: NewNight,
    ends: Sequence[HandEnd],
    *,
    readings: Mapping[str, str],
    now_us: int,
    who: str,
) -> int:
    """Store the night with an attempt and a result for every position; returns its number."""
    night_id = store_night(connection, new, now_us=now_us, who=who)
    request_id = connection.scalar(select(Request.id).where(Request.night_id == night_id))
    starts = [end.outcome.started_us for end in ends if end.outcome.started_us is not None]
    connection.execute(
        update(Night)
        .where(Night.id == night_id)
        .values(state=NIGHT_DONE, why=BY_HAND, begins_us=min(starts), next_position=len(ends))
    )
    keys = [secrets.token_hex(16) for _ in ends]
    attempts = [
        {
            "key": key,
            "night_id": night_id,
            "request_id": request_id,
            "revision": 1,
            "position": position,
            "try_number": 1,
            "state": end.state,
            "epoch": 0,
            "digest": "",
            "settle_s": 0.0,
            "intended_us": now_us,
            "ended_us": now_us,
            "why": BY_HAND,
        }
        for position, (key, end) in enumerate(zip(keys, ends, strict=True))
    ]
    connection.execute(insert(Attempt), attempts)
    rows = connection.execute(select(Attempt.key, Attempt.id).where(Attempt.night_id == night_id)).all()
    numbers = {row.key: row.id for row in rows}
    connection.execute(
        insert(Result), [result_row(numbers[key], end.outcome) for key, end in zip(keys, ends, strict=True)]
    )
    add_audit(
        connection,
        at_us=now_us,
        who=who,
        what="night_recorded",
        night_id=night_id,
        detail={"shots": len(ends), "readings": dict(readings)},
    )
    return night_id
