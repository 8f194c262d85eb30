"""What a host remembers of one accepted attempt, and how it tells it."""

from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Any, Literal

from pydantic import ValidationError

from planner.link.adapter import Result, ShotFailed
from planner.link.clocks import Instant
from planner.link.messages import Atoms, Detection, Intent, ShotReport
from planner.link.wire import explain, shorten

LONGEST_WHY = 1000  # characters of a reason

Outcome = Result | ShotFailed


@dataclass(kw_only=True)
class Record:
    """One accepted attempt. `outcome` is known from the start on a simulated clock, and told at the end."""

    key: str
    intent: Intent
    ordinal: int
    state: Literal["waiting", "running", "done", "failed", "withdrawn"] = "waiting"
    started: Instant | None = None
    finished: Instant | None = None
    outcome: Outcome | None = None
    why: str | None = None

    def planned_end(self) -> datetime | None:
        """When a started shot will have lasted as long as it said."""
        return None if self.started is None else self.started.utc + timedelta(seconds=self.intent.duration_s)

    def is_late(self, now: datetime) -> bool:
        """Whether its latest start has passed."""
        return self.intent.start_by is not None and now > self.intent.start_by

    def end(self, state: Literal["done", "failed", "withdrawn"], at: Instant, why: str | None = None) -> None:
        """The one terminal record."""
        self.state, self.finished = state, at
        self.why = None if why is None else shorten(why, LONGEST_WHY)

    def end_as_played(self, at: Instant) -> None:
        """The terminal record of a shot that ran: done with its result, or failed.

        A result that breaks the link's rules (not-a-number, a wrong type) fails the shot: it is not repaired.
        """
        if not isinstance(self.outcome, Result):
            self.end("failed", at, str(self.outcome) if self.outcome is not None else "the rig gave no result")
            return
        self.end("done", at)
        try:
            self.report()
        except ValidationError as error:
            self.end("failed", at, f"the rig's result breaks the rules of the link: {explain(error)}")

    def report(self) -> ShotReport:
        """The record as told to whoever asks."""
        measured = measured_fields(self.outcome) if self.state == "done" and isinstance(self.outcome, Result) else {}
        return ShotReport(
            key=self.key,
            state=self.state,
            ordinal=self.ordinal,
            started=None if self.started is None else self.started.utc,
            started_uptime_s=None if self.started is None else self.started.uptime_s,
            finished=None if self.finished is None else self.finished.utc,
            finished_uptime_s=None if self.finished is None else self.finished.uptime_s,
            why=self.why,
            **measured,
        )


def measured_fields(result: Result) -> dict[str, Any]:
    """The fields of a report that come from the rig's result; raises pydantic's ValidationError."""
    detection = Detection(background=result.background, saturated=result.saturated, data=result.data)
    return {
        "atoms": Atoms(a=result.atoms_a, b=result.atoms_b),
        "detection": None if detection == Detection() else detection,
        "applied": dict(result.applied),
        "readings": dict(result.readings),
        "flags": list(result.flags),
    }
