"""`nightfringe fringes` on a real logbook: strict JSON, plain words, a picture."""

import json
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.plots import phase_path, style
from tests.analysis.test_night_fringes import stand_in_report
from tests.analysis.test_results_command import logbook  # noqa: F401 - a fixture


def test_a_small_night(logbook: str, capsys: pytest.CaptureFixture[str]) -> None:  # noqa: F811
    """Numbers as JSON, and in words what sixteen shots cannot say."""
    assert run(["fringes", "--logbook", logbook, "--json"]) == 0
    found = json.loads(capsys.readouterr().out)
    (curve,) = found["curves"]
    assert curve["holds"][0]["contrast"] == pytest.approx(0.5, abs=0.05)
    assert "needs 30 at least" in curve["why_not"]["detector"]
    assert run(["fringes", "--logbook", logbook]) == 0
    printed = capsys.readouterr().out
    assert "The phase was followed through" in printed
    assert "efficiency ratio was not found" in printed
    assert max(map(len, printed.splitlines())) <= 80


def test_the_path_is_drawn(tmp_path: Path) -> None:
    """A night of eight holds makes a picture."""
    place = style.save(phase_path.figure(stand_in_report(), "Night"), str(tmp_path / "path.png"))
    assert place.stat().st_size > 10_000


def test_a_picture_needs_a_known_ending(logbook: str, capsys: pytest.CaptureFixture[str]) -> None:  # noqa: F811
    """A wrong ending is refused before anything is worked out."""
    assert run(["fringes", "--logbook", logbook, "--picture", "path.bmp"]) == 2
    assert "a picture ends in" in capsys.readouterr().err
