"""The table of an attempt's states, and that the database keeps to it."""

from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from planner.errors import LogbookConflict
from planner.logbook import open_logbook, states
from planner.logbook.driving import NewAttempt
from tests.night.nights import NOW_US, small_night


def test_ends_have_no_successor_and_everything_can_end() -> None:
    """Every state is in the table; an end is final; each open state can end without help."""
    assert set(states.CHANGES) == set(states.ATTEMPT_STATES)
    for state in states.ENDS:
        assert states.CHANGES[state] == frozenset()
    for state in states.OPEN:
        assert {states.DONE, states.FAILED, states.LOST} <= states.CHANGES[state]
        assert states.CHANGES[state] <= set(states.ATTEMPT_STATES)


def test_what_has_started_cannot_be_withdrawn() -> None:
    """Withdrawn means certain not to have run."""
    assert states.WITHDRAWN not in states.CHANGES[states.RUNNING]
    assert states.RUNNING not in states.may_become(states.WITHDRAWN)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(path=st.lists(st.sampled_from(states.ATTEMPT_STATES), max_size=6))
def test_the_database_allows_what_the_table_allows(path: list[str], tmp_path_factory: Any) -> None:
    """A random walk through states succeeds step by step exactly where the table has the step."""
    folder: Path = tmp_path_factory.mktemp("walk")
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        night = book.book_night(small_night(), now_us=NOW_US, who="test")
        driving = book.drive(night.rig_id, owner="one", now_us=NOW_US, lease_us=1)
        new = NewAttempt(
            key="k",
            request_id=book.requests(night.id)[0].id,
            revision=1,
            position=0,
            digest="d",
            boot="b",
            settle_s=0.0,
            start_by_us=None,
        )
        with driving.step(night.id, now_us=NOW_US) as step:
            attempt = step.intend(new)
        now = states.INTENDED
        for wanted in path:
            try:
                with driving.step(night.id, now_us=NOW_US) as step:
                    if wanted in states.ENDS:
                        step.end(attempt.id, wanted)
                    else:
                        step.change(attempt.id, wanted)
                allowed = True
            except LogbookConflict:
                allowed = False
            assert allowed == (wanted in states.CHANGES[now])
            now = wanted if allowed else now
            assert book.counts(night.id) == {now: 1}
