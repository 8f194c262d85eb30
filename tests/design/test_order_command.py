"""`nightfringe order`: what it writes and says."""

import csv
import json
from pathlib import Path

import numpy as np
import pytest

from planner.cli.app import run
from tests.design.nights import SEQUENCES, night_b


def short_file(folder: Path, name: str, *changes: tuple[str, str]) -> str:
    """A copy of an example sequence beside its rig file, with pieces of its text replaced."""
    text = (SEQUENCES / name).read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    (folder / "gallery-rig.toml").write_text((SEQUENCES / "gallery-rig.toml").read_text(encoding="utf-8"))
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return str(path)


def read(path: Path) -> dict[str, np.ndarray]:
    with path.open(newline="") as file:
        names, *rows = list(csv.reader(file))
    return dict(zip(names, np.array(rows, dtype=float).T, strict=True))


def test_the_csv_holds_every_setting_in_its_unit_and_only_numbers(tmp_path: Path) -> None:
    """Columns of the CSV: times, hold, phase, switches, settings with units; warm-up left out on request."""
    file = short_file(
        tmp_path, "reference-night-b.toml", ("repeats = 124", "repeats = 20"), ("warm_up = 0", "warm_up = 2")
    )
    whole, measured = tmp_path / "whole.csv", tmp_path / "measured.csv"
    assert run(["order", file, "--quick", "--out", str(whole)]) == 0
    assert run(["order", file, "--quick", "--measured-only", "--out", str(measured)]) == 0
    every, mine = read(whole), read(measured)
    assert len(every["kind"]) == len(mine["kind"]) + 2
    assert every["kind"][:3].tolist() == [1, 1, 0]
    table, _ = night_b(20)
    assert len(mine["start_s"]) == len(table)
    assert set(mine["lattice_depth_Er"]) == {9.0}
    assert set(mine["split_time_us"]) == {340.0}
    assert set(mine["phase_deg"]) == {90.0, 270.0}
    assert set(mine["switch_collar"]) == {-1.0, 1.0}
    gaps = every["start_s"][1:] - (every["start_s"] + every["duration_s"])[:-1]
    # a wait lies before the start of its shot
    assert gaps == pytest.approx(every["settle_s"][1:], abs=1e-6)


def test_json_says_figures_comparison_and_the_slow_switchs_own_effect(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """One JSON object; the order beats a shuffle; the slow switch's own figure stands beside the wanted parity's."""
    file = short_file(tmp_path, "reference-night-b.toml", ("repeats = 124", "repeats = 20"))
    assert run(["order", file, "--quick", "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said["figures"]["additive_mean"] < said["shuffled"]["additive_mean"]
    assert set(said["parities"]) == {"collar*kick", "collar"}
    assert said["parities"]["collar"]["additive_mean"] > said["parities"]["collar*kick"]["additive_mean"]
    assert said["last_draw"]["flipped_switch"] == "kick"


def test_the_table_is_for_people_and_a_picture_is_drawn(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Percent of the error bar, the comparison, and a file that is a picture."""
    file = short_file(tmp_path, "reference-night-a.toml", ("repeats = 22", "repeats = 2"))
    picture = tmp_path / "order.png"
    assert run(["order", file, "--quick", "--picture", str(picture)]) == 0
    said = capsys.readouterr().out
    for word in ("error bar", "shuffled", "swept", "coupled worst", "randomisation test"):
        assert word in said
    assert picture.read_bytes().startswith(b"\x89PNG")


@pytest.mark.parametrize(
    ("extra", "message"),
    [
        (["--out", "order.txt"], "ends in .csv"),
        (["--picture", "order.bmp"], "a picture ends in"),
        (["--seed", "-1"], "-1"),
    ],
)
def test_wrong_options_are_refused_in_words(
    extra: list[str], message: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Exit code 2, a sentence on standard error, nothing written."""
    file = short_file(tmp_path, "reference-night-a.toml", ("repeats = 22", "repeats = 2"))
    assert run(["order", file, *extra]) == 2
    assert message in capsys.readouterr().err


def test_a_dwell_that_no_measurement_fills_is_refused_with_what_works(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The nearest plan that works is named."""
    file = short_file(tmp_path, "reference-night-b.toml", ("repeats = 124", "repeats = 2"))
    assert run(["order", file]) == 2
    assert "set fringe.repeats to" in capsys.readouterr().err
