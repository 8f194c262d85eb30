"""`nightfringe stability` on a real logbook: strict JSON, 80 columns, a picture, clear errors."""

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from planner.cli.app import run
from planner.link.adapter import Result, Shot
from planner.logbook.booking import NewRequest
from tests.link.rigs import BenchRig
from tests.night.nights import Bench
from tests.night.nights import small_request as nights_request


def strict(text: str) -> dict[str, object]:
    """JSON without NaN or infinities."""

    def refuse(name: str) -> None:
        raise ValueError(name)

    found: dict[str, object] = json.loads(text, parse_constant=refuse)
    return found


def fringe(shot: Shot) -> Result:
    """A fringe of contrast 0.5 that a tilt moves by 0.1 rad, with a little scatter."""
    tilt = math.sin(0.9 * (shot.ordinal // 4)) + 0.3 * math.cos(2.3 * (shot.ordinal // 4))
    scatter = 40 * math.sin(7.3 * shot.ordinal)
    a = 10_000 * (0.5 + 0.25 * math.cos(math.radians(shot.settings["readout"]) + 0.1 * tilt)) + scatter
    return Result(atoms_a=a, atoms_b=10_000 - a, readings={"tilt": tilt, "still": 12.5})


def repeating(shots: int) -> NewRequest:
    """The bench's small request with all packets of one collar state in one cell."""
    made = nights_request(shots)
    row = np.arange(shots)
    cell = (row >= shots // 2).astype(np.int64)
    return replace(made, table=replace(made.table, cell=cell, repeat=row // 4 - cell * (shots // 8)))


def book(folder: Path, shots: int) -> str:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("tests.night.nights.small_request", repeating)
        return drive(folder, shots)


def drive(folder: Path, shots: int) -> str:
    bench = Bench(folder=folder, shots=shots, rig=BenchRig(fringe))
    try:
        assert bench.dispatcher().run() == "done"
    finally:
        bench.close()
    return str(folder / "night.sqlite")


@pytest.fixture(scope="module")
def logbook(tmp_path_factory: pytest.TempPathFactory) -> str:
    """A night of forty-eight packets, driven to its end on the bench rig."""
    return book(tmp_path_factory.mktemp("stability"), 192)


def test_json_of_a_night(logbook: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One strict JSON object; the tilt that moves the phase is found, the reading that stands still is named."""
    picture = tmp_path / "stability.png"
    assert run(["stability", "--logbook", logbook, "--json", "--picture", str(picture)]) == 0
    found = strict(capsys.readouterr().out)
    assert found["series"] == "phase"
    assert found["unit"] == "rad"
    assert found["packets"] == 48
    first = found["deviations"][0]  # type: ignore[index]
    assert first["allan"]["low"] < first["allan"]["value"] < first["allan"]["high"]
    assert first["shot_noise_limit"] > 0
    best = found["correlations"][0]  # type: ignore[index]
    assert (best["series"], best["reading"]) == ("phase", "tilt")
    assert best["q"] < 0.01
    assert found["not_correlated"]["still"] == "constant"  # type: ignore[index]
    assert found["pictures"] == [str(picture)]
    assert picture.stat().st_size > 1000


@pytest.mark.parametrize("series", ["phase", "contrast", "offset", "atoms", "noise", "tilt"])
def test_page_of_a_series(
    logbook: str, series: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The printed form fits 80 columns; a series that is constant is refused in words, without a number."""
    monkeypatch.setenv("COLUMNS", "80")
    code = run(["stability", "--logbook", logbook, "--of", series])
    printed = capsys.readouterr()
    if series == "atoms":  # the bench rig has 10,000 atoms in every shot
        assert code == 2
        assert "atoms: every packet has the same value" in printed.err
        assert printed.out == ""
        return
    assert code == 0
    assert max(len(line) for line in printed.out.splitlines()) <= 80
    assert f": {series}" in printed.out.splitlines()[0]
    assert "Hadamard" in printed.out
    assert "not an error" in printed.out


def test_errors_in_words(logbook: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Unknown series, constant reading, short night, unknown ending: exit 2, one line, no number, no traceback."""
    alone = tmp_path / "alone"
    alone.mkdir()
    cases = [
        (["--logbook", logbook, "--of", "tlit"], 'no series "tlit"; there are phase'),
        (["--logbook", logbook, "--of", "still"], "still: every packet has the same value"),
        (["--logbook", logbook, "--picture", str(tmp_path / "x.gif")], "a picture ends in"),
        (["--logbook", book(tmp_path, 48)], "12 packets have a value: a stability needs 30"),
        (["--logbook", drive(alone, 48)], "no cell has 4 packets with a value"),
        (["--logbook", str(alone / "night.sqlite"), "--of", "atoms"], "no cell has 4 packets with a value"),
    ]
    for arguments, message in cases:
        assert run(["stability", *arguments]) == 2
        printed = capsys.readouterr()
        assert message in printed.err
        assert printed.out == ""
