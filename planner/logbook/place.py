"""Where the logbook is: a file, or the address of a PostgreSQL database."""

import os

VARIABLE = "NIGHTFRINGE_LOGBOOK"
USUAL = "nightfringe.sqlite"


def default_place() -> str:
    """The logbook named by NIGHTFRINGE_LOGBOOK, or nightfringe.sqlite in the current folder."""
    return os.environ.get(VARIABLE) or USUAL


def is_address(place: str) -> bool:
    """Whether `place` is a database address rather than a file."""
    return "://" in place
