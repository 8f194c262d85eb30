"""The schema on disk: what the migrations make is what the tables say, strict and named."""

import re
import sqlite3
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import CheckConstraint

from planner.errors import LogbookDamaged, LogbookMissing, LogbookTooNew
from planner.logbook import Logbook, open_logbook
from planner.logbook.schema import VERSION
from planner.logbook.tables import Base
from planner.resources import migrations_folder


def test_one_head_and_the_program_knows_it() -> None:
    """The migrations have a single head: the number that the program writes and accepts."""
    config = Config()
    config.set_main_option("script_location", str(migrations_folder()))
    assert ScriptDirectory.from_config(config).get_heads() == [VERSION]


def test_migrations_and_tables_agree(book: Logbook) -> None:
    """Columns, types, indexes and keys: nothing to add, nothing to take away."""
    with book.reading() as connection:
        context = MigrationContext.configure(connection)
        assert compare_metadata(context, Base.metadata) == []


def test_tables_are_strict_and_checks_are_named(tmp_path: Path) -> None:
    """Every SQLite table is STRICT, and holds every named check that the tables declare, word for word."""
    with open_logbook(str(tmp_path / "book.sqlite"), create=True):
        pass
    raw = sqlite3.connect(tmp_path / "book.sqlite")
    made = {name: sql for name, sql in raw.execute("SELECT name, sql FROM sqlite_master WHERE type = 'table'")}  # noqa: C416
    raw.close()
    for table in Base.metadata.sorted_tables:
        sql = re.sub(r"\s+", " ", made[table.name])
        assert sql.rstrip().endswith("STRICT")
        for constraint in table.constraints:
            if isinstance(constraint, CheckConstraint):
                assert f"CONSTRAINT {constraint.name} CHECK ({constraint.sqltext})" in sql
        assert sql.count("CHECK (") == sum(isinstance(one, CheckConstraint) for one in table.constraints)


def test_a_newer_schema_is_refused_with_both_numbers(tmp_path: Path) -> None:
    """A logbook of a later version is left as it is."""
    place = tmp_path / "book.sqlite"
    with open_logbook(str(place), create=True):
        pass
    with sqlite3.connect(place) as raw:
        raw.execute("UPDATE alembic_version SET version_num = '0999'")
    raw.close()
    with pytest.raises(LogbookTooNew, match=f"0999.*{VERSION}"):
        open_logbook(str(place))
    with pytest.raises(LogbookTooNew):
        open_logbook(str(place), create=True)


def test_a_place_without_a_logbook_is_said_so(tmp_path: Path) -> None:
    """No file, another program's database, and a file that is none: each with what to do."""
    with pytest.raises(LogbookMissing, match="book a night first"):
        open_logbook(str(tmp_path / "none.sqlite"))
    assert not (tmp_path / "none.sqlite").exists()
    with pytest.raises(LogbookMissing, match="folder"):
        open_logbook(str(tmp_path / "nowhere" / "x.sqlite"), create=True)
    other = tmp_path / "other.sqlite"
    with sqlite3.connect(other) as raw:
        raw.execute("CREATE TABLE mine (a)")
    raw.close()
    for create in (False, True):
        with pytest.raises(LogbookMissing, match="holds no logbook"):
            open_logbook(str(other), create=create)
    text = tmp_path / "text.sqlite"
    text.write_text("not a database at all, but long enough to be looked at as one" * 10, encoding="ascii")
    with pytest.raises(LogbookDamaged, match="no database"):
        open_logbook(str(text))


def test_opening_a_logbook_does_not_load_the_migration_tool(tmp_path: Path) -> None:
    """Only making a schema imports Alembic: a program that goes on with a night starts without it."""
    from tests.test_start_up import loaded_by

    with open_logbook(str(tmp_path / "book.sqlite"), create=True):
        pass
    loaded = loaded_by(
        f"from planner.logbook import open_logbook\nopen_logbook({str(tmp_path / 'book.sqlite')!r}).close()"
    )
    assert "sqlalchemy" in loaded
    assert "alembic" not in loaded
