"""Bytes that changed on disk are noticed when they are read, never used."""

import sqlite3
from pathlib import Path

import pytest

from planner.errors import LogbookConflict, LogbookDamaged
from planner.logbook import open_logbook
from planner.logbook.documents import get_document, put_document, put_documents, sha256
from tests.night.nights import NOW_US, small_night


def test_a_changed_order_is_refused(tmp_path: Path) -> None:
    """An order edited by hand does not match its hash; the message names the row."""
    place = tmp_path / "book.sqlite"
    with open_logbook(str(place), create=True) as book:
        night = book.book_night(small_night(), now_us=NOW_US, who="test")
        name = book.revisions(night.id)[0].order_sha256
    with sqlite3.connect(place) as raw:
        raw.execute(
            "UPDATE documents SET body = CAST(substr(body, 1, length(body) - 3) || x'000000' AS BLOB) WHERE sha256 = ?",
            [name],
        )
    raw.close()
    with open_logbook(str(place)) as book, pytest.raises(LogbookDamaged, match=name):
        book.night_plan(night.id)


def test_contents_are_kept_once_and_come_back(tmp_path: Path) -> None:
    """Equal contents share a row, whatever their number; an unknown hash is refused."""
    contents = [b"", b"x" * 10_000, bytes(range(256)), b"x" * 10_000]
    with open_logbook(str(tmp_path / "book.sqlite"), create=True) as book:
        with book.writing() as connection:
            names = put_documents(connection, "record", contents)
            assert put_document(connection, "record", b"") == names[0] == sha256(b"")
        with book.reading() as connection:
            assert [get_document(connection, name) for name in names] == contents
            assert connection.exec_driver_sql("SELECT count(*) FROM documents").scalar() == 3
            with pytest.raises(LogbookConflict, match="no document"):
                get_document(connection, "0" * 64)


def test_a_body_cannot_grow_beyond_its_size(tmp_path: Path) -> None:
    """A small body that unpacks to gigabytes is cut off at the size on record, and refused."""
    import zlib

    bomb = zlib.compress(b"\0" * 50_000_000)
    with open_logbook(str(tmp_path / "book.sqlite"), create=True) as book:
        with book.writing() as connection:
            connection.exec_driver_sql("INSERT INTO documents VALUES (?, 'record', 'zlib', 10, ?)", ("f" * 64, bomb))
        with book.reading() as connection, pytest.raises(LogbookDamaged):
            get_document(connection, "f" * 64)
