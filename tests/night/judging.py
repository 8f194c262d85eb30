"""The judge of a night: the logbook against the rig's own journal. Nothing that either side believes counts alone."""

from collections import Counter
from pathlib import Path

from planner.link.journal import read_journal
from planner.logbook import Logbook, states
from planner.night.replacements import MOST_TRIES


def check_night(book: Logbook, night_id: int, journal: Path, *, shots: int) -> Counter[str]:
    """Check a finished night of `shots` measuring shots; returns its attempts by state.

    At most one start per key; nothing started that was not on disk before; one terminal record per attempt, and the
    right one; no acknowledged result missing; every shot measured once, or tried as often as is allowed.
    """
    starts: Counter[str] = Counter()
    ends: dict[str, str] = {}
    for facts in read_journal(journal):
        if facts["event"] == "start":
            starts[facts["key"]] += 1
        if facts["event"] == "end":
            assert facts["key"] not in ends
            ends[facts["key"]] = facts["report"]["state"]
    assert set(starts.values()) <= {1}
    with book.reading() as connection:
        assert connection.exec_driver_sql("PRAGMA integrity_check").scalar() == "ok"
        rows = connection.exec_driver_sql("SELECT id, key, state FROM attempts WHERE night_id = ?", (night_id,)).all()
        results = set(connection.exec_driver_sql("SELECT attempt_id FROM results").scalars())
    found = {row.key: row.state for row in rows}
    assert set(starts) <= set(found)
    assert set(found.values()) <= set(states.ENDS)
    for key, state in found.items():
        if state == states.DONE:
            assert ends.get(key) == "done"
        if state == states.WITHDRAWN:
            assert key not in starts
        if key in starts and state not in (states.DONE, states.FAILED):
            assert state == states.LOST
    assert {row.id for row in rows if row.state == states.DONE} == results
    columns = book.night_columns(night_id)
    done = columns["state"] == "done"
    missing = set(range(shots)) - set(columns["shot"][done])
    tried = Counter(columns["shot"][(columns["state"] == "lost") | (columns["state"] == "failed")])
    assert all(tried[shot] >= MOST_TRIES for shot in missing)
    assert len(set(columns["shot"][done])) == int(done.sum())
    return Counter(found.values())
