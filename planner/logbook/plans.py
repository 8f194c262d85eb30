"""A night's plan as the dispatcher takes it up: the order in force and each request's shot table."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, select

from planner.logbook.documents import get_document
from planner.logbook.orders import OrderInForce, in_force, unpack_order, unpack_table
from planner.logbook.tables import Request, Revision
from planner.sequence.table import ShotTable


@dataclass(frozen=True, kw_only=True)
class RequestPlan:
    """A request's shots. `timelines` are the hashes of the documents that the table's `timeline` column counts."""

    id: int
    number: int
    title: str
    table: ShotTable
    timelines: tuple[str, ...]
    details: Mapping[str, Any]


@dataclass(frozen=True, kw_only=True)
class NightPlan:
    """The order in force, and the requests by number."""

    night_id: int
    order: OrderInForce
    requests: tuple[RequestPlan, ...]


def read_requests(connection: Connection, night_id: int) -> tuple[RequestPlan, ...]:
    """The requests of a night, by number, their tables checked against their hashes."""
    rows = connection.execute(
        select(Request.id, Request.number, Request.title, Request.shot_table, Request.details)
        .where(Request.night_id == night_id)
        .order_by(Request.number)
    ).all()
    requests = []
    for row in rows:
        table, timelines = unpack_table(get_document(connection, row.shot_table))
        requests.append(
            RequestPlan(
                id=row.id, number=row.number, title=row.title, table=table, timelines=timelines, details=row.details
            )
        )
    return tuple(requests)


def read_order(connection: Connection, night_id: int, *, through: int | None = None) -> OrderInForce:
    """The order in force after the latest revision, or after revision `through`."""
    question = select(Revision.number, Revision.from_position, Revision.shot_order).where(Revision.night_id == night_id)
    if through is not None:
        question = question.where(Revision.number <= through)
    rows = connection.execute(question.order_by(Revision.number)).all()
    return in_force(
        [(row.number, row.from_position, unpack_order(get_document(connection, row.shot_order))) for row in rows]
    )


def read_plan(connection: Connection, night_id: int) -> NightPlan:
    """The whole plan of a night."""
    return NightPlan(
        night_id=night_id, order=read_order(connection, night_id), requests=read_requests(connection, night_id)
    )
