"""`nightfringe results` on a real logbook: strict JSON, plain words, clear errors, no traceback."""

import json
import math
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.link.adapter import Result, Shot
from tests.link.rigs import BenchRig
from tests.night.nights import Bench


def fringe(shot: Shot) -> Result:
    """A fringe of contrast 0.5 with a little scatter; the last shot's counts are missing."""
    scatter = 40 * math.sin(7.3 * shot.ordinal)
    a = 10_000 * (0.5 + 0.25 * math.cos(math.radians(shot.settings["readout"]))) + scatter
    return Result(atoms_a=None if shot.ordinal == 16 else a, atoms_b=10_000 - a, flags=("late",))


@pytest.fixture
def logbook(tmp_path: Path) -> str:
    """A night of sixteen shots at one hold, driven to its end on the bench rig."""
    bench = Bench(folder=tmp_path, shots=16, rig=BenchRig(fringe))
    try:
        assert bench.dispatcher().run() == "done"
    finally:
        bench.close()
    return str(tmp_path / "night.sqlite")


def test_json_of_a_night(logbook: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One JSON object on standard output, with the reason in words for what one hold cannot give."""
    picture = tmp_path / "decay.png"
    assert run(["results", "--logbook", logbook, "--json", "--picture", str(picture)]) == 0
    printed = capsys.readouterr()
    found = json.loads(printed.out)
    assert found["night"] == "small night"
    assert found["attempts"] == 16
    assert found["used"] == 15
    assert found["left_out"] == {"atom counts missing or not finite": 1}
    (curve,) = found["curves"]
    (hold,) = curve["holds"]
    assert hold["contrast_low"] < 0.5 < hold["contrast_high"]
    assert curve["coherence"] is None
    assert "measured at 1 hold" in curve["why_no_coherence"]
    assert found["pictures"] == [str(picture)]
    assert picture.stat().st_size > 1000


def test_page_of_a_night(logbook: str, capsys: pytest.CaptureFixture[str]) -> None:
    """The printed form names the night and says what could not be measured."""
    assert run(["results", "small night", "--logbook", logbook]) == 0
    printed = capsys.readouterr().out
    assert "Night small night: 15 of 16 attempts count" in printed
    assert "not measured (see below)" in printed


@pytest.mark.parametrize(
    ("extra", "code", "words"),
    [
        (["--cut-flag", "late"], 2, "flagged late (declared cut): 15"),
        (["another night"], 4, "has no night 'another night'"),
        (["--picture", "decay.bmp"], 2, "a picture ends in .png, .pdf, .svg"),
        (["--shape", "round"], 2, "--shape"),
        (["--cut-flag", "unlocked", "--picture", "no-such-folder/decay.png"], 2, "there is no folder"),
    ],
)
def test_wrong_use_is_answered(
    logbook: str, extra: list[str], code: int, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """A night, ending, shape or folder that is not there gives its exit code and one clear line."""
    assert run(["results", "--logbook", logbook, *extra]) == code
    printed = capsys.readouterr().err
    assert words in printed
    assert "Traceback" not in printed


def test_no_logbook(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Where there is no logbook the program says where it looked."""
    assert run(["results", "--logbook", str(tmp_path / "none.sqlite")]) == 4
    assert "no logbook" in capsys.readouterr().err
