"""Exports: units in the names, nothing that a spreadsheet would run, the same numbers in both forms."""

import csv
from pathlib import Path

import numpy as np
import pytest
from pyarrow import parquet

from planner.cli.app import run
from planner.link.adapter import Result
from tests.link.rigs import BenchRig
from tests.night.conftest import NewBench


def test_csv_and_parquet_hold_what_was_measured(new_bench: NewBench, tmp_path: Path) -> None:
    """Columns, units, states in words and empty cells; parquet keeps types and says which night it is."""
    bench = new_bench()
    bench.dispatcher().run()
    place = str(bench.folder / "night.sqlite")
    out, out2 = tmp_path / "night.csv", tmp_path / "night.parquet"
    assert run(["export", "--logbook", place, "--out", str(out)]) == 0
    assert run(["export", "--logbook", place, "--out", str(out2)]) == 0
    with out.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 8
    assert [row["switch_collar"] for row in rows] == ["near"] * 4 + ["far"] * 4
    assert [float(row["setting_readout [deg]"]) for row in rows[:4]] == pytest.approx([0, 90, 180, 270], rel=1e-14)
    assert rows[0]["reading_vacuum [Pa]"] == "2e-09"
    assert rows[0]["atoms_b"] == ""
    assert rows[0]["kind"] == "measure"
    assert rows[0]["start_utc"] == "2026-12-01T20:00:25.000000Z"
    table = parquet.read_table(out2)
    assert table.column_names == list(rows[0])
    assert table.schema.metadata[b"nightfringe.night"] == b"small night"
    assert table.schema.metadata[b"nightfringe.version_numpy"] == np.__version__.encode()
    np.testing.assert_array_equal(table["atoms_a"].to_numpy(), bench.columns()["atoms_a"])
    assert table["atoms_b"].null_count == 8


def test_a_spreadsheet_runs_nothing(new_bench: NewBench, tmp_path: Path) -> None:
    """Text from the rig that would be a formula is written as text, in cells and in headings."""

    def act(shot: object) -> Result:
        return Result(atoms_a=-1.0, atoms_b=2.0, flags=("=cmd|calc",), readings={"@sum": 1.0})

    bench = new_bench(shots=4, rig=BenchRig(act))
    bench.dispatcher().run()
    out = tmp_path / "night.csv"
    assert run(["export", "--logbook", str(bench.folder / "night.sqlite"), "--out", str(out)]) == 0
    with out.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert rows[0]["flags"] == "'=cmd|calc"
    assert rows[0]["atoms_a"] == "-1.0"  # a number stays one
    assert "reading_@sum" in rows[0]


def test_places_that_cannot_be_written_are_said(
    new_bench: NewBench, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Another ending and a missing folder end with 2, a sentence, and no half file."""
    bench = new_bench(shots=4)
    place = str(bench.folder / "night.sqlite")
    assert run(["export", "--logbook", place, "--out", "night.xls"]) == 2
    assert run(["export", "--logbook", place, "--out", str(tmp_path / "none" / "night.csv")]) == 2
    said = capsys.readouterr().err
    assert ".csv or .parquet" in said
    assert "cannot write" in said
