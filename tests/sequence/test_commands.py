"""The commands init, check, compile and timeline, as a person types them."""

import csv
import json
import os
import subprocess
import sys
import xml.etree.ElementTree as ET
from pathlib import Path

import click
import numpy as np
import pytest
from click.testing import CliRunner
from pyarrow import parquet

from planner.cli import init as init_module
from planner.cli.app import run
from planner.sequence.drawing import NOT_TO_SCALE, format_time, lay_out, text_drawing
from planner.sequence.starter import Answers, starter_rig, starter_sequence
from tests.sequence.helpers import EXAMPLES, SEQUENCES, compiled, compiled_file
from tests.test_start_up import loaded_by

NIGHT_A = str(SEQUENCES / "reference-night-a.toml")


@pytest.mark.parametrize("path", [*EXAMPLES, SEQUENCES / "gallery-rig.toml"], ids=lambda path: path.stem)
def test_every_shipped_file_is_free_of_problems(path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """`check` ends with 0 on all examples and on the rig file."""
    assert run(["check", str(path), "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == {"ok": True, "problems": []}


def test_check_loads_no_heavy_library() -> None:
    """`check` of a normal file needs numpy alone: that keeps it quick."""
    loaded = loaded_by(f"from planner.cli.app import run\nrun(['check', {NIGHT_A!r}])")
    assert loaded.isdisjoint({"scipy", "matplotlib", "sqlalchemy", "httpx", "pyarrow", "pydantic", "pint", "rich"})


def test_compile_says_what_will_be_run(capsys: pytest.CaptureFixture[str]) -> None:
    """The summary's numbers, as JSON and for people."""
    assert run(["compile", NIGHT_A, "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert (said["shots"], said["packets"], said["cells"], said["timelines"]) == (2112, 264, 12, 48)
    assert run(["compile", NIGHT_A]) == 0
    assert "2,112" in capsys.readouterr().out


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_compile_writes_all_shots(suffix: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Both kinds of file hold every shot with the columns of the table, and no half-written file stays behind."""
    out = tmp_path / f"shots.{suffix}"
    assert run(["compile", NIGHT_A, "--out", str(out)]) == 0
    capsys.readouterr()
    table = compiled_file(Path(NIGHT_A)).table
    if suffix == "csv":
        rows = list(csv.DictReader(out.read_text(encoding="utf-8").splitlines()))
        hold = np.array([float(row["hold_s"]) for row in rows])
        kick = np.array([int(row["switch_kick"]) for row in rows])
    else:
        columns = parquet.read_table(out)
        hold, kick = columns["hold_s"].to_numpy(), columns["switch_kick"].to_numpy()
    np.testing.assert_array_equal(hold, table.hold_s)
    np.testing.assert_array_equal(kick, table.switches["kick"])
    assert [path.name for path in tmp_path.iterdir()] == [out.name]


@pytest.mark.parametrize(
    ("args", "says"),
    [
        (["compile", NIGHT_A, "--out", "shots.txt"], ".csv or .parquet"),
        (["compile", NIGHT_A, "--out", "/no/such/folder/shots.csv"], "cannot write"),
        (["compile", "no-such-file.toml"], "no such sequence file"),
        (["timeline", NIGHT_A, "--shot", "2112"], "shots 0 to 2111"),
        (["timeline", NIGHT_A, "--out", "x.bmp"], ".svg or .png"),
        (["timeline", NIGHT_A, "--out", "/no/such/folder/x.svg"], "cannot write"),
        (["check", str(SEQUENCES)], "cannot be read"),
    ],
)
def test_wrong_requests_are_answered_with_two(args: list[str], says: str, capsys: pytest.CaptureFixture[str]) -> None:
    """What the user can mend ends with 2 and says what to mend."""
    assert run(args) == 2
    assert says in capsys.readouterr().err


def test_timeline_in_the_terminal_shows_pulses_beside_a_long_hold(capsys: pytest.CaptureFixture[str]) -> None:
    """A 40 us pulse and a minute of hold stand in one drawing, with true lengths and a word about the scale."""
    assert run(["timeline", NIGHT_A, "--shot", "2111"]) == 0
    said = capsys.readouterr().out
    assert "40 us" in said
    assert "64 s" in said
    assert NOT_TO_SCALE in said


def test_a_drawing_keeps_every_span_and_its_length() -> None:
    """Spans add up to the shot; each is at least one character wide; widths grow with length."""
    document = compiled().timelines.document(2)
    drawing = lay_out(document)
    assert sum(span.length_s for span in drawing.spans) == pytest.approx(document["ticks"] * 1e-8, rel=1e-12)
    by_length = sorted(drawing.spans, key=lambda span: span.length_s)
    assert [span.weight for span in by_length] == sorted(span.weight for span in by_length)
    for width in (20, 80, 200):
        rows = text_drawing(drawing, width).split("\n")[: len(drawing.units)]
        assert len({len(row) for row in rows}) == 1
        assert all(len(row) >= len(drawing.spans) for row in rows)
    ramp = next(span for span in drawing.spans if span.levels["lattice"] == (0.0, 10.0))
    assert ramp.length_s == pytest.approx(0.01, rel=1e-9)


@pytest.mark.parametrize(
    ("seconds", "text"), [(64, "64 s"), (1, "1 s"), (0.25, "250 ms"), (4e-5, "40 us"), (1e-8, "10 ns"), (0, "0 ns")]
)
def test_lengths_are_written_for_people(seconds: float, text: str) -> None:
    """A length has the unit that makes its number easy."""
    assert format_time(seconds) == text


def test_timeline_pictures_are_real_and_repeatable(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The SVG is well-formed, holds the span lengths as text, and is the same twice; the PNG is a PNG."""
    for name in ("a.svg", "b.svg", "c.png"):
        assert run(["timeline", NIGHT_A, "--shot", "2111", "--out", str(tmp_path / name)]) == 0
    capsys.readouterr()
    text = (tmp_path / "a.svg").read_text(encoding="utf-8")
    ET.fromstring(text)
    assert "40 us" in text
    assert text == (tmp_path / "b.svg").read_text(encoding="utf-8")
    # source: PNG specification, section 5.2 (signature), from memory
    assert (tmp_path / "c.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_init_writes_files_that_check_accepts_and_never_overwrites(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A fresh pair is right as written; a second init refuses and changes nothing."""
    assert run(["init", str(tmp_path), "--json"]) == 0
    written = json.loads(capsys.readouterr().out)["written"]
    assert [Path(name).name for name in written] == ["rig.toml", "sequence.toml"]
    assert run(["check", str(tmp_path / "sequence.toml")]) == 0
    assert run(["check", str(tmp_path / "rig.toml")]) == 0
    (tmp_path / "rig.toml").unlink()
    (tmp_path / "sequence.toml").write_text("mine", encoding="utf-8")
    assert run(["init", str(tmp_path), "--yes"]) == 2
    assert "never overwrites" in capsys.readouterr().err
    assert (tmp_path / "sequence.toml").read_text(encoding="utf-8") == "mine"
    assert not (tmp_path / "rig.toml").exists()


def test_questions_are_asked_again_until_the_answer_can_be_used() -> None:
    """A person's answers go through; a time without a unit is asked for again, saying why."""
    given: list[Answers] = []

    @click.command()
    def asks() -> None:
        given.append(init_module._ask())

    typed = ["first try", "gallery", "Cs-133", "5", "500 ms", "10 s", "6", "", "", "http://127.0.0.1:9000"]
    done = CliRunner().invoke(asks, input="\n".join(typed) + "\n")
    assert done.exit_code == 0, done.output
    assert "found no unit" in done.output
    assert given == [
        Answers(
            title="first try",
            rig_name="gallery",
            atom="Cs-133",
            shortest="500 ms",
            longest="10 s",
            holds=6,
            link="http://127.0.0.1:9000",
        )
    ]


def test_a_plain_terminal_gets_plain_characters() -> None:
    """Where the terminal knows ASCII alone the drawing is ASCII, not a traceback."""
    done = subprocess.run(
        [sys.executable, "-m", "planner", "timeline", NIGHT_A],
        capture_output=True,
        env={**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"},
        check=False,
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    assert "#" in done.stdout.decode("ascii")


def test_answers_go_into_the_files_and_are_proved_first() -> None:
    """Odd titles are quoted; answers that do not fit together are refused before anything is written."""
    answers = Answers(title='a "quoted" \\ title', holds=3, phases=3, shortest="100 ms", longest="1 min")
    init_module._prove(starter_rig(answers), starter_sequence(answers, "rig.toml"))
    wrong = Answers(shortest="5 s", longest="1 s")
    with pytest.raises(init_module.InputError, match="do not fit together"):
        init_module._prove(starter_rig(wrong), starter_sequence(wrong, "rig.toml"))
