"""Results written down by hand: everything that is right comes in, everything that is wrong is said at once."""

import csv
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.cli.app import run
from planner.errors import ProblemsFound
from planner.logbook import open_logbook
from planner.night.by_hand import parse_record
from planner.night.csv_cells import cells
from tests.night.nights import NOW_US

GOOD = """# a quiet night (invented)
start_utc,hold_s,phase_deg,atoms_a,atoms_b,switch_collar,setting_lattice_depth [Er],reading_room [K],flags
2026-12-01T20:00:00Z,1,0,6000,4000,near,9,291.2,
2026-12-01T20:01:00Z,1,90,5000,5000,near,9,,"odd,late"
2026-12-01T21:02:00+01:00,1,180,4000,6000,far,9,291.3,
"""


def parsed(text: str) -> object:
    return parse_record(text, "x.csv", name="x", rig="by hand", begins_us=NOW_US)


def test_a_file_becomes_a_night(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The command stores the shots; the logbook hands them over like any others, marked as recorded by hand."""
    file, place = tmp_path / "quiet.csv", str(tmp_path / "book.sqlite")
    file.write_text(GOOD, encoding="utf-8")
    assert run(["record", str(file), "--logbook", place, "--night", "quiet"]) == 0
    assert "3 shots" in capsys.readouterr().out
    with open_logbook(place) as book:
        night = book.night("quiet")
        assert (night.source, night.state, night.why) == ("hand", "done", "recorded by hand")
        columns = book.night_columns(night.id)
        assert book.reading_units(night.id) == {"room": "K"}
        assert book.requests(night.id)[0].sequence_text == GOOD
    np.testing.assert_array_equal(columns["start_s"], [0.0, 60.0, 120.0])
    np.testing.assert_allclose(columns["phase_rad"], [0.0, np.pi / 2, np.pi], rtol=1e-15, atol=0)  # one rounding
    np.testing.assert_array_equal(columns["atoms_a"], [6000.0, 5000.0, 4000.0])
    np.testing.assert_array_equal(columns["reading_room"], [291.2, np.nan, 291.3])
    assert columns["flags"].tolist() == ["", "odd,late", ""]
    assert columns["switch_collar"].tolist() == [-1, -1, 1]  # far comes before near in the alphabet
    assert columns["packet"].tolist() == [0, 0, 1]


def test_an_export_can_be_recorded(tmp_path: Path) -> None:
    """What export writes, record reads: the second export differs from the first in its keys alone."""
    first, place = tmp_path / "first.csv", str(tmp_path / "book.sqlite")
    (tmp_path / "in.csv").write_text(GOOD, encoding="utf-8")
    assert run(["record", str(tmp_path / "in.csv"), "--logbook", place, "--night", "one"]) == 0
    assert run(["export", "one", "--logbook", place, "--out", str(first)]) == 0
    assert run(["record", str(first), "--logbook", place, "--night", "two"]) == 0
    second = tmp_path / "second.csv"
    assert run(["export", "two", "--logbook", place, "--out", str(second)]) == 0
    tables = []
    for file in (first, second):
        with file.open(newline="", encoding="utf-8") as opened:
            tables.append([{**row, "key": ""} for row in csv.DictReader(opened)])
    assert tables[0] == tables[1]
    assert tables[0][1]["setting_lattice_depth [Er]"] == "9.0"


def test_every_problem_is_said_at_once_with_its_place() -> None:
    """Line, column and what was expected, for each of eight mistakes."""
    text = """start_utc,hold_s,phase_deg,atoms_a,atomsb,switch_collar
yesterday,1,0,6000,4000,near
2026-12-01T20:01:00,x,90,nan,5000,
2026-12-01T20:02:00Z,1
"""
    with pytest.raises(ProblemsFound) as caught:
        parsed(text)
    places = [(one.line, one.column, one.where) for one in caught.value.problems]
    assert places == [
        (1, 1, "atoms_b"),
        (1, 36, "atomsb"),
        (2, 1, "start_utc"),
        (3, 1, "start_utc"),
        (3, 21, "hold_s"),
        (3, 26, "atoms_a"),
        (3, 35, "switch_collar"),
        (4, 1, ""),
    ]
    assert caught.value.problems[1].hint == 'did you mean "atoms_b"?'


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "empty"),
        ("# only a remark\n", "empty"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b\n", "no shots"),
        ("hold_s,phase_deg,atoms_a,atoms_b\n1,0,1,1\n", "start_utc or start_s is missing"),
        ("start_s,hold_s,hold_s,phase_deg,atoms_a,atoms_b\n", "twice"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b,setting_depth [furlong]\n", "unknown unit"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b,state\n0,1,0,1,1,lost\n", "done or failed"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b,kind\n0,1,0,1,1,test\n", "measure, warm-up"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b,cell\n0,1,0,1,1,1.5\n", "whole number"),
        ("start_s,hold_s,phase_deg,atoms_a,atoms_b\n0,-1,0,1,1\n", "not negative"),
        (
            "start_s,hold_s,phase_deg,atoms_a,atoms_b,switch_s\n" + "".join(f"{i},1,0,1,1,{i}\n" for i in range(3)),
            "two states",
        ),
    ],
)
def test_what_cannot_be_read_is_refused_with_the_reason(text: str, said: str) -> None:
    """Each kind of mistake has its own words."""
    with pytest.raises(ProblemsFound) as caught:
        parsed(text)
    assert any(said in f"{one.message} {one.hint}" for one in caught.value.problems)


@given(
    row=st.lists(
        st.text(alphabet=st.characters(exclude_characters='\r\n"', exclude_categories=["Cc", "Zl", "Zp", "Zs"]))
    )
)
def test_cells_are_read_as_the_standard_library_reads_them(row: list[str]) -> None:
    """Quoted and plain cells come out as csv.reader gives them, each at its place in the line."""
    line = ",".join(f'"{text}"' if "," in text else text for text in row)
    found = cells(line)
    assert [text for text, _ in found] == (next(csv.reader([line])) if line else [""])
    for text, column in found:
        assert line[column - 1 :].lstrip('"').startswith(text)


def test_quotes_within_quotes() -> None:
    """A doubled quote inside a quoted cell is one quote (RFC 4180, 2.7)."""
    assert cells('"a ""b"", c",d') == [('a "b", c', 1), ("d", 14)]


@given(text=st.text(max_size=300))
def test_no_file_ends_in_a_traceback(text: str) -> None:
    """Whatever a file holds, it is read or refused with problems."""
    with suppress(ProblemsFound):
        parsed("start_s,hold_s,phase_deg,atoms_a,atoms_b\n" + text)
