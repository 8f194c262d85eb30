"""The two clocks a hosted rig can have: real, and simulated (time passes only when it is asked to).

Both give UTC and an uptime that never runs back, read at one instant. UTC of a real clock may step when the computer
is set; who places shots on a drift axis anchors UTC to uptime once per boot.
"""

import secrets
import time
from abc import ABC, abstractmethod
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Literal


@dataclass(frozen=True, kw_only=True)
class Instant:
    """One moment on both axes: `utc`, and `uptime_s` in seconds since the boot."""

    utc: datetime
    uptime_s: float


class Clock(ABC):
    """A rig's time. `boot` is an id that is new whenever the rig may have forgotten what it was told."""

    kind: Literal["real", "simulated"]

    def __init__(self, boot: str | None = None) -> None:
        self.boot = secrets.token_hex(8) if boot is None else boot

    @abstractmethod
    def instant(self) -> Instant:
        """The present moment."""


class RealClock(Clock):
    """The computer's time. The two sources are arguments, so that a test can step them."""

    kind = "real"

    def __init__(
        self,
        boot: str | None = None,
        *,
        utc: Callable[[], datetime] = lambda: datetime.now(UTC),
        monotonic_s: Callable[[], float] = time.monotonic,
    ) -> None:
        super().__init__(boot)
        self._utc = utc
        self._monotonic_s = monotonic_s
        self._zero_s = monotonic_s()

    def instant(self) -> Instant:
        return Instant(utc=self._utc(), uptime_s=self._monotonic_s() - self._zero_s)


class SimulatedClock(Clock):
    """A time that stands still until `move_to`. Resolution one microsecond, as in the link's messages."""

    kind = "simulated"

    def __init__(self, start: datetime, boot: str | None = None) -> None:
        super().__init__(boot)
        self._start = start.astimezone(UTC)
        self._now = self._start

    def instant(self) -> Instant:
        return Instant(utc=self._now, uptime_s=(self._now - self._start) / timedelta(seconds=1))

    def move_to(self, then: datetime) -> None:
        """Let time pass until `then`; raises ValueError when that lies in the past."""
        if then < self._now:
            raise ValueError(f"a clock cannot run back from {self._now} to {then}")
        self._now = then
