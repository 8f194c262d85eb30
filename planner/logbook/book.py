"""The logbook: open it, book a night, ask what is in it. For driving a rig see driving.py."""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from types import TracebackType
from typing import TYPE_CHECKING, Any, Self

from sqlalchemy import Connection, func, insert, select, update

from planner.errors import LogbookConflict
from planner.logbook import schema
from planner.logbook.backends import Backend, backend_for
from planner.logbook.border import border
from planner.logbook.documents import get_document
from planner.logbook.states import NIGHT_OPEN, NIGHT_OVER
from planner.logbook.tables import OPEN_ATTEMPTS, Attempt, Audit, Night, Request, Revision, Rig

if TYPE_CHECKING:
    from planner.logbook.booking import NewNight
    from planner.logbook.driving import Driving
    from planner.logbook.night_columns import Columns
    from planner.logbook.plans import NightPlan
    from planner.logbook.recording import HandEnd


@dataclass(frozen=True, kw_only=True)
class NightRow:
    """One night as listed. Times in microseconds since 1970 UTC on the rig's clock, None before it begins."""

    id: int
    name: str
    rig: str
    rig_id: int
    state: str
    why: str | None
    source: str
    clock: str
    link: str
    length_s: float
    begins_us: int | None
    booked_us: int
    next_position: int
    positions: int
    unattended: str | None


@dataclass(frozen=True, kw_only=True)
class RequestRow:
    """One request of a night, with its texts. `sequence_text` is the CSV for a night recorded by hand."""

    id: int
    number: int
    title: str
    goal: str
    seed: int
    sequence_sha256: str
    sequence_text: str
    rig_text: str
    details: dict[str, Any]


@dataclass(frozen=True, kw_only=True)
class RevisionRow:
    """One revision of a night's order."""

    number: int
    why: str
    seed: int
    versions: dict[str, str]
    order_sha256: str
    from_position: int
    positions: int
    made_us: int


class Logbook:
    """An open logbook. Readers may be many and never wait; writing is for one process at a time (SQLite)."""

    def __init__(self, backend: Backend) -> None:
        self.backend = backend
        self.place = backend.place
        self._reader = backend.engine(writes=False)
        self._writer = backend.engine(writes=True)

    def close(self) -> None:
        """Close all connections and give the right to write back."""
        self._reader.dispose()
        self._writer.dispose()
        self.backend.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """A transaction that sees one moment of the logbook and can change nothing."""
        with border(self.place), self._reader.begin() as connection:
            yield connection

    @contextmanager
    def writing(self) -> Iterator[Connection]:
        """One transaction; on leaving it normally, what was written is on disk. An exception takes all of it back."""
        self.backend.hold_writing()
        with border(self.place), self._writer.begin() as connection:
            yield connection

    # ---- nights

    def nights(self) -> list[NightRow]:
        """All nights, the latest booked last."""
        with self.reading() as connection:
            return _nights(connection)

    def night(self, name: str | int | None = None) -> NightRow:
        """The night of that name or number; without one, the night booked last.

        Raises:
            LogbookConflict: there is none; the message lists those that there are.
        """
        with self.reading() as connection:
            found = _nights(connection)
        if not found:
            raise LogbookConflict(f"the logbook {self.place} has no night yet; book one with: nightfringe run FILE")
        if name is None:
            return found[-1]
        for night in found:
            if night.id == name or night.name == str(name):
                return night
        names = ", ".join(night.name for night in found[-5:])
        raise LogbookConflict(f"the logbook {self.place} has no night {name!r}; the latest are: {names}")

    def open_night(self) -> NightRow | None:
        """The night that is booked, running or stopped; the latest of several; None where none is."""
        return next((night for night in reversed(self.nights()) if night.state in NIGHT_OPEN), None)

    def requests(self, night_id: int) -> list[RequestRow]:
        """The requests of a night with the texts of their sequence and rig file."""
        with self.reading() as connection:
            rig_file = connection.scalar(select(Night.rig_file).where(Night.id == night_id))
            rig_text = "" if rig_file is None else get_document(connection, rig_file).decode()
            rows = connection.execute(
                select(
                    Request.id,
                    Request.number,
                    Request.title,
                    Request.goal,
                    Request.seed,
                    Request.sequence,
                    Request.details,
                )
                .where(Request.night_id == night_id)
                .order_by(Request.number)
            ).all()
            return [
                RequestRow(
                    id=row.id,
                    number=row.number,
                    title=row.title,
                    goal=row.goal,
                    seed=row.seed,
                    sequence_sha256=row.sequence,
                    sequence_text=get_document(connection, row.sequence).decode(),
                    rig_text=rig_text,
                    details=row.details,
                )
                for row in rows
            ]

    def revisions(self, night_id: int) -> list[RevisionRow]:
        """The revisions of a night's order, by number."""
        with self.reading() as connection:
            rows = connection.execute(
                select(
                    Revision.number,
                    Revision.why,
                    Revision.seed,
                    Revision.versions,
                    Revision.shot_order.label("order_sha256"),
                    Revision.from_position,
                    Revision.positions,
                    Revision.made_us,
                )
                .where(Revision.night_id == night_id)
                .order_by(Revision.number)
            ).all()
            return [RevisionRow(**row._mapping) for row in rows]

    def counts(self, night_id: int) -> dict[str, int]:
        """Attempts of a night by state."""
        with self.reading() as connection:
            rows = connection.execute(
                select(Attempt.state, func.count()).where(Attempt.night_id == night_id).group_by(Attempt.state)
            ).all()
            return {row[0]: row[1] for row in rows}

    def audit(self, night_id: int | None = None) -> list[dict[str, Any]]:
        """What was decided, in order: `at_us`, `who`, `what`, `night_id`, `detail`."""
        question = select(Audit.at_us, Audit.who, Audit.what, Audit.night_id, Audit.detail).order_by(Audit.id)
        if night_id is not None:
            question = question.where(Audit.night_id == night_id)
        with self.reading() as connection:
            return [dict(row._mapping) for row in connection.execute(question)]

    def reading_units(self, night_id: int) -> dict[str, str]:
        """Units of the rig's readings, as the rig last described them in this night."""
        met = [line["detail"] for line in self.audit(night_id) if line["what"] in ("rig_met", "night_recorded")]
        return {name: str(unit) for detail in met for name, unit in detail.get("readings", {}).items()}

    # ---- in rooms of their own

    def book_night(self, new: "NewNight", *, now_us: int, who: str) -> NightRow:
        """Store a night, its requests and revision 1 of its order (LogbookConflict if the name is taken)."""
        from planner.logbook.booking import store_night

        with self.writing() as connection:
            night_id = store_night(connection, new, now_us=now_us, who=who)
        return self.night(night_id)

    def record_night(
        self, new: "NewNight", ends: "Sequence[HandEnd]", *, readings: Mapping[str, str], now_us: int, who: str
    ) -> NightRow:
        """Store a night whose results were written down by hand, one end a position, in one transaction."""
        from planner.logbook.recording import store_record

        with self.writing() as connection:
            night_id = store_record(connection, new, ends, readings=readings, now_us=now_us, who=who)
        return self.night(night_id)

    def end_night(self, night_id: int, *, now_us: int, who: str, why: str) -> None:
        """End a night for good (LogbookConflict if shots of it have no end yet)."""
        with self.writing() as connection:
            still = connection.scalar(select(func.count()).where(Attempt.night_id == night_id, OPEN_ATTEMPTS))
            if still:
                raise LogbookConflict(f"{still} shots of this night may still be at the rig; run it first")
            connection.execute(update(Night).where(Night.id == night_id).values(state=NIGHT_OVER, why=why))
            add_audit(connection, at_us=now_us, who=who, what="night_over", night_id=night_id, detail={"why": why})

    def night_plan(self, night_id: int) -> "NightPlan":
        """The order in force and the shot tables of a night (LogbookDamaged if a hash does not match)."""
        from planner.logbook.plans import read_plan

        with self.reading() as connection:
            return read_plan(connection, night_id)

    def night_columns(self, night_id: int) -> "Columns":
        """What the night measured, as columns (see night_columns.py)."""
        from planner.logbook.night_columns import read_columns

        with self.reading() as connection:
            return read_columns(connection, night_id)

    def drive(self, rig_id: int, *, owner: str, now_us: int, lease_us: int) -> "Driving":
        """Take over a rig (LogbookConflict if somebody else's lease still runs)."""
        from planner.logbook.driving import take_over

        return take_over(self, rig_id, owner=owner, now_us=now_us, lease_us=lease_us)


def open_logbook(place: str, *, create: bool = False) -> Logbook:
    """Open the logbook at `place`: a file name, or a postgresql:// address.

    With `create`, an empty place gets the tables first.

    Raises:
        LogbookMissing: nothing there (and not `create`), or a database that holds no logbook.
        LogbookTooNew: written by a newer Nightfringe.
        LogbookUnavailable: locked, unreadable, or the database does not answer.
        InputError: `place` is neither a file nor such an address.
    """
    backend = backend_for(str(place))
    backend.prepare(create=create)
    book = Logbook(backend)
    try:
        with book.reading() as connection:
            version = schema.found_version(connection)
            empty = version is None and not schema.has_tables(connection)
        if create and empty:
            backend.hold_writing()
            with border(book.place):
                schema.make(book._writer)
        with book.reading() as connection:
            schema.check(connection, book.place)
    except BaseException:
        book.close()
        raise
    return book


def add_audit(
    connection: Connection, *, at_us: int, who: str, what: str, night_id: int | None, detail: dict[str, Any]
) -> None:
    """One line of the audit."""
    connection.execute(
        insert(Audit), {"at_us": at_us, "who": who, "what": what, "night_id": night_id, "detail": detail}
    )


def _nights(connection: Connection) -> list[NightRow]:
    lengths = (
        select(Revision.night_id, func.max(Revision.number).label("number")).group_by(Revision.night_id).subquery()
    )
    rows = connection.execute(
        select(
            Night.id,
            Night.name,
            Rig.name.label("rig"),
            Night.rig_id,
            Night.state,
            Night.why,
            Night.source,
            Night.clock,
            Night.link,
            Night.length_s,
            Night.begins_us,
            Night.booked_us,
            Night.next_position,
            Revision.positions,
            Night.unattended,
        )
        .join(Rig, Rig.id == Night.rig_id)
        .join(lengths, lengths.c.night_id == Night.id)
        .join(Revision, (Revision.night_id == Night.id) & (Revision.number == lengths.c.number))
        .order_by(Night.id)
    ).all()
    return [NightRow(**row._mapping) for row in rows]
