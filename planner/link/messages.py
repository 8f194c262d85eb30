"""The messages of the rig link, version 1: frozen values, checked at birth.

Numbers are finite; null means "not measured". Fields that this version does not know are passed over in what a rig
says, so that a newer rig still works; in an intent they are refused, because half an instruction must not be played.
A state that this version does not know is refused as well: guessing what it means could fire a shot twice.
"""

import hashlib
import re
import secrets
from collections.abc import Mapping
from datetime import UTC, datetime
from typing import Annotated, Any, Literal, Self

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    JsonValue,
    PlainSerializer,
    StringConstraints,
    model_validator,
)

from planner.link.wire import canonical

LONGEST_SHOT_S = 86400.0
KEY_PATTERN = r"^[A-Za-z0-9_-]{8,64}$"
KEY = re.compile(KEY_PATTERN)
_TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,9})?(Z|[+-]\d\d:\d\d)", re.ASCII)

State = Literal["waiting", "running", "done", "failed", "withdrawn", "unknown"]
ENDED: frozenset[str] = frozenset({"done", "failed", "withdrawn"})


def parse_time(text: str) -> datetime:
    """The UTC time in an RFC 3339 text such as `2026-12-01T20:00:00.000000Z`; raises ValueError."""
    if not _TIME.fullmatch(text):
        raise ValueError("expected a time such as 2026-12-01T20:00:00.000000Z")
    return datetime.fromisoformat(text).astimezone(UTC)


def format_time(time: datetime) -> str:
    """RFC 3339 in UTC with microseconds and a Z."""
    return time.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%f") + "Z"


def _utc(value: object) -> object:
    if isinstance(value, str):
        return parse_time(value)
    if isinstance(value, datetime):
        if value.tzinfo is None:
            raise ValueError("a time without a time zone says nothing")
        return value.astimezone(UTC)
    return value


UtcTime = Annotated[datetime, BeforeValidator(_utc), PlainSerializer(format_time, return_type=str)]
Name = Annotated[str, StringConstraints(min_length=1, max_length=128)]
Text = Annotated[str, StringConstraints(max_length=4096)]
Key = Annotated[str, StringConstraints(pattern=KEY_PATTERN)]


class Message(BaseModel):
    """Base of all messages: frozen, strict types, finite numbers, unknown fields passed over."""

    model_config = ConfigDict(frozen=True, strict=True, extra="ignore", allow_inf_nan=False)

    def document(self) -> dict[str, Any]:
        """The message as JSON-able values."""
        return self.model_dump(mode="json")


class SettingRange(Message):
    """A setting of the rig: its unit, and the inclusive limits in that unit (null where there is none)."""

    unit: Annotated[str, StringConstraints(max_length=32)]
    low: float | None
    high: float | None

    @model_validator(mode="after")
    def _ordered(self) -> Self:
        if self.low is not None and self.high is not None and self.low > self.high:
            raise ValueError(f"low {self.low} lies above high {self.high}")
        return self


class Description(Message):
    """What the rig is: the answer of `GET /link`."""

    link: Literal[1]
    rig: Name
    boot: Name
    description: Name
    clock: Literal["real", "simulated"]
    settings: dict[Name, SettingRange]
    switches: dict[Name, tuple[Name, Name]]
    readings: dict[Name, Annotated[str, StringConstraints(max_length=32)]]
    slots: Annotated[int, Field(ge=1, le=1000)]
    retains_s: Annotated[float, Field(ge=0)]


class Now(Message):
    """The rig's time and readiness: the answer of `GET /link/now`."""

    now: UtcTime
    uptime_s: Annotated[float, Field(ge=0)]
    boot: Name
    ready: bool
    why: Text | None = None


class Intent(Message):
    """One attempt as sent: the body of `PUT /link/shots/{key}`. Settings are in the rig's units."""

    model_config = ConfigDict(extra="forbid")

    digest: Annotated[str, StringConstraints(min_length=8, max_length=128)]
    driver: Name
    epoch: Annotated[int, Field(ge=0)]
    description: Name
    settings: dict[Name, float]
    switches: dict[Name, Name]
    settle_s: Annotated[float, Field(ge=0, le=LONGEST_SHOT_S)]
    duration_s: Annotated[float, Field(gt=0, le=LONGEST_SHOT_S)]
    not_before: UtcTime | None = None
    start_by: UtcTime | None = None
    timeline: dict[str, JsonValue] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _possible(self) -> Self:
        if self.settle_s > self.duration_s:
            raise ValueError(f"settle_s {self.settle_s} is longer than duration_s {self.duration_s}, which counts it")
        if self.not_before is not None and self.start_by is not None and self.not_before > self.start_by:
            raise ValueError("not_before is later than start_by: the shot could never start")
        return self

    @classmethod
    def sealed(cls, **fields: Any) -> Self:
        """An intent with its digest filled in; takes every field except `digest`."""
        unsealed = cls(digest="0" * 64, **fields)
        return unsealed.model_copy(update={"digest": digest_of(unsealed.document())})


def digest_of(document: Mapping[str, Any]) -> str:
    """SHA-256 (hex) of what an intent asks for, as canonical JSON.

    `driver` and `epoch` say who asks, not what is to be played, and stay out: the same attempt sent again by the
    dispatcher that took over is the same attempt.
    """
    asked = {name: value for name, value in document.items() if name not in ("digest", "driver", "epoch")}
    return hashlib.sha256(canonical(asked)).hexdigest()


def new_key() -> str:
    """A random key for one attempt. From the system's randomness on purpose: a key that a seed could give again
    would be a second attempt under the first one's name."""
    return secrets.token_hex(16)


class Atoms(Message):
    """Atom numbers in the two output ports; null where not measured. May be below zero after background subtraction."""

    a: float | None
    b: float | None


class Detection(Message):
    """How the counting went: background (atoms), saturated fraction, and a reference to the raw data."""

    background: float | None = None
    saturated: float | None = None
    data: Text | None = None


class ShotReport(Message):
    """What the rig knows of one attempt: the answer of `GET /link/shots/{key}`."""

    key: Key
    state: State
    ordinal: Annotated[int, Field(ge=0)] | None = None
    started: UtcTime | None = None
    finished: UtcTime | None = None
    started_uptime_s: Annotated[float, Field(ge=0)] | None = None
    finished_uptime_s: Annotated[float, Field(ge=0)] | None = None
    atoms: Atoms | None = None
    detection: Detection | None = None
    applied: dict[Name, float | Name | None] = Field(default_factory=dict)
    readings: dict[Name, float | None] = Field(default_factory=dict)
    flags: list[Name] = Field(default_factory=list)
    why: Text | None = None

    @property
    def ended(self) -> bool:
        """Whether this is a terminal record."""
        return self.state in ENDED

    @model_validator(mode="after")
    def _whole(self) -> Self:
        """A state comes with the times that belong to it: a record without them cannot be placed in the night."""
        if (self.started is None) != (self.started_uptime_s is None):
            raise ValueError("started and started_uptime_s come together")
        if (self.finished is None) != (self.finished_uptime_s is None):
            raise ValueError("finished and finished_uptime_s come together")
        if self.state in ("waiting", "running", "done") and self.ordinal is None:
            raise ValueError(f"a shot that is {self.state} has an ordinal")
        if self.state in ("running", "done") and self.started is None:
            raise ValueError(f"a shot that is {self.state} has started")
        if self.state in ("waiting", "withdrawn", "unknown") and self.started is not None:
            raise ValueError(f"a shot that is {self.state} has not started")
        if self.state == "done" and self.finished is None:
            raise ValueError("a shot that is done has finished")
        if self.state in ("waiting", "running", "unknown") and self.finished is not None:
            raise ValueError(f"a shot that is {self.state} has not finished")
        if self.state not in ("done", "failed") and self.atoms is not None:
            raise ValueError(f"a shot that is {self.state} has no atoms")
        if (
            self.started_uptime_s is not None
            and self.finished_uptime_s is not None
            and self.finished_uptime_s < self.started_uptime_s
        ):
            raise ValueError("finished_uptime_s lies before started_uptime_s, and uptime never runs back")
        return self


class Known(Message):
    """All that the rig knows since an ordinal: the answer of `GET /link/shots?after=ordinal`."""

    boot: Name
    shots: list[ShotReport]

    @model_validator(mode="after")
    def _one_record_each(self) -> Self:
        if any(shot.ordinal is None for shot in self.shots):
            raise ValueError("a shot in the list has no ordinal")
        if len({shot.key for shot in self.shots}) != len(self.shots):
            raise ValueError("a key stands twice in the list")
        if len({shot.ordinal for shot in self.shots}) != len(self.shots):
            raise ValueError("an ordinal stands twice in the list")
        return self


class Acknowledgement(Message):
    """The body of `POST /link/ack`."""

    model_config = ConfigDict(extra="forbid")

    keys: Annotated[list[Key], Field(max_length=10_000)]


class ClockMove(Message):
    """The body of `POST /link/clock`."""

    model_config = ConfigDict(extra="forbid")

    until: UtcTime


class Refusal(Message):
    """The body of every answer that is no success."""

    why: Text
