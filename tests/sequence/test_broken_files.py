"""A hundred and more kinds of broken file, written by thinking of what people do wrong."""

import json
import re
import time
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.cli.check import find_problems

BROKEN = sorted((Path(__file__).parent / "broken").glob("*.toml"))
EXPECT = re.compile(rb"^# expect: line (\d+) ?(.*?)\r?$", re.MULTILINE)


def expected_of(path: Path) -> list[tuple[int, str]]:
    return [(int(line), where.decode()) for line, where in EXPECT.findall(path.read_bytes())]


def test_there_are_a_hundred_kinds() -> None:
    """The collection is as large as it says, and every file says what is expected of the checker."""
    assert len(BROKEN) >= 100
    assert all(expected_of(path) for path in BROKEN)


@pytest.mark.parametrize("path", BROKEN, ids=lambda path: path.stem)
def test_broken_file_is_reported_at_the_right_line(path: Path) -> None:
    """Every expected place is reported; what was expected is said; nothing else on other lines is invented."""
    problems, notes = find_problems(str(path))
    assert notes == ()
    found = {(problem.line, problem.where) for problem in problems}
    for line, where in expected_of(path):
        assert any(at == line and (not where or what == where) for at, what in found), found
    expected_lines = {line for line, _ in expected_of(path)}
    if 0 not in expected_lines and "stages-as-one-table" not in path.stem:
        # one slip must not bury its author in messages about lines that are right
        assert len({line for line, _ in found} - expected_lines) <= 1, found
    for problem in problems:
        assert problem.message
        assert "Traceback" not in problem.message


def test_long_dotted_keys_never_reach_the_toml_parser() -> None:
    """tomllib needs the square of a dotted key's parts, so such a key is refused before it."""
    problems, _ = find_problems(str(Path(__file__).parent / "broken" / "dotted-too-long.toml"))
    assert [problem.message for problem in problems] == ["a dotted key of more than 64 parts"]


@pytest.mark.parametrize("name", ["atom-unknown", "setting-unit-unknown", "two-problems-two-lines", "not-utf8"])
def test_check_command_ends_with_two_and_says_where(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    """`check --json` prints one object with every key; the human form draws a caret under the place."""
    path = Path(__file__).parent / "broken" / f"{name}.toml"
    assert run(["check", str(path), "--json"]) == 2
    said = json.loads(capsys.readouterr().out)
    assert said["ok"] is False
    assert {key for row in said["problems"] for key in row} == {"file", "line", "column", "where", "message", "hint"}
    assert run(["check", str(path)]) == 2
    shown = capsys.readouterr().err
    assert "^" in shown
    for row in said["problems"]:
        assert f"{row['line']}:{row['column']}" in shown


def test_caret_stands_under_the_place(capsys: pytest.CaptureFixture[str]) -> None:
    """The caret's column is that of the wrong character, also inside arithmetic."""
    path = Path(__file__).parent / "broken" / "stage-length-setting-misspelt.toml"
    run(["check", str(path)])
    lines = capsys.readouterr().err.splitlines()
    caret = next(line for line in lines if line.strip().endswith("^"))
    source = lines[lines.index(caret) - 1]
    assert source[caret.index("^") :].startswith('holt"')


def test_a_trillion_shots_are_refused_by_counting(tmp_path: Path) -> None:
    """A file that asks for 1e12 shots and more is refused before anything of that size exists (generous clock)."""
    base = (Path(__file__).parent.parent.parent / "sequences" / "reference-night-a.toml").read_text(encoding="utf-8")
    path = tmp_path / "huge.toml"
    path.write_text(base.replace("repeats = 22", "repeats = 1000000").replace("count = 12", "count = 150000"))
    began = time.process_time()
    problems, _ = find_problems(str(path))
    assert any("1,200,000,000,000 shots" in problem.message for problem in problems)
    # source: common practice, no source; a plan of that size would need minutes and terabytes if it were built
    assert time.process_time() - began < 5.0
