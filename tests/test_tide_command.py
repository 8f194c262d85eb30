"""`nightfringe tide`: the tide at a site, in words, as JSON and drawn."""

import json
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.resources import sequences_folder

RIG = str(sequences_folder() / "gallery-rig.toml")
NIGHT = ["--from", "2026-12-01 20:00", "--for", "6 h", "--every", "1 h"]


def test_rows_and_phases(capsys: pytest.CaptureFixture[str]) -> None:
    """Seven hourly rows in the site's own time, with phases of a sequence's holds, in 80 columns."""
    sequence = str(sequences_folder() / "hold-scan.toml")
    assert run(["tide", RIG, *NIGHT, "--sequence", sequence]) == 0
    printed = capsys.readouterr().out
    assert "time (CET)" in printed
    assert "12-02 02:00" in printed
    assert "70 s (rad)" in printed
    assert "[drift.acceleration]" in printed
    # the piece of a sequence file is not broken into lines
    assert max(len(line) for line in printed.splitlines() if "periods" not in line) <= 80


def test_json_and_picture(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The same numbers in SI, and a picture."""
    picture = tmp_path / "tide.png"
    assert run(["tide", RIG, *NIGHT, "--json", "--picture", str(picture)]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["time"][0] == "2026-12-01T19:00:00+00:00"
    assert len(found["change_m_per_s2"]) == 7
    assert max(map(abs, found["change_m_per_s2"])) < 2.2e-6
    assert 1e-8 < found["left_by_prediction"]["half_daily"] < 1e-6
    assert picture.stat().st_size > 5_000


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--from", "tonight"], "--from is a time such as"),
        (["--every", "0 s"], "the distance must be positive"),
        (["--for", "10 h", "--every", "1 s"], "raise --every"),
    ],
)
def test_what_is_refused(options: list[str], words: str, capsys: pytest.CaptureFixture[str]) -> None:
    """A time that is none, a distance of nothing and too many rows are refused in words."""
    assert run(["tide", RIG, *options]) == 2
    assert words in capsys.readouterr().err


def test_a_rig_without_a_site(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Without a site there is no tide, and the keys that are missing are named."""
    text = Path(RIG).read_text(encoding="utf-8")
    begin = text.index("[site]")
    end = text.find("\n[", begin)
    rig = tmp_path / "rig.toml"
    rig.write_text(text[:begin] + (text[end + 1 :] if end > 0 else ""), encoding="utf-8")
    assert run(["tide", str(rig)]) == 2
    assert "give [site] a latitude" in capsys.readouterr().err
