"""The tables. Many shots are column blobs (documents); the only thing with a row of its own is an attempt.

A change here needs a migration under `db/versions` (a test compares the two).
"""

from typing import Any, ClassVar

from sqlalchemy import CheckConstraint, ForeignKey, Index, MetaData, UniqueConstraint, text
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column

from planner.logbook.states import ATTEMPT_STATES, ENDS, NIGHT_OPEN, NIGHT_STATES, OPEN
from planner.logbook.types import Bytes, JsonText, Real, Whole, Words

NAMES = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "ck": "ck_%(table_name)s_%(constraint_name)s",
    "fk": "fk_%(table_name)s_%(column_0_N_name)s",
    "pk": "pk_%(table_name)s",
}
STRICT: dict[str, Any] = {"sqlite_strict": True}


def listed(words: tuple[str, ...]) -> str:
    """An SQL list of words that this program chose itself."""
    return ", ".join(f"'{word}'" for word in words)


def is_json(column: str) -> CheckConstraint:
    """SQLite checks that a text is JSON; on PostgreSQL the program's own writing is the guard."""
    return CheckConstraint(f"json_valid({column})", name=f"{column}_json").ddl_if(dialect="sqlite")


# The same words in an index and in a question: SQLite uses a partial index only where it can see that it fits.
OPEN_NIGHTS = text(f"state IN ({listed(NIGHT_OPEN)})")
OPEN_ATTEMPTS = text(f"state IN ({listed(OPEN)})")


class Base(DeclarativeBase):
    """Root of the tables."""

    metadata = MetaData(naming_convention=NAMES)
    type_annotation_map: ClassVar[dict[Any, Any]] = {int: Whole, float: Real, str: Words, bytes: Bytes}


class Document(Base):
    """Bytes named by the SHA-256 of their content: sequence and rig texts, shot tables, orders, timelines."""

    __tablename__ = "documents"
    sha256: Mapped[str] = mapped_column(primary_key=True)
    kind: Mapped[str]
    coding: Mapped[str]  # how `body` is kept; the hash is of the content, not of this
    size: Mapped[int]  # bytes of the content
    body: Mapped[bytes]
    __table_args__ = (
        CheckConstraint("length(sha256) = 64", name="sha256_length"),
        CheckConstraint("kind IN ('sequence', 'rig', 'table', 'order', 'timeline', 'record')", name="kind"),
        CheckConstraint("coding IN ('plain', 'zlib')", name="coding"),
        CheckConstraint("size >= 0", name="size"),
        STRICT,
    )


class Rig(Base):
    """An apparatus."""

    __tablename__ = "rigs"
    id: Mapped[int] = mapped_column(primary_key=True)
    name: Mapped[str] = mapped_column(unique=True)
    __table_args__ = (STRICT,)


class Lease(Base):
    """Who drives a rig. `epoch` rises with every take-over and fences the one before, here and at the rig."""

    __tablename__ = "leases"
    rig_id: Mapped[int] = mapped_column(ForeignKey("rigs.id"), primary_key=True)
    epoch: Mapped[int]
    owner: Mapped[str]
    until_us: Mapped[int]
    __table_args__ = (CheckConstraint("epoch >= 1", name="epoch"), STRICT)


class Night(Base):
    """One window of rig time. Times in microseconds since 1970 UTC, on the rig's clock."""

    __tablename__ = "nights"
    id: Mapped[int] = mapped_column(primary_key=True)
    name: Mapped[str] = mapped_column(unique=True)
    rig_id: Mapped[int] = mapped_column(ForeignKey("rigs.id"))
    state: Mapped[str]
    source: Mapped[str]  # through the link, or recorded by hand
    clock: Mapped[str]
    rig_file: Mapped[str | None] = mapped_column(ForeignKey("documents.sha256"))  # none for a night recorded by hand
    link: Mapped[str]  # address of the rig link; empty for a night recorded by hand
    length_s: Mapped[float]  # of the window
    begins_us: Mapped[int | None]  # zero of the night's time axis; set when the first shot is sent
    next_position: Mapped[int]  # the first position of the order not yet sent
    unattended: Mapped[str | None]  # reference of the approval, where no one will be there
    booked_us: Mapped[int]
    why: Mapped[str | None]  # why it is in this state
    __table_args__ = (
        CheckConstraint(f"state IN ({listed(NIGHT_STATES)})", name="state"),
        CheckConstraint("source IN ('link', 'hand')", name="source"),
        CheckConstraint("clock IN ('real', 'simulated', 'unknown')", name="clock"),
        CheckConstraint("next_position >= 0", name="next_position"),
        Index(
            "ix_nights_open",
            "rig_id",
            sqlite_where=OPEN_NIGHTS,
            postgresql_where=OPEN_NIGHTS,
        ),
        STRICT,
    )


class Anchor(Base):
    """UTC against uptime, once per boot of the rig: within a boot the time axis is uptime alone."""

    __tablename__ = "anchors"
    night_id: Mapped[int] = mapped_column(ForeignKey("nights.id"), primary_key=True)
    boot: Mapped[str] = mapped_column(primary_key=True)
    utc_us: Mapped[int]
    uptime_s: Mapped[float]
    __table_args__ = (STRICT,)


class Request(Base):
    """One sequence asking for time in a night."""

    __tablename__ = "requests"
    id: Mapped[int] = mapped_column(primary_key=True)
    night_id: Mapped[int] = mapped_column(ForeignKey("nights.id"))
    number: Mapped[int]  # within the night, from 0
    title: Mapped[str]
    sequence: Mapped[str] = mapped_column(ForeignKey("documents.sha256"))
    shot_table: Mapped[str] = mapped_column(ForeignKey("documents.sha256"))
    goal: Mapped[str]
    seed: Mapped[int]
    share: Mapped[float]
    priority: Mapped[int]
    state: Mapped[str]
    details: Mapped[dict[str, Any]] = mapped_column(JsonText)  # units, switch states, roles: what sending a shot needs
    __table_args__ = (
        UniqueConstraint("night_id", "number"),
        CheckConstraint("share > 0 AND share <= 1", name="share"),
        CheckConstraint("state IN ('open', 'done', 'ended')", name="state"),
        is_json("details"),
        STRICT,
    )


class Revision(Base):
    """One revision of a night's order; never changed. It holds the positions from `from_position` on."""

    __tablename__ = "revisions"
    night_id: Mapped[int] = mapped_column(ForeignKey("nights.id"), primary_key=True)
    number: Mapped[int] = mapped_column(primary_key=True)
    why: Mapped[str]
    seed: Mapped[int]
    versions: Mapped[dict[str, str]] = mapped_column(JsonText)
    shot_order: Mapped[str] = mapped_column(ForeignKey("documents.sha256"))
    from_position: Mapped[int]
    positions: Mapped[int]  # length of the whole order with this revision
    made_us: Mapped[int]
    __table_args__ = (
        CheckConstraint("number >= 1", name="number"),
        CheckConstraint("from_position >= 0 AND positions >= from_position", name="positions"),
        is_json("versions"),
        STRICT,
    )


class Attempt(Base):
    """One sending of one shot. The key is random and committed before sending."""

    __tablename__ = "attempts"
    id: Mapped[int] = mapped_column(primary_key=True)
    key: Mapped[str] = mapped_column(unique=True)
    night_id: Mapped[int] = mapped_column(ForeignKey("nights.id"))
    request_id: Mapped[int] = mapped_column(ForeignKey("requests.id"))
    revision: Mapped[int]
    position: Mapped[int]
    try_number: Mapped[int]  # 1 for the first sending of this position
    state: Mapped[str]
    epoch: Mapped[int]
    digest: Mapped[str]
    boot: Mapped[str | None]  # of the rig, when it was sent
    ordinal: Mapped[int | None]  # the rig's own count
    settle_s: Mapped[float]  # as sent: longer than the order's where the rig's switches may stand anywhere
    intended_us: Mapped[int]  # this computer's clock
    start_by_us: Mapped[int | None]  # the rig's clock
    ended_us: Mapped[int | None]  # this computer's clock
    why: Mapped[str | None]
    __table_args__ = (
        UniqueConstraint("night_id", "position", "try_number"),
        CheckConstraint(f"state IN ({listed(ATTEMPT_STATES)})", name="state"),
        CheckConstraint(f"(state IN ({listed(ENDS)})) = (ended_us IS NOT NULL)", name="ended"),
        CheckConstraint("position >= 0 AND try_number >= 1 AND revision >= 1 AND settle_s >= 0", name="numbers"),
        Index(
            "ix_attempts_open",
            "night_id",
            "position",
            "try_number",  # with its order in the index, SQLite prefers it to the unique one of the whole table
            sqlite_where=OPEN_ATTEMPTS,
            postgresql_where=OPEN_ATTEMPTS,
        ),
        STRICT,
    )


class Result(Base):
    """What the rig said about an attempt that ran. NULL means not measured."""

    __tablename__ = "results"
    attempt_id: Mapped[int] = mapped_column(ForeignKey("attempts.id"), primary_key=True)
    atoms_a: Mapped[float | None]
    atoms_b: Mapped[float | None]
    background: Mapped[float | None]
    saturated: Mapped[float | None]
    started_us: Mapped[int | None]
    finished_us: Mapped[int | None]
    started_uptime_s: Mapped[float | None]
    finished_uptime_s: Mapped[float | None]
    applied: Mapped[dict[str, Any]] = mapped_column(JsonText)
    readings: Mapped[dict[str, Any]] = mapped_column(JsonText)
    flags: Mapped[list[str]] = mapped_column(JsonText)
    data_reference: Mapped[str | None]
    answer_sha256: Mapped[str]
    __table_args__ = (is_json("applied"), is_json("readings"), is_json("flags"), STRICT)


class Audit(Base):
    """What was decided, when and by whom."""

    __tablename__ = "audit"
    id: Mapped[int] = mapped_column(primary_key=True)
    at_us: Mapped[int]
    who: Mapped[str]
    what: Mapped[str]  # past tense: "night_booked"
    night_id: Mapped[int | None] = mapped_column(ForeignKey("nights.id"))
    detail: Mapped[dict[str, Any]] = mapped_column(JsonText)
    __table_args__ = (Index("ix_audit_night_id", "night_id"), is_json("detail"), STRICT)


class Quarantine(Base):
    """Answers that broke the link's rules, kept as they came."""

    __tablename__ = "quarantine"
    id: Mapped[int] = mapped_column(primary_key=True)
    at_us: Mapped[int]
    night_id: Mapped[int] = mapped_column(ForeignKey("nights.id"))
    key: Mapped[str | None]
    why: Mapped[str]
    answer: Mapped[str]
    __table_args__ = (Index("ix_quarantine_night_id", "night_id"), STRICT)
