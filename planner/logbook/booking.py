"""Writing a booked night: its texts, tables, timelines and revision 1 in one transaction."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, insert, select

from planner.design.running_order import RunningOrder
from planner.errors import LogbookConflict
from planner.logbook.book import add_audit
from planner.logbook.documents import put_document, put_documents
from planner.logbook.orders import pack_order, pack_table
from planner.logbook.provenance import versions
from planner.logbook.states import NIGHT_BOOKED
from planner.logbook.tables import Night, Request, Revision, Rig
from planner.logbook.types import canonical_json
from planner.sequence.table import ShotTable


@dataclass(frozen=True, kw_only=True)
class NewRequest:
    """A request to be stored. `details` is JSON-able: what sending a shot needs besides the table."""

    title: str
    sequence_text: str
    table: ShotTable
    timelines: Iterable[Mapping[str, Any]]  # documents, in the order of the table's `timeline` column
    goal: str
    seed: int
    share: float = 1.0
    priority: int = 0
    details: Mapping[str, Any] = field(default_factory=dict)
    kind: str = "sequence"  # "record" where the text is a CSV of results


@dataclass(frozen=True, kw_only=True)
class NewNight:
    """A night to be stored, with revision 1 of its order."""

    name: str
    rig: str
    rig_text: str | None
    link: str
    length_s: float
    requests: Sequence[NewRequest]
    order: RunningOrder
    why: str = "booked"
    source: str = "link"
    unattended: str | None = None


def rig_number(connection: Connection, name: str) -> int:
    """The row of the rig of that name, made if it is new."""
    found = connection.scalar(select(Rig.id).where(Rig.name == name))
    if found is None:
        found = connection.execute(insert(Rig).returning(Rig.id), {"name": name}).scalar_one()
    return found


def store_night(connection: Connection, new: NewNight, *, now_us: int, who: str) -> int:
    """Store `new`; returns the night's number. LogbookConflict when its name is taken."""
    if connection.scalar(select(Night.id).where(Night.name == new.name)) is not None:
        raise LogbookConflict(f"there is a night named {new.name!r} already; give another with --night NAME")
    night_id = connection.execute(
        insert(Night).returning(Night.id),
        {
            "name": new.name,
            "rig_id": rig_number(connection, new.rig),
            "state": NIGHT_BOOKED,
            "source": new.source,
            "clock": "unknown",
            "rig_file": None if new.rig_text is None else put_document(connection, "rig", new.rig_text.encode()),
            "link": new.link,
            "length_s": new.length_s,
            "next_position": 0,
            "unattended": new.unattended,
            "booked_us": now_us,
        },
    ).scalar_one()
    for number, request in enumerate(new.requests):
        timelines = put_documents(
            connection, "timeline", (canonical_json(document).encode() for document in request.timelines)
        )
        connection.execute(
            insert(Request),
            {
                "night_id": night_id,
                "number": number,
                "title": request.title,
                "sequence": put_document(connection, request.kind, request.sequence_text.encode()),
                "shot_table": put_document(connection, "table", pack_table(request.table, timelines)),
                "goal": request.goal,
                "seed": request.seed,
                "share": request.share,
                "priority": request.priority,
                "state": "open",
                "details": dict(request.details),
            },
        )
    store_revision(connection, night_id, new.order, number=1, from_position=0, why=new.why, now_us=now_us)
    add_audit(
        connection,
        at_us=now_us,
        who=who,
        what="night_booked",
        night_id=night_id,
        detail={"positions": len(new.order), "seed": new.order.seed, "unattended": new.unattended},
    )
    return night_id


def store_revision(
    connection: Connection,
    night_id: int,
    tail: RunningOrder,
    *,
    number: int,
    from_position: int,
    why: str,
    now_us: int,
) -> None:
    """Store one revision: `tail` takes the place of everything from `from_position` on."""
    connection.execute(
        insert(Revision),
        {
            "night_id": night_id,
            "number": number,
            "why": why,
            "seed": tail.seed,
            "versions": versions(),
            "shot_order": put_document(connection, "order", pack_order(tail)),
            "from_position": from_position,
            "positions": from_position + len(tail),
            "made_us": now_us,
        },
    )
