"""The run and nights commands against a rig that is a process of its own."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.errors import LogbookConflict
from planner.logbook import open_logbook
from planner.night.running import now_us, run_night
from tests.night.killing import Rig, start_program
from tests.night.nights import small_night


@pytest.fixture
def rig(tmp_path: Path) -> Iterator[Rig]:
    """A running bench rig."""
    started = Rig(tmp_path)
    yield started
    started.kill()


def book_small(folder: Path, shots: int = 8, name: str = "small night") -> str:
    place = str(folder / "night.sqlite")
    with open_logbook(place, create=True) as book:
        book.book_night(small_night(shots, name=name, length_s=1e6), now_us=now_us(), who="test")
    return place


def test_a_booked_night_runs_to_its_end(rig: Rig, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`run` alone takes up the open night; what it prints as JSON is the whole of its output."""
    place = book_small(tmp_path)
    assert run(["run", "--logbook", place, "--rig", rig.address, "--json"]) == 0
    said = capsys.readouterr()
    assert json.loads(said.out) == {
        "night": "small night",
        "state": "done",
        "why": None,
        "sent": 8,
        "positions": 8,
        "attempts": {"done": 8},
    }
    assert "8 of 8 shots" in said.err
    assert run(["run", "--logbook", place]) == 4
    assert "no night is open" in capsys.readouterr().err
    assert run(["nights", "--logbook", place, "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["nights"][0]["attempts"] == {"done": 8}
    assert run(["nights", "--logbook", place]) == 0
    assert "8 of 8" in capsys.readouterr().out


@pytest.mark.skipif(sys.platform == "win32", reason="a signal cannot be sent to another process so")
def test_one_interrupt_stops_in_good_order(rig: Rig, tmp_path: Path) -> None:
    """Ctrl-C: exit code 130, the rig holds nothing any more, and the next run goes on to the end."""
    place = book_small(tmp_path, shots=2000)
    program = start_program(tmp_path, rig.address)
    with open_logbook(place) as book:
        while not book.counts(1).get("done"):
            time.sleep(0.05)
        program.send_signal(signal.SIGINT)
        assert program.wait(60) == 130
        assert book.night().state == "stopped"
        assert set(book.counts(1)) <= {"done", "withdrawn"}
        assert 0 < book.counts(1)["done"] < 2000


def test_only_one_night_of_a_rig_is_under_way(rig: Rig, tmp_path: Path) -> None:
    """A night cannot begin while another has shots that may be at the rig; ending that one makes room."""
    place = book_small(tmp_path, shots=2000)
    program = start_program(tmp_path, rig.address)
    with open_logbook(place) as book:
        while not book.counts(1).get("done"):
            time.sleep(0.05)
        program.kill()
        program.wait()
        second = book.book_night(small_night(name="second"), now_us=now_us(), who="test")
        from planner.link.client import RigClient

        with RigClient(rig.address) as client, pytest.raises(LogbookConflict, match="--end"):
            run_night(book, second, client)
    assert run(["run", "--logbook", place, "--rig", rig.address, "--night", "small night", "--end"]) == 0
    assert run(["run", "--logbook", place, "--rig", rig.address]) == 0
    with open_logbook(place) as book:
        assert [night.state for night in book.nights()] == ["over", "done"]
        assert set(book.counts(1)) <= {"done", "withdrawn"}


def test_a_night_that_is_not_there(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """No logbook and an unknown night end with 4 and say what to do."""
    assert run(["run", "--logbook", str(tmp_path / "none.sqlite")]) == 4
    assert "no logbook" in capsys.readouterr().err
    place = book_small(tmp_path)
    assert run(["run", "--logbook", place, "--night", "tomorrow"]) == 4
    assert "small night" in capsys.readouterr().err


def test_the_environment_names_the_logbook(tmp_path: Path) -> None:
    """NIGHTFRINGE_LOGBOOK is where a command without --logbook looks."""
    place = book_small(tmp_path)
    done = subprocess.run(
        [sys.executable, "-m", "planner", "nights", "--json"],
        env={**os.environ, "NIGHTFRINGE_LOGBOOK": place},
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    assert json.loads(done.stdout)["nights"][0]["name"] == "small night"
