"""What became of an attempt that has no end on record: the rig is asked, and nothing is guessed.

Unknown there, in the boot it was sent in, and never confirmed: it never arrived. It is withdrawn, which leaves word at
the rig in case it still comes. Unknown in any other way: lost, may have run.
"""

from collections.abc import Set
from dataclasses import dataclass

from planner.errors import RigRefused
from planner.link.messages import ShotReport
from planner.logbook import states
from planner.logbook.driving import OpenAttempt
from planner.night.contact import Contact

CONFIRMED = (states.ACCEPTED, states.RUNNING)


@dataclass(frozen=True, kw_only=True)
class Fate:
    """The end of an attempt; `report` where the rig gave one."""

    state: str
    why: str | None
    report: ShotReport | None = None


def fate_of(
    attempt: OpenAttempt,
    report: ShotReport,
    contact: Contact,
    *,
    seen_running: Set[str],
    confirmed: bool,
    too_old: bool,
) -> Fate | None:
    """How the attempt ended; None when the rig still holds it.

    Args:
        report: what the rig says of it now.
        seen_running: keys that the rig said it was playing.
        confirmed: the rig said once that it has this attempt.
        too_old: it was sent longer ago than the rig promises to remember.
    """
    if report.state in (states.DONE, states.FAILED):
        return Fate(state=report.state, why=report.why, report=report)
    if report.state == states.WITHDRAWN:
        if attempt.key in seen_running:
            return Fate(state=states.LOST, why="the rig said that it ran, then that it was withdrawn; may have run")
        return Fate(state=states.WITHDRAWN, why=report.why or "withdrawn at the rig")
    if report.state != "unknown":
        return None
    boot = contact.patiently(contact.client.now).boot  # read after the answer: a boot never comes back
    if not withdraw(contact, attempt.key):
        again = contact.patiently(lambda: contact.client.ask(attempt.key), key=attempt.key)
        if again.state != "unknown":
            return fate_of(attempt, again, contact, seen_running=seen_running, confirmed=confirmed, too_old=too_old)
        return Fate(state=states.LOST, why="the rig had it and no longer keeps its result")
    if boot != attempt.boot:
        return Fate(state=states.LOST, why="the rig restarted and forgot it; may have run")
    if confirmed or attempt.key in seen_running or too_old:
        return Fate(state=states.LOST, why="the rig had it, or may have had it, and forgot it; may have run")
    return Fate(state=states.WITHDRAWN, why="never arrived at the rig")


def withdraw(contact: Contact, key: str) -> bool:
    """Withdraw a key; False where the rig says that it runs or has ended."""
    try:
        contact.patiently(lambda: contact.client.withdraw(key), key=key)
    except RigRefused as refused:
        if refused.status != 409:
            raise
        return False
    return True
