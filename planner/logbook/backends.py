"""What differs between the databases: how to connect, how a transaction begins, who may write. Nothing else does.

SQLite: write-ahead log, full synchronous (an acknowledged commit survives a power cut), `BEGIN IMMEDIATE` for the
writer (a read that turns into a write after somebody else's commit would fail at once, whatever the busy timeout),
deferred query-only transactions for readers, and one writing process a file, held by a lock file. Only the writer's
connection makes checkpoints: two connections that do so at the same moment can damage a file with SQLite before
3.51.3 (sqlite.org, release log of 3.51.3, from memory).
"""

import sqlite3
import sys
from abc import ABC, abstractmethod
from pathlib import Path
from urllib.parse import quote

from sqlalchemy import Engine, create_engine, event
from sqlalchemy.engine import make_url
from sqlalchemy.exc import ArgumentError, NoSuchModuleError
from sqlalchemy.pool import QueuePool

from planner.errors import InputError, LogbookMissing, LogbookUnavailable
from planner.logbook.lock import WriteLock
from planner.logbook.place import is_address

BUSY_MS = 5000


class Backend(ABC):
    """A database that holds a logbook. `place` names it to people, without a password."""

    place: str
    sole_writer: bool  # whether holding the writing right proves that no other process writes

    @abstractmethod
    def prepare(self, *, create: bool) -> None:
        """Check that the place exists; with `create`, make what must exist before connecting."""

    @abstractmethod
    def engine(self, *, writes: bool) -> Engine:
        """An engine for writing, or one that can only read."""

    @abstractmethod
    def hold_writing(self) -> None:
        """Take the right to write (LogbookUnavailable when another process has it)."""

    @abstractmethod
    def close(self) -> None:
        """Give the writing right back."""


class SQLiteBackend(Backend):
    """A file."""

    sole_writer = True

    def __init__(self, path: Path) -> None:
        self.path = path.expanduser().absolute()
        self.place = str(path)
        self._lock = WriteLock(self.path.with_name(self.path.name + ".lock"))

    def prepare(self, *, create: bool) -> None:
        if self.path.is_dir():
            raise InputError(f"{self.place} is a folder; give the name of the logbook's file")
        if self.path.exists():
            return
        if not create:
            raise LogbookMissing(
                f"no logbook at {self.place}; book a night first (nightfringe run FILE), or say where it is with "
                "--logbook or NIGHTFRINGE_LOGBOOK"
            )
        if not self.path.parent.is_dir():
            raise LogbookMissing(f"the folder {self.path.parent} for the logbook does not exist; make it first")
        self._lock.take()
        try:
            self.path.touch()
        except OSError as error:
            raise LogbookUnavailable(f"logbook {self.place}: cannot be made ({error.strerror})") from error

    def engine(self, *, writes: bool) -> Engine:
        address = f"file:{quote(self.path.as_posix())}?mode=rw"

        def connect() -> sqlite3.Connection:
            connection = sqlite3.connect(
                address, uri=True, isolation_level=None, check_same_thread=False, timeout=BUSY_MS / 1000
            )
            settings = [f"busy_timeout={BUSY_MS}", "foreign_keys=ON"]
            if writes:
                settings += ["journal_mode=WAL", "synchronous=FULL"]
                settings += ["fullfsync=ON"] if sys.platform == "darwin" else []
            else:
                settings += ["query_only=ON", "wal_autocheckpoint=0"]
            try:
                for setting in settings:
                    connection.execute(f"PRAGMA {setting}").fetchall()
            except sqlite3.Error:
                connection.close()
                raise
            return connection

        if writes:
            engine = create_engine("sqlite://", creator=connect, poolclass=QueuePool, pool_size=1, max_overflow=0)
        else:
            engine = create_engine("sqlite://", creator=connect, poolclass=QueuePool)
        begin = "BEGIN IMMEDIATE" if writes else "BEGIN"
        event.listen(engine, "begin", lambda connection: connection.exec_driver_sql(begin))
        return engine

    def hold_writing(self) -> None:
        self._lock.take()

    def close(self) -> None:
        self._lock.release()


class ServerBackend(Backend):
    """A PostgreSQL database by address. Several processes may write; each rig's lease keeps them apart."""

    sole_writer = False

    def __init__(self, address: str) -> None:
        try:
            self._url = make_url(address)
        except ArgumentError as error:
            raise InputError(f"{address!r} is no database address; expected postgresql://USER@HOST/NAME") from error
        if self._url.get_backend_name() != "postgresql":
            raise InputError(
                f"a logbook is a file or a postgresql:// address; found {self._url.get_backend_name()}:// "
                "(for SQLite give the file's name alone)"
            )
        self.place = self._url.render_as_string(hide_password=True)

    def prepare(self, *, create: bool) -> None:
        """The database itself is made by its administrator."""

    def engine(self, *, writes: bool) -> Engine:
        try:
            options = {} if writes else {"isolation_level": "REPEATABLE READ"}
            return create_engine(self._url, pool_pre_ping=True, **options)
        except (ImportError, NoSuchModuleError) as error:
            raise InputError(f"no driver for {self.place}: install psycopg (pip install 'psycopg[binary]')") from error

    def hold_writing(self) -> None:
        """Any process may write; the lease of a rig decides who drives it."""

    def close(self) -> None:
        """Nothing is held."""


def backend_for(place: str) -> Backend:
    """The backend for a file name or an address (InputError for anything else)."""
    if is_address(place):
        return ServerBackend(place)
    if not place.strip():
        raise InputError("the name of the logbook's file is empty")
    return SQLiteBackend(Path(place))
