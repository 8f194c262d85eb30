"""One fixture for every database that can hold a logbook: a new one is a new parameter here, and no new test.

PostgreSQL runs where NIGHTFRINGE_TEST_POSTGRES gives the address of an empty database that the tests may fill.
"""

import os
from collections.abc import Iterator
from pathlib import Path

import pytest

from planner.logbook import Logbook, open_logbook

POSTGRES = os.environ.get("NIGHTFRINGE_TEST_POSTGRES")


@pytest.fixture(
    params=["sqlite", pytest.param("postgresql", marks=pytest.mark.skipif(not POSTGRES, reason="no server"))]
)
def book(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Logbook]:
    """An empty logbook."""
    place = str(tmp_path / "book.sqlite") if request.param == "sqlite" else str(POSTGRES)
    with open_logbook(place, create=True) as opened:
        yield opened
