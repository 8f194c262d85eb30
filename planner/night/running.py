"""Running a night for real: this computer's clock, keys from its randomness, and one night at a time on a rig."""

import os
import secrets
import socket
import time
from collections.abc import Callable

from planner.errors import LogbookConflict
from planner.link.client import RigClient
from planner.link.messages import new_key
from planner.logbook.book import Logbook, NightRow
from planner.logbook.states import NIGHT_OPEN
from planner.night.contact import Hands
from planner.night.dispatcher import Dispatcher
from planner.night.held import Progress


def now_us() -> int:
    """This computer's UTC in microseconds since 1970."""
    return time.time_ns() // 1000


def owner_name() -> str:
    """Names this program among all that may drive a rig."""
    return f"{socket.gethostname()[:60]}:{os.getpid()}:{secrets.token_hex(4)}"


def real_hands(*, stopping: Callable[[], bool], say: Callable[[str], None]) -> Hands:
    """The real clock, real waits, random keys."""
    return Hands(
        utc_us=now_us, monotonic_s=time.monotonic, sleep=time.sleep, new_key=new_key, stopping=stopping, say=say
    )


def run_night(
    book: Logbook,
    night: NightRow,
    client: RigClient,
    *,
    stopping: Callable[[], bool] = lambda: False,
    say: Callable[[str], None] = lambda _: None,
    progress: Callable[[Progress], None] = lambda _: None,
    replans: bool = True,
) -> str:
    """Run a night from where it stands; returns the state it ends in ("done", "over" or "stopped").

    replans: a night that slips, by an outage or otherwise, has its rest ordered anew while it runs.

    Raises:
        LogbookConflict: it has ended, was recorded by hand, or another night of this rig is under way.
        Other errors as Dispatcher.run.
    """
    if night.state not in NIGHT_OPEN:
        raise LogbookConflict(f"the night {night.name} is {night.state}; book a new one with: nightfringe run FILE")
    if night.source != "link":
        raise LogbookConflict(f"the night {night.name} was recorded by hand; there is nothing to run")
    for other in book.nights():
        if other.rig_id == night.rig_id and other.id != night.id and other.begins_us and other.state in NIGHT_OPEN:
            raise LogbookConflict(
                f"the night {other.name} on the rig {other.rig} is {other.state}, with shots that may still be at the "
                f"rig: go on with it (nightfringe run --night {other.name}) or end it (the same with --end)"
            )
    hands = real_hands(stopping=stopping, say=say)
    return Dispatcher(book, night, client, hands, owner=owner_name(), progress=progress, replans=replans).run()


def end_night(book: Logbook, night: NightRow, client: RigClient, *, say: Callable[[str], None]) -> None:
    """End a night early: see the running shot through, take back what waits; it does not go on afterwards."""
    if night.begins_us is not None:
        run_night(book, night, client, stopping=lambda: True, say=say)
    book.end_night(night.id, now_us=now_us(), who=owner_name(), why="ended by hand")
