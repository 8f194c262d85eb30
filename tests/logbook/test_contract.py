"""What a logbook promises, whatever database holds it."""

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from planner.errors import LogbookConflict
from planner.logbook import Logbook
from planner.logbook.driving import Driving, NewAttempt, OpenAttempt, Outcome
from planner.night.replacements import first_rows
from tests.night.nights import NOW_US, small_night, small_order

LEASE_US = 60_000_000


def driven(book: Logbook, owner: str = "one", at: int = NOW_US) -> tuple[int, Driving]:
    night = book.open_night() or book.book_night(small_night(), now_us=NOW_US, who="test")
    return night.id, book.drive(night.rig_id, owner=owner, now_us=at, lease_us=LEASE_US)


def attempt(book: Logbook, night: int, position: int = 0, **changes: Any) -> NewAttempt:
    fields: dict[str, Any] = {
        "key": f"key-{position}",
        "request_id": book.requests(night)[0].id,
        "revision": 1,
        "position": position,
        "digest": "d" * 64,
        "boot": "boot-1",
        "settle_s": 0.0,
        "start_by_us": None,
    }
    return NewAttempt(**(fields | changes))


def intend(book: Logbook, night: int, driving: Driving, position: int = 0, **changes: Any) -> OpenAttempt:
    with driving.step(night, now_us=NOW_US) as step:
        return step.intend(attempt(book, night, position, **changes))


def ran(position: int, *, started_s: float, lasted_s: float = 10.0, uptime_s: float | None = None) -> Outcome:
    up = started_s if uptime_s is None else uptime_s
    return Outcome(
        answer_sha256="a" * 64,
        atoms_a=6000.0 + position,
        atoms_b=4000.0,
        started_us=NOW_US + round(started_s * 1e6),
        finished_us=NOW_US + round((started_s + lasted_s) * 1e6),
        started_uptime_s=up,
        finished_uptime_s=up + lasted_s,
        readings={"vacuum": 2e-9, "note": None},
        flags=["unlocked", "late"],
    )


def test_a_booked_night_reads_back_as_it_was(book: Logbook) -> None:
    """Texts, seed, order, table, window and provenance survive storing."""
    new = small_night()
    row = book.book_night(new, now_us=NOW_US, who="test")
    assert (row.name, row.rig, row.state, row.positions, row.length_s) == (
        "small night",
        "bench rig",
        "booked",
        8,
        3600,
    )
    request = book.requests(row.id)[0]
    assert request.sequence_text == new.requests[0].sequence_text
    assert request.rig_text == new.rig_text
    assert request.seed == 3
    plan = book.night_plan(row.id)
    for name in ("request", "shot", "kind", "start_s", "settle_s", "duration_s", "packet", "unit", "flip"):
        np.testing.assert_array_equal(plan.order.columns[name], getattr(new.order, name))
    table = plan.requests[0].table
    np.testing.assert_array_equal(table.settings["readout"], new.requests[0].table.settings["readout"])
    np.testing.assert_array_equal(table.switches["collar"], new.requests[0].table.switches["collar"])
    assert set(book.revisions(row.id)[0].versions) == {"python", "numpy", "scipy", "nightfringe", "sqlite"}
    assert [line["what"] for line in book.audit(row.id)] == ["night_booked"]


def test_equal_plans_have_equal_hashes(book: Logbook) -> None:
    """The same inputs and seed give the same bytes: two nights share one order document."""
    first = book.book_night(small_night(name="one"), now_us=NOW_US, who="test")
    second = book.book_night(small_night(name="two"), now_us=NOW_US, who="test")
    assert book.revisions(first.id)[0].order_sha256 == book.revisions(second.id)[0].order_sha256


def test_a_name_is_taken_once(book: Logbook) -> None:
    """A second night of one name is refused, and nothing of it is stored."""
    book.book_night(small_night(), now_us=NOW_US, who="test")
    with pytest.raises(LogbookConflict, match="already"):
        book.book_night(small_night(), now_us=NOW_US, who="test")
    assert len(book.nights()) == 1


def test_a_night_that_is_not_there_is_named_with_those_that_are(book: Logbook) -> None:
    """Asking for an unknown night lists the known ones; an empty logbook says how to book."""
    with pytest.raises(LogbookConflict, match="nightfringe run FILE"):
        book.night()
    book.book_night(small_night(), now_us=NOW_US, who="test")
    with pytest.raises(LogbookConflict, match="small night"):
        book.night("tomorrow")
    assert book.night("small night") == book.night()


def test_an_attempt_ends_once(book: Logbook) -> None:
    """A second terminal record is refused and changes nothing."""
    night, driving = driven(book)
    held = intend(book, night, driving)
    with driving.step(night, now_us=NOW_US) as step:
        step.end(held.id, "done", outcome=ran(0, started_s=0.0))
    with pytest.raises(LogbookConflict, match="cannot become lost"), driving.step(night, now_us=NOW_US) as step:
        step.end(held.id, "lost")
    assert book.counts(night) == {"done": 1}


def test_a_step_is_all_or_nothing(book: Logbook) -> None:
    """What a failed step had written is taken back with it."""
    night, driving = driven(book)
    first = attempt(book, night)

    def half() -> None:
        with driving.step(night, now_us=NOW_US) as step:
            step.intend(first)
            step.end(999, "done")  # there is no such attempt

    with pytest.raises(LogbookConflict, match="999"):
        half()
    assert driving.open_attempts(night) == []


def test_a_key_serves_once(book: Logbook) -> None:
    """A key that was used is refused by the database itself."""
    night, driving = driven(book)
    intend(book, night, driving)
    with pytest.raises(LogbookConflict, match="contradict"):
        intend(book, night, driving, 1, key="key-0")


def test_a_repeat_of_a_position_is_a_new_attempt(book: Logbook) -> None:
    """Tries of one position count up."""
    night, driving = driven(book)
    first = intend(book, night, driving)
    with driving.step(night, now_us=NOW_US) as step:
        step.end(first.id, "withdrawn")
    assert intend(book, night, driving, key="again-0").try_number == 2


def test_whoever_is_taken_over_can_write_nothing_more(book: Logbook) -> None:
    """A take-over raises the epoch; the older driver's step fails before it writes."""
    night, old = driven(book)
    old.release()
    _, new = driven(book, owner="two", at=NOW_US + 1)
    assert new.epoch > old.epoch
    with pytest.raises(LogbookConflict, match="taken this rig over"):
        intend(book, night, old)
    intend(book, night, new)


def test_a_revision_cannot_change_what_was_sent(book: Logbook) -> None:
    """A tail may begin behind the last position sent, and nowhere before."""
    night, driving = driven(book)
    intend(book, night, driving, 3)
    tail = first_rows(small_order(), 2)
    with pytest.raises(LogbookConflict, match="positions up to 3"), driving.step(night, now_us=NOW_US) as step:
        step.revise(tail, from_position=3, why="test")
    with driving.step(night, now_us=NOW_US) as step:
        assert step.revise(tail, from_position=4, why="test") == 2
    plan = book.night_plan(night)
    assert plan.order.revision.tolist() == [1, 1, 1, 1, 2, 2]
    assert plan.order.columns["shot"].tolist() == [0, 1, 2, 3, 0, 1]
    assert book.night(night).positions == 6


def test_columns_say_what_ran_and_when(book: Logbook) -> None:
    """Time comes from uptime within each boot, from the settle wait's end; what was not measured is NaN."""
    night, driving = driven(book)
    with driving.step(night, now_us=NOW_US) as step:
        step.begin(begins_us=NOW_US, clock="simulated")
        step.anchor(boot="boot-1", utc_us=NOW_US, uptime_s=100.0)
        step.anchor(boot="boot-1", utc_us=NOW_US + 5_000_000, uptime_s=100.0)  # the first anchor of a boot stays
        step.anchor(boot="boot-2", utc_us=NOW_US + 60_000_000, uptime_s=0.0)
    for position, boot, uptime_s in ((0, "boot-1", 100.0), (1, "boot-1", 110.0), (3, "boot-2", 7.0)):
        held = intend(book, night, driving, position, boot=boot, settle_s=2.0)
        # the rig's UTC is three hours wrong: the axis must not follow it
        outcome = ran(position, started_s=10800.0, uptime_s=uptime_s)
        with driving.step(night, now_us=NOW_US) as step:
            step.end(held.id, "done", ordinal=position, outcome=outcome)
    lost = intend(book, night, driving, 2)
    with driving.step(night, now_us=NOW_US) as step:
        step.end(lost.id, "lost", why="test")
    columns = book.night_columns(night)
    assert columns["state"].tolist() == ["done", "done", "lost", "done"]
    np.testing.assert_allclose(columns["start_s"], [2.0, 12.0, np.nan, 69.0], rtol=0, atol=1e-6)  # 1 us of the clock
    np.testing.assert_allclose(columns["mid_s"], [6.0, 16.0, np.nan, 73.0], rtol=0, atol=1e-6)
    np.testing.assert_allclose(columns["duration_s"], [8.0, 8.0, np.nan, 8.0], rtol=0, atol=1e-6)
    assert columns["flags"].tolist() == ["unlocked,late", "unlocked,late", "", "unlocked,late"]
    assert columns["switch_collar"].tolist() == [1, 1, 1, 1]
    np.testing.assert_array_equal(columns["atoms_a"], [6000.0, 6001.0, np.nan, 6003.0])
    np.testing.assert_array_equal(columns["reading_vacuum"], [2e-9, 2e-9, np.nan, 2e-9])
    assert np.isnan(columns["reading_note"]).all()


def test_columns_of_a_replaced_shot_come_from_its_own_revision(book: Logbook) -> None:
    """A position appended later is looked up in the revision that it belongs to."""
    night, driving = driven(book)
    tail = replace(first_rows(small_order(), 1), shot=np.array([5]), packet=np.array([9]))
    with driving.step(night, now_us=NOW_US) as step:
        step.revise(tail, from_position=8, why="again")
    held = intend(book, night, driving, 8, revision=2)
    with driving.step(night, now_us=NOW_US) as step:
        step.end(held.id, "done", outcome=ran(8, started_s=0.0))
    columns = book.night_columns(night)
    assert (columns["shot"][0], columns["packet"][0], columns["switch_collar"][0]) == (5, 9, -1)


def test_columns_of_a_night_that_measured_nothing(book: Logbook) -> None:
    """No attempts, no rows; every fixed column is there all the same."""
    night, _ = driven(book)
    columns = book.night_columns(night)
    assert {len(column) for column in columns.values()} == {0}
    assert {"key", "start_s", "setting_hold", "switch_collar", "flags"} <= set(columns)
    with pytest.raises(LogbookConflict, match="no night"):
        book.night_columns(night + 1)


def test_an_ended_night_is_not_open(book: Logbook) -> None:
    """A night cannot be ended while a shot of it may be at the rig; afterwards it is no longer the open one."""
    night, driving = driven(book)
    held = intend(book, night, driving)
    with pytest.raises(LogbookConflict, match="may still be at the rig"):
        book.end_night(night, now_us=NOW_US, who="test", why="test")
    with driving.step(night, now_us=NOW_US) as step:
        step.end(held.id, "withdrawn")
    book.end_night(night, now_us=NOW_US, who="test", why="test")
    assert book.open_night() is None
