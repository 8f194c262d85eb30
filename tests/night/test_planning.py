"""Booking: what is stored, what is refused, and what goes on only with the texts it was booked with."""

import shutil
from pathlib import Path
from typing import Any

import pytest

from planner.cli.run import check_same, find_night
from planner.errors import InputError, LogbookConflict, PlanImpossible, ProblemsFound
from planner.logbook import Logbook, open_logbook
from planner.night.planning import Booked, book_sequence, cautions
from planner.resources import sequences_folder
from tests.night.nights import NOW_US


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A sequence and its rig file that a test may change."""
    for name in ("hold-scan.toml", "gallery-rig.toml"):
        shutil.copy(sequences_folder() / name, tmp_path / name)
    return tmp_path


def book_it(book: Logbook, folder: Path, **options: Any) -> Booked:
    fields: dict[str, Any] = {"now_us": NOW_US, "who": "test", "seed": 7, "effort": "quick"}
    return book_sequence(book, folder / "hold-scan.toml", **(fields | options))


def test_a_sequence_becomes_a_night(folder: Path) -> None:
    """Name, rig, link, window with room for repeats, the whole plan and where it came from; a second one counts up."""
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        booked = book_it(book, folder)
        night = booked.night
        assert night.name == "hold-scan-2026-12-01"
        assert (night.rig, night.link) == ("gallery", "http://127.0.0.1:8765")
        assert night.length_s == pytest.approx(booked.order_s * 1.1 + 600, rel=1e-12)
        plan = book.night_plan(night.id)
        assert len(plan.order) == night.positions >= len(plan.requests[0].table)
        assert plan.requests[0].details["switches"]["collar"] == {
            "states": ["near", "far"],
            "settle_s": 25.0,
            "dwell_s": 480.0,
        }
        request = book.requests(night.id)[0]
        assert request.sequence_text == (folder / "hold-scan.toml").read_text(encoding="utf-8")
        assert request.rig_text == (folder / "gallery-rig.toml").read_text(encoding="utf-8")
        again = book_it(book, folder)
        assert again.night.name == "hold-scan-2026-12-01-2"
        assert book.revisions(again.night.id)[0].order_sha256 == book.revisions(night.id)[0].order_sha256
        other = book_it(book, folder, seed=8, name="other")
        assert book.revisions(other.night.id)[0].order_sha256 != book.revisions(night.id)[0].order_sha256


def test_a_window_that_is_too_short_is_refused(folder: Path) -> None:
    """The message gives both lengths; nothing is stored."""
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        with pytest.raises(PlanImpossible, match=r"takes \d+\.\d+ h, the night has 1\.00 h"):
            book_it(book, folder, hours=1.0)
        assert book.nights() == []


def test_an_unattended_night_needs_its_approval(folder: Path) -> None:
    """With the reference in the rig file it is stored and shown; without, refused."""
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        night = book_it(book, folder, unattended=True).night
        assert night.unattended == "invented: gallery unattended running, sheet 7"
        assert any("sheet 7" in line for line in cautions(unattended=night.unattended))
        rig = folder / "gallery-rig.toml"
        lines = rig.read_text(encoding="utf-8").splitlines()
        rig.write_text("\n".join(line for line in lines if not line.startswith("approval")), encoding="utf-8")
        with pytest.raises(InputError, match="approval"):
            book_it(book, folder, unattended=True)
        assert book_it(book, folder).night.unattended is None
    assert any("no interlock" in line for line in cautions(unattended=None))


def test_a_broken_file_books_nothing(folder: Path) -> None:
    """Problems come as the reader finds them."""
    (folder / "hold-scan.toml").write_text("nightfringe = 1\ntitel = 3\n", encoding="utf-8")
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        with pytest.raises(ProblemsFound):
            book_it(book, folder)
        assert book.nights() == []


def test_a_night_goes_on_with_the_texts_it_was_booked_with(folder: Path) -> None:
    """The same file takes the open night up; a changed sequence or rig file is refused until the night ends."""
    file = str(folder / "hold-scan.toml")
    with open_logbook(str(folder / "book.sqlite"), create=True) as book:
        assert find_night(book, [file], None) is None
        night = book_it(book, folder).night
        assert find_night(book, [file], None) == night
        assert find_night(book, [], None) == night
        assert find_night(book, [file], "a new name") is None
        rig = folder / "gallery-rig.toml"
        before = rig.read_text(encoding="utf-8")
        rig.write_text(before + "# changed\n", encoding="utf-8")
        with pytest.raises(LogbookConflict, match="has changed since"):
            find_night(book, [file], None)
        rig.write_text(before, encoding="utf-8")
        check_same(book, night, [file], named=False)
        (folder / "hold-scan.toml").write_text(
            (folder / "hold-scan.toml").read_text(encoding="utf-8") + "# changed\n", encoding="utf-8"
        )
        with pytest.raises(LogbookConflict, match="another sequence"):
            find_night(book, [file], None)
        book.end_night(night.id, now_us=NOW_US, who="test", why="test")
        assert find_night(book, [file], None) is None
