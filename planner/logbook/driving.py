"""Driving a rig: the lease with its fencing epoch, and the one transaction a shot.

Every step checks the lease in the transaction that does the writing, so that a program that was taken over can change
nothing more. Every change of an attempt's state is checked against the table in states.py by the UPDATE itself: an end
is written once.
"""

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, func, insert, select, update

from planner.design.running_order import RunningOrder
from planner.errors import LogbookConflict
from planner.logbook.book import Logbook, add_audit
from planner.logbook.booking import store_revision
from planner.logbook.documents import IN_ONE_QUESTION
from planner.logbook.states import ENDS, INTENDED, WITHDRAWN, may_become
from planner.logbook.tables import OPEN_ATTEMPTS, Anchor, Attempt, Lease, Night, Quarantine, Result, Revision, Rig

LATEST = 16  # attempts looked at for the rig's ordinal: more than a rig holds at once


@dataclass(frozen=True, kw_only=True)
class NewAttempt:
    """An attempt to be committed before it is sent."""

    key: str
    request_id: int
    revision: int
    position: int
    digest: str
    boot: str
    settle_s: float
    start_by_us: int | None


@dataclass(frozen=True, kw_only=True)
class OpenAttempt:
    """An attempt that has no end yet."""

    id: int
    key: str
    position: int
    try_number: int
    revision: int
    state: str
    boot: str | None
    settle_s: float
    intended_us: int


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What the rig said about an attempt that ran. None means not measured; times on the rig's clock."""

    answer_sha256: str
    atoms_a: float | None = None
    atoms_b: float | None = None
    background: float | None = None
    saturated: float | None = None
    started_us: int | None = None
    finished_us: int | None = None
    started_uptime_s: float | None = None
    finished_uptime_s: float | None = None
    applied: Mapping[str, Any] = field(default_factory=dict)
    readings: Mapping[str, Any] = field(default_factory=dict)
    flags: Sequence[str] = ()
    data_reference: str | None = None


def result_row(attempt_id: int, outcome: Outcome) -> dict[str, Any]:
    """The row of the results table."""
    row = {name: getattr(outcome, name) for name in Outcome.__dataclass_fields__}
    row |= {"attempt_id": attempt_id, "applied": dict(outcome.applied), "readings": dict(outcome.readings)}
    return {**row, "flags": list(outcome.flags)}


class Step:
    """What may be written within one transaction of a driver."""

    def __init__(self, connection: Connection, driving: "Driving", night_id: int, now_us: int) -> None:
        self._connection = connection
        self._driving = driving
        self._night_id = night_id
        self._now_us = now_us

    def intend(self, new: NewAttempt) -> OpenAttempt:
        """Commit a key for the next sending of a position."""
        tries = self._connection.scalar(
            select(func.coalesce(func.max(Attempt.try_number), 0)).where(
                Attempt.night_id == self._night_id, Attempt.position == new.position
            )
        )
        row: dict[str, Any] = {
            "key": new.key,
            "night_id": self._night_id,
            "request_id": new.request_id,
            "revision": new.revision,
            "position": new.position,
            "try_number": (tries or 0) + 1,
            "state": INTENDED,
            "epoch": self._driving.epoch,
            "digest": new.digest,
            "boot": new.boot,
            "settle_s": new.settle_s,
            "start_by_us": new.start_by_us,
            "intended_us": self._now_us,
        }
        attempt_id = self._connection.execute(insert(Attempt).returning(Attempt.id), row).scalar_one()
        return OpenAttempt(
            id=attempt_id,
            key=new.key,
            position=new.position,
            try_number=row["try_number"],
            revision=new.revision,
            state=INTENDED,
            boot=new.boot,
            settle_s=new.settle_s,
            intended_us=self._now_us,
        )

    def change(self, attempt_id: int, state: str, *, ordinal: int | None = None, why: str | None = None) -> None:
        """Move an attempt to another open state (LogbookConflict if it may not go there)."""
        self._move(attempt_id, state, {"ordinal": ordinal, "why": why})

    def end(
        self,
        attempt_id: int,
        state: str,
        *,
        ordinal: int | None = None,
        why: str | None = None,
        outcome: Outcome | None = None,
    ) -> None:
        """Give an attempt its one terminal record, with what was measured where it ran.

        Raises:
            LogbookConflict: it has one already, or may not end so.
        """
        if state not in ENDS:
            raise LogbookConflict(f"{state} is no end of an attempt")
        self._move(attempt_id, state, {"ordinal": ordinal, "why": why, "ended_us": self._now_us})
        if outcome is not None:
            self._connection.execute(insert(Result), result_row(attempt_id, outcome))

    def _move(self, attempt_id: int, state: str, values: dict[str, Any]) -> None:
        changed = self._connection.execute(
            update(Attempt)
            .where(Attempt.id == attempt_id, Attempt.state.in_(may_become(state)))
            .values(state=state, **{name: value for name, value in values.items() if value is not None})
        ).rowcount
        if changed != 1:
            found = self._connection.scalar(select(Attempt.state).where(Attempt.id == attempt_id))
            raise LogbookConflict(f"attempt {attempt_id} is {found} and cannot become {state}")

    def go_on_from(self, position: int) -> None:
        """The next position to be sent."""
        self._night({"next_position": position})

    def set_state(self, state: str, why: str | None = None) -> None:
        """The night's state, and why."""
        self._night({"state": state, "why": why})

    def begin(self, *, begins_us: int, clock: str) -> None:
        """The zero of the night's time axis, and the kind of the rig's clock."""
        self._night({"begins_us": begins_us, "clock": clock})

    def _night(self, values: dict[str, Any]) -> None:
        self._connection.execute(update(Night).where(Night.id == self._night_id).values(**values))

    def anchor(self, *, boot: str, utc_us: int, uptime_s: float) -> None:
        """UTC against uptime for one boot; the first anchor of a boot stays."""
        known = select(Anchor.boot).where(Anchor.night_id == self._night_id, Anchor.boot == boot)
        if self._connection.scalar(known) is None:
            self._connection.execute(
                insert(Anchor),
                {"night_id": self._night_id, "boot": boot, "utc_us": utc_us, "uptime_s": uptime_s},
            )

    def revise(self, tail: RunningOrder, *, from_position: int, why: str) -> int:
        """The next revision of the order; returns its number.

        Raises:
            LogbookConflict: it would change a position that has been sent.
        """
        sent = self._connection.scalar(
            select(func.max(Attempt.position)).where(Attempt.night_id == self._night_id, Attempt.state != WITHDRAWN)
        )
        if sent is not None and from_position <= sent:
            raise LogbookConflict(f"positions up to {sent} have been sent; a revision cannot begin at {from_position}")
        last = self._connection.scalar(select(func.max(Revision.number)).where(Revision.night_id == self._night_id))
        number = (last or 0) + 1
        store_revision(
            self._connection,
            self._night_id,
            tail,
            number=number,
            from_position=from_position,
            why=why,
            now_us=self._now_us,
        )
        self.audit("order_revised", {"revision": number, "why": why, "from_position": from_position})
        return number

    def quarantine(self, *, key: str | None, why: str, answer: str) -> None:
        """Keep an answer that broke the link's rules."""
        self._connection.execute(
            insert(Quarantine),
            {"at_us": self._now_us, "night_id": self._night_id, "key": key, "why": why, "answer": answer},
        )

    def audit(self, what: str, detail: Mapping[str, Any]) -> None:
        """One line of the audit, under this driver's name."""
        add_audit(
            self._connection,
            at_us=self._now_us,
            who=self._driving.owner,
            what=what,
            night_id=self._night_id,
            detail=dict(detail),
        )


class Driving:
    """The right to drive one rig, until somebody with a higher epoch takes it."""

    def __init__(self, book: Logbook, rig_id: int, owner: str, epoch: int, lease_us: int) -> None:
        self._book = book
        self._rig_id = rig_id
        self._lease_us = lease_us
        self.owner = owner
        self.epoch = epoch

    @contextmanager
    def step(self, night_id: int, *, now_us: int) -> Iterator[Step]:
        """One transaction; it renews the lease first (LogbookConflict if this driver has been taken over)."""
        with self._book.writing() as connection:
            self._renew(connection, until_us=now_us + self._lease_us)
            yield Step(connection, self, night_id, now_us)

    def release(self) -> None:
        """End the lease; the epoch stays used."""
        with self._book.writing() as connection:
            self._renew(connection, until_us=0)

    def _renew(self, connection: Connection, *, until_us: int) -> None:
        held = connection.execute(
            update(Lease)
            .where(Lease.rig_id == self._rig_id, Lease.epoch == self.epoch, Lease.owner == self.owner)
            .values(until_us=until_us)
        ).rowcount
        if held != 1:
            raise LogbookConflict("another program has taken this rig over; this one stops and changes nothing more")

    def open_attempts(self, night_id: int) -> list[OpenAttempt]:
        """The attempts of a night that have no end yet, in running order."""
        with self._book.reading() as connection:
            rows = connection.execute(
                select(
                    Attempt.id,
                    Attempt.key,
                    Attempt.position,
                    Attempt.try_number,
                    Attempt.revision,
                    Attempt.state,
                    Attempt.boot,
                    Attempt.settle_s,
                    Attempt.intended_us,
                )
                .where(Attempt.night_id == night_id, OPEN_ATTEMPTS)
                .order_by(Attempt.position, Attempt.try_number)
            ).all()
            return [OpenAttempt(**row._mapping) for row in rows]

    def states(self, keys: Sequence[str]) -> dict[str, str]:
        """The states of those of `keys` that this logbook knows."""
        found: dict[str, str] = {}
        with self._book.reading() as connection:
            for start in range(0, len(keys), IN_ONE_QUESTION):
                part = keys[start : start + IN_ONE_QUESTION]
                rows = connection.execute(select(Attempt.key, Attempt.state).where(Attempt.key.in_(part)))
                found.update({row[0]: row[1] for row in rows})
        return found

    def ends(self, night_id: int) -> list[tuple[int, str]]:
        """Position and end of every attempt of the night that has ended, in running order."""
        with self._book.reading() as connection:
            rows = connection.execute(
                select(Attempt.position, Attempt.state)
                .where(Attempt.night_id == night_id, Attempt.state.in_(ENDS))
                .order_by(Attempt.position, Attempt.try_number)
            )
            return [(position, state) for position, state in rows]

    def first_start_us(self, night_id: int, position: int) -> int | None:
        """When the first shot from `position` on started, on the rig's clock; None where none has."""
        with self._book.reading() as connection:
            return connection.scalar(
                select(func.min(Result.started_us))
                .join(Attempt, Attempt.id == Result.attempt_id)
                .where(Attempt.night_id == night_id, Attempt.position >= position)
            )

    def last_ordinal(self, night_id: int) -> int:
        """The highest ordinal on record for the night's latest attempts; 0 where there is none."""
        latest = (
            select(Attempt.ordinal)
            .where(Attempt.night_id == night_id, Attempt.state.in_(ENDS))
            .order_by(Attempt.position.desc())
            .limit(LATEST)
            .subquery()
        )
        with self._book.reading() as connection:
            return connection.scalar(select(func.coalesce(func.max(latest.c.ordinal), 0))) or 0

    def document(self, name: str) -> bytes:
        """A document by its hash."""
        from planner.logbook.documents import get_document

        with self._book.reading() as connection:
            return get_document(connection, name)


def take_over(book: Logbook, rig_id: int, *, owner: str, now_us: int, lease_us: int) -> Driving:
    """The lease of a rig under a new, higher epoch.

    An epoch is at least the number of seconds since 1970: a new logbook for a rig that has been driven from another one
    is then not fenced out by the rig's memory of it.

    Raises:
        LogbookConflict: another program's lease still runs (where several may write).
    """
    with book.writing() as connection:
        row = connection.execute(
            select(Lease.epoch, Lease.owner, Lease.until_us).where(Lease.rig_id == rig_id).with_for_update()
        ).one_or_none()
        epoch = max(now_us // 1_000_000, 1 if row is None else row.epoch + 1)
        values = {"epoch": epoch, "owner": owner, "until_us": now_us + lease_us}
        if row is None:
            connection.execute(insert(Lease), {"rig_id": rig_id, **values})
        else:
            if not book.backend.sole_writer and row.until_us > now_us:
                rig = connection.scalar(select(Rig.name).where(Rig.id == rig_id))
                raise LogbookConflict(
                    f"the rig {rig} is driven by {row.owner} for another {(row.until_us - now_us) / 1e6:.0f} s"
                )
            connection.execute(update(Lease).where(Lease.rig_id == rig_id, Lease.epoch == row.epoch).values(**values))
        add_audit(connection, at_us=now_us, who=owner, what="rig_taken_over", night_id=None, detail={"epoch": epoch})
    return Driving(book, rig_id, owner, epoch, lease_us)
