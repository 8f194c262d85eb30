"""Which schema a logbook has, read straight from its own mark; Alembic is imported only where a schema is made."""

from sqlalchemy import Connection, Engine, inspect, text

from planner.errors import LogbookMissing, LogbookTooNew
from planner.resources import migrations_folder

VERSION = "0001"  # the head of db/versions (a test compares)


def found_version(connection: Connection) -> str | None:
    """The schema number of the database, or None where there is no logbook in it."""
    if not inspect(connection).has_table("alembic_version"):
        return None
    version = connection.scalar(text("SELECT version_num FROM alembic_version"))
    return None if version is None else str(version)


def has_tables(connection: Connection) -> bool:
    """Whether the database holds anything at all."""
    return bool(inspect(connection).get_table_names())


def check(connection: Connection, place: str) -> None:
    """Raise LogbookMissing or LogbookTooNew unless the schema is the one that this program writes."""
    version = found_version(connection)
    if version is None:
        raise LogbookMissing(f"{place} holds no logbook; another database? Give the name of a new file or of a logbook")
    if version != VERSION:
        raise LogbookTooNew(
            f"the logbook {place} has schema {version}, this program knows {VERSION}: it was written by a newer "
            "Nightfringe. Use that one; nothing was changed"
        )


def make(engine: Engine) -> None:
    """Bring an empty database to the newest schema."""
    from alembic import command
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(migrations_folder()).replace("%", "%%"))
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, "head")
