"""The states of an attempt and of a night, and every change that is allowed.

An attempt is one sending of one shot. Its key is committed as `intended` before anything is sent, so `intended` means
"may or may not have reached the rig". The rig alone can say; until it has, nothing is assumed.
"""

from types import MappingProxyType

INTENDED = "intended"  # the key is committed; the rig may or may not have it
SENT = "sent"  # sent, and no clear answer came
ACCEPTED = "accepted"  # the rig holds it
RUNNING = "running"
DONE = "done"
FAILED = "failed"  # the rig says that it went wrong
WITHDRAWN = "withdrawn"  # taken back before it started; certain not to have run
LOST = "lost"  # the rig forgot; may have run; never sent again under that key

ENDS = (DONE, FAILED, WITHDRAWN, LOST)
OPEN = (INTENDED, SENT, ACCEPTED, RUNNING)
ATTEMPT_STATES = (*OPEN, *ENDS)

# state -> states that may follow. An end has no successor: one terminal record per attempt.
CHANGES = MappingProxyType(
    {
        INTENDED: frozenset({SENT, ACCEPTED, RUNNING, DONE, FAILED, WITHDRAWN, LOST}),
        SENT: frozenset({ACCEPTED, RUNNING, DONE, FAILED, WITHDRAWN, LOST}),
        ACCEPTED: frozenset({RUNNING, DONE, FAILED, WITHDRAWN, LOST}),
        RUNNING: frozenset({DONE, FAILED, LOST}),  # what has started cannot be withdrawn
        DONE: frozenset(),
        FAILED: frozenset(),
        WITHDRAWN: frozenset(),
        LOST: frozenset(),
    }
)


def may_become(state: str) -> tuple[str, ...]:
    """The states from which `state` may be reached, in the order of the table."""
    return tuple(before for before, after in CHANGES.items() if state in after)


NIGHT_BOOKED = "booked"
NIGHT_RUNNING = "running"
NIGHT_STOPPED = "stopped"  # by a person or a reason on record; goes on where it stopped
NIGHT_DONE = "done"  # every shot that could be run has been
NIGHT_OVER = "over"  # its window ended, or someone ended it; does not go on
NIGHT_STATES = (NIGHT_BOOKED, NIGHT_RUNNING, NIGHT_STOPPED, NIGHT_DONE, NIGHT_OVER)
NIGHT_OPEN = (NIGHT_BOOKED, NIGHT_RUNNING, NIGHT_STOPPED)
