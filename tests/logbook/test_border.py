"""No foreign database error gets past the logbook."""

import inspect

import pytest
from sqlalchemy import exc

from planner.errors import LogbookConflict, LogbookDamaged, LogbookError, LogbookUnavailable
from planner.logbook.border import border, ours

FOREIGN = [value for value in vars(exc).values() if inspect.isclass(value) and issubclass(value, exc.SQLAlchemyError)]


def made(kind: type[exc.SQLAlchemyError], text: str = "something") -> exc.SQLAlchemyError:
    """An instance of any of them: most take a text, the driver's own take statement, values and cause."""
    if issubclass(kind, exc.DBAPIError):
        return kind("SELECT 1", {}, Exception(text))
    if issubclass(kind, exc.StatementError):
        return kind(text, "SELECT 1", {}, None)
    error = kind.__new__(kind)
    Exception.__init__(error, text)
    return error


@pytest.mark.parametrize("kind", FOREIGN, ids=lambda kind: kind.__name__)
def test_every_foreign_error_is_mapped(kind: type[exc.SQLAlchemyError]) -> None:
    """Each class of SQLAlchemy's tree becomes one of ours, with its cause and the place."""
    with pytest.raises(LogbookError, match="somewhere") as caught, border("somewhere"):
        raise made(kind)
    assert isinstance(caught.value.__cause__, exc.SQLAlchemyError)


def test_there_are_foreign_errors_to_map() -> None:
    """The list above is not empty by mistake."""
    assert {exc.OperationalError, exc.IntegrityError, exc.TimeoutError} <= set(FOREIGN)


@pytest.mark.parametrize(
    ("kind", "text", "mine", "advice"),
    [
        (exc.OperationalError, "database is locked", LogbookUnavailable, "another program"),
        (exc.OperationalError, "attempt to write a readonly database", LogbookUnavailable, "read-only"),
        (exc.OperationalError, "database or disk is full", LogbookUnavailable, "free some space"),
        (exc.OperationalError, "unable to open database file", LogbookUnavailable, "permissions"),
        (exc.DatabaseError, "database disk image is malformed", LogbookDamaged, "damaged"),
        (exc.DatabaseError, "file is not a database", LogbookDamaged, "no database"),
        (exc.IntegrityError, "UNIQUE constraint failed: attempts.key", LogbookConflict, "attempts.key"),
        (exc.TimeoutError, "QueuePool limit", LogbookUnavailable, "check that the database runs"),
    ],
)
def test_the_most_specific_meaning_wins(
    kind: type[exc.SQLAlchemyError], text: str, mine: type[LogbookError], advice: str
) -> None:
    """What the operator can do about it decides the class, and stands in the message."""
    error = ours(made(kind, text), "book.sqlite")
    assert type(error) is mine
    assert advice in str(error)
