"""Staying in touch with a rig: waiting with a reason, keeping bad answers aside, letting simulated time pass."""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from typing import TypeVar

from planner.errors import LinkError, RigMalformed, RigNotNow, RigUnknown, RigUnreachable
from planner.link.client import RigClient
from planner.link.messages import Now

FIRST_WAIT_S = 0.1
LONGEST_WAIT_S = 5.0
SLICE_S = 0.25  # how soon a wait notices that someone asked to stop

Answer = TypeVar("Answer")


class StopAsked(Exception):
    """Raised out of a wait when someone asked to stop."""


@dataclass(frozen=True, kw_only=True)
class Hands:
    """What the dispatcher takes from outside: time, patience, keys, and whom it tells."""

    utc_us: Callable[[], int]  # this computer's clock, microseconds since 1970
    monotonic_s: Callable[[], float]
    sleep: Callable[[float], None]
    new_key: Callable[[], str]
    stopping: Callable[[], bool]
    say: Callable[[str], None]  # what is going on, in words, whenever that changes


class Contact:
    """Calls to one rig, and the time between them."""

    def __init__(self, client: RigClient, hands: Hands, keep: Callable[[RigMalformed, str | None], None]) -> None:
        self.client = client
        self._hands = hands
        self._keep = keep
        self._kept = ""
        self._said = ""
        self.simulated = False

    def say(self, words: str) -> None:
        """Tell what is going on, once."""
        if words != self._said:
            self._said = words
            self._hands.say(words)

    def patiently(self, call: Callable[[], Answer], *, key: str | None = None) -> Answer:
        """The call's answer, asked for again until it comes; only for calls that may be repeated.

        Raises:
            StopAsked: someone asked to stop while there was no answer.
            RigRefused, RigFenced: asking again would not help.
        """
        wait_s = FIRST_WAIT_S
        while True:
            try:
                return call()
            except RigNotNow as busy:
                self.say(f"waiting: {busy}")
                self._heed_stop()
                self.pass_time(busy.retry_after_s)
            except (RigUnreachable, RigUnknown) as error:
                self._bide(error, wait_s)
            except RigMalformed as error:
                self.put_aside(error, key)
                self._bide(error, wait_s)
            wait_s = min(2 * wait_s, LONGEST_WAIT_S)

    def put_aside(self, error: RigMalformed, key: str | None) -> None:
        """Keep a bad answer; the same one again and again is kept once."""
        if error.answer != self._kept:
            self._kept = error.answer
            self._keep(error, key)

    def pass_time(self, seconds: float) -> None:
        """Let `seconds` of the rig's time pass, or fewer where something happens there."""
        if self.simulated:
            now: Now = self.patiently(self.client.now)
            self.patiently(lambda: self.client.move_clock(now.now + timedelta(seconds=max(seconds, 0.001))))
        else:
            self.rest(seconds)

    def rest(self, seconds: float) -> None:
        """Let `seconds` of real time pass, or fewer when someone asks to stop."""
        until = self._hands.monotonic_s() + seconds
        while (left := until - self._hands.monotonic_s()) > 0 and not self._hands.stopping():
            self._hands.sleep(min(left, SLICE_S))

    def _bide(self, error: LinkError, seconds: float) -> None:
        self.say(f"waiting: {error}")
        self._heed_stop()
        self.rest(seconds)

    def _heed_stop(self) -> None:
        if self._hands.stopping():
            raise StopAsked
