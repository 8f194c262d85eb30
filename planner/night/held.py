"""What the dispatcher holds in its hands, and what it tells whoever watches."""

from dataclasses import dataclass

from planner.link.messages import Intent
from planner.logbook.driving import OpenAttempt


@dataclass(frozen=True, kw_only=True)
class Progress:
    """How far a night is. `fraction` is that of the last shot that gave one."""

    sent: int
    total: int
    left_s: float
    rig_time_us: int
    fraction: float | None
    ended: str  # the state in which the last shot ended


@dataclass(kw_only=True)
class Held:
    """An attempt that the rig holds, or is to get (`intent` not None and not `confirmed`)."""

    attempt: OpenAttempt
    intent: Intent | None
    length_s: float
    confirmed: bool
    noted: bool  # the confirmation is in the logbook
