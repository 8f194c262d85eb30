"""The border: SQLAlchemy's and the driver's errors become ours here, most specific first, and go no further."""

from collections.abc import Iterator
from contextlib import contextmanager

from sqlalchemy import exc

from planner.errors import LogbookConflict, LogbookDamaged, LogbookError, LogbookUnavailable

_UNSOUND = ("malformed", "not a database", "corrupt")
_ADVICE = {
    "locked": "another program is writing to it; wait or end that one",
    "readonly": "the file or its folder is read-only",
    "read-only": "the file or its folder is read-only",
    "full": "the disk is full; free some space",
    "unable to open": "the file or its folder cannot be opened; check that it exists and its permissions",
    "disk i/o": "the disk does not answer as it should",
}


def ours(error: exc.SQLAlchemyError, place: str) -> LogbookError:
    """The error of our own tree that this one means."""
    said = str(getattr(error, "orig", None) or error).strip().splitlines()
    text = said[0] if said else type(error).__name__
    low = text.lower()
    if isinstance(error, exc.IntegrityError):
        return LogbookConflict(f"logbook {place}: the rows contradict each other: {text}")
    if isinstance(error, exc.DatabaseError) and any(word in low for word in _UNSOUND):
        return LogbookDamaged(f"logbook {place}: the database file is damaged or is no database: {text}")
    if isinstance(error, exc.OperationalError | exc.InterfaceError | exc.DisconnectionError | exc.TimeoutError):
        advice = next((words for sign, words in _ADVICE.items() if sign in low), "check that the database runs")
        return LogbookUnavailable(f"logbook {place}: {text}: {advice}")
    if isinstance(error, exc.DBAPIError) and error.connection_invalidated:
        return LogbookUnavailable(f"logbook {place}: the connection broke: {text}")
    return LogbookError(f"logbook {place}: {type(error).__name__}: {text}")


@contextmanager
def border(place: str) -> Iterator[None]:
    """Within it, no foreign database error gets out."""
    try:
        yield
    except exc.SQLAlchemyError as error:
        raise ours(error, place) from error
