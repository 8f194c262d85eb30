"""What the path from exec to the next shot loads: seconds count when a night has to go on."""

from pathlib import Path

from planner.logbook import open_logbook
from tests.night.nights import NOW_US, small_night
from tests.test_start_up import loaded_by

TOO_HEAVY = {"scipy", "skopt", "sklearn", "matplotlib", "pyarrow", "alembic", "pint", "starlette", "uvicorn"}


def test_going_on_with_a_night_loads_nothing_heavy() -> None:
    """The dispatcher, the client and the logbook come without scipy, matplotlib, pyarrow and their like."""
    loaded = loaded_by("import planner.night.running, planner.cli.run, planner.logbook.driving, planner.logbook.plans")
    assert {"numpy", "sqlalchemy", "httpx"} <= loaded
    assert loaded.isdisjoint(TOO_HEAVY), loaded & TOO_HEAVY


def test_a_resumed_run_loads_nothing_heavy(tmp_path: Path) -> None:
    """The same for the command itself, up to the moment at which it finds no rig."""
    place = str(tmp_path / "book.sqlite")
    with open_logbook(place, create=True) as book:
        book.book_night(small_night(), now_us=NOW_US, who="test")
    code = f"""
from planner.cli.app import run
from planner.cli.run import StopRequest
born = StopRequest.__init__
StopRequest.__init__ = lambda self: (born(self), setattr(self, "asked", True))[0]  # as after a Ctrl-C
assert run(["run", "--logbook", {place!r}, "--json"]) == 130
"""
    loaded = loaded_by(code)
    assert loaded.isdisjoint(TOO_HEAVY), loaded & TOO_HEAVY
    with open_logbook(place) as book:
        assert book.night().why == "stopped while the rig could not be reached"
