"""A night on the stand-in rig, stopped in the middle, replanned, and run to its end."""

import json
from collections.abc import Iterator
from concurrent.futures import Future
from datetime import timedelta
from pathlib import Path
from typing import cast

import numpy as np
import pytest

from planner.analysis.data import NightData
from planner.cli.app import run
from planner.design.replan import Replanned
from planner.design.running_order import Kind
from planner.errors import LogbookConflict, PlanImpossible
from planner.link.client import RigClient
from planner.link.stand_in.process import start_stand_in
from planner.logbook import Logbook, NightRow, open_logbook
from planner.night.planning import book_sequence
from planner.night.replanning import replan_night
from planner.night.running import now_us, run_night
from planner.night.taking_over import TakingOver
from planner.resources import sequences_folder


@pytest.fixture
def stopped(tmp_path: Path) -> Iterator[tuple[Logbook, RigClient, str]]:
    """A small night of four holds, stopped after some forty shots of 128."""
    folder = sequences_folder()
    text = (folder / "reference-night-a.toml").read_text(encoding="utf-8")
    text = text.replace('from = "0.25 s", to = "64 s", count = 12', 'from = "1 s", to = "20 s", count = 4')
    text = text.replace("repeats = 22", "repeats = 4")
    (tmp_path / "small.toml").write_text(text, encoding="utf-8")
    (tmp_path / "gallery-rig.toml").write_text(
        (folder / "gallery-rig.toml").read_text(encoding="utf-8"), encoding="utf-8"
    )
    place = str(tmp_path / "night.sqlite")
    with (
        start_stand_in(folder / "gallery-stand-in.toml", journal=tmp_path / "journal.jsonl", seed=3) as rig,
        RigClient(rig.url) as client,
        open_logbook(place, create=True) as book,
    ):
        booked = book_sequence(book, tmp_path / "small.toml", now_us=now_us(), who="test", seed=1, effort="quick")
        run_night(book, booked.night, client, stopping=lambda: book.counts(1).get("done", 0) >= 40)
        yield book, client, place


def test_the_rest_of_a_night(stopped: tuple[Logbook, RigClient, str]) -> None:
    """After 40 shots of 128 the rest is ordered anew for less time: a second revision, run to its end, each packet
    whole, and no row of a packet that stands run twice."""
    book, client, _ = stopped
    night = book.night()
    before = book.counts(1)["done"]
    found = replan_night(book, night, now_us=now_us(), owner="test", hours_left=0.12, effort="quick")
    assert found.revision == 2
    assert found.done + found.lost <= before
    assert found.plan.dropped > 0
    assert run_night(book, book.night(), client) == "done"
    assert [row.number for row in book.revisions(1)][:2] == [1, 2]
    data = NightData.from_columns(book.night_columns(1))
    measured = (data.kind == int(Kind.MEASURE)) & (data.state == "done")
    assert measured.sum() >= found.done + 8 * found.plan.to_come - 2
    # numbers of packets go on: those of the second part are larger than all of the first, and hold eight shots each
    later = data.packet[measured & (data.position >= found.from_position)]
    assert later.min() > data.packet[data.position < found.from_position].max()
    assert (np.bincount(later - later.min()) == 8).all()
    # the night fits: the last shot ends before what was left
    assert np.nanmax(data.start_s + data.duration_s) <= found.until_s + 60


def test_the_command(stopped: tuple[Logbook, RigClient, str], capsys: pytest.CaptureFixture[str]) -> None:
    """The command prints what stands, what comes and what it does to the figures; as JSON the same numbers."""
    book, _, place = stopped
    book.close()
    assert run(["replan", "--logbook", place, "--hours-left", "0.3", "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["revision"] == 2
    assert found["packets"]["to_come"] > 0
    assert found["figures"]["additive_mean"] > 0
    assert run(["replan", "--logbook", place, "--hours-left", "0.2"]) == 0
    printed = capsys.readouterr().out
    assert "revision 3" in printed
    assert "packets stand" in printed
    assert run(["replan", "--logbook", place, "--hours-left", "0.01"]) == 2
    assert "one packet of every point takes" in capsys.readouterr().err


def test_nights_that_cannot_be_replanned(stopped: tuple[Logbook, RigClient, str]) -> None:
    """A night that has ended is refused in words."""
    book, client, _ = stopped
    assert run_night(book, book.night(), client) == "done"
    with pytest.raises(LogbookConflict, match="only a night that is open"):
        replan_night(book, book.night(), now_us=now_us(), owner="test")


def test_a_night_that_slips_is_replanned_by_itself(stopped: tuple[Logbook, RigClient, str]) -> None:
    """After twenty minutes in which nothing ran, what is left no longer fits: the dispatcher orders it anew, whole
    packets of every hold alike, and the night ends within its window."""
    book, client, _ = stopped
    night = book.night()
    client.move_clock(client.now().now + timedelta(minutes=20))
    said: list[str] = []
    assert run_night(book, night, client, say=said.append) == "done"
    assert any("the night has slipped" in words for words in said)
    second = book.revisions(1)[1]
    assert second.why.startswith("replanned: ")
    data = NightData.from_columns(book.night_columns(1))
    assert np.nanmax(data.start_s + data.duration_s) <= night.length_s
    later = (data.position >= second.from_position) & (data.kind == int(Kind.MEASURE))
    counts = np.bincount(data.packet[later] - data.packet[later].min())
    assert (counts[counts > 0] >= 8).all(), "whole packets: eight shots, more where one was lost and came again"


def test_a_night_that_keeps_its_time_is_left_alone(stopped: tuple[Logbook, RigClient, str]) -> None:
    book, client, _ = stopped
    client.move_clock(client.now().now + timedelta(minutes=1))
    assert run_night(book, book.night(), client) == "done"
    assert not any(row.why.startswith("replanned") for row in book.revisions(1))


def test_on_a_real_clock_dispatching_does_not_wait() -> None:
    """A new order that is late is left, the old one goes on, and the next look is further ahead."""
    taking = TakingOver(cast(Logbook, None), cast(NightRow, None))
    late: Future[Replanned] = Future()
    taking._waiting = (7, late)
    assert not taking.due(6)
    assert taking.due(7)
    ahead = taking._ahead_s
    assert "not ready in time" in str(taking._take(wait=False))
    assert not taking.due(7)
    assert taking._ahead_s == 2 * ahead
    failed: Future[Replanned] = Future()
    failed.set_exception(PlanImpossible("nothing fits"))
    taking._waiting = (7, failed)
    assert taking._take(wait=False) == "not replanned: nothing fits"
