"""`nightfringe forecast`: what it says, its JSON and picture, and how it answers what cannot be."""

import json
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.cli.forecast_words import percent, readable
from tests.design.test_order_command import short_file

SHORT = ("repeats = 17", "repeats = 4")


def said(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> str:
    assert run(["forecast", *arguments, "--quick"]) == 0
    return capsys.readouterr().out


def refused(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> str:
    assert run(["forecast", *arguments, "--quick"]) == 2
    return " ".join(capsys.readouterr().err.split())


def test_json_holds_the_goals_quantity_first_and_does_not_depend_on_the_cores(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = short_file(tmp_path, "hold-scan.toml", SHORT)
    picture = tmp_path / "forecast.svg"
    one = json.loads(said([file, "--json", "--trials", "700", "--picture", str(picture)], capsys))
    assert one["quantities"][0]["name"] == "coherence time"
    assert {"name", "unit", "time_s", "error", "low", "high"} == set(one["quantities"][0])
    assert one["target"]["quantity"] == "coherence time"
    assert one["target"]["target"] == pytest.approx(1.25)
    assert 0 < one["target"]["reached_h"] <= one["hours"]
    assert one["alternatives"][0]["hours_ratio"] < 1
    assert one["widened_by_drift"]["coherence time"] > 0
    rehearsed = {each["name"]: each for each in one["rehearsals"]["quantities"]}
    assert set(rehearsed) == {"coherence time", "population lifetime", "signal"}
    for each in rehearsed.values():
        assert each["rms_error"] == pytest.approx(each["forecast_error"], rel=0.15)
    assert "Expected error of the coherence time" in picture.read_text(encoding="utf-8")
    two = json.loads(said([file, "--json", "--trials", "700", "--jobs", "2"], capsys))
    assert two["rehearsals"] == one["rehearsals"]


def test_words_name_target_drift_and_what_else_would_do(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = short_file(tmp_path, "signal.toml", ("repeats = 125", "repeats = 10"))
    text = said([file], capsys)
    assert "error of the signal (nm/s^2)" in text
    assert "target: signal to 35 nm/s^2: not reached in this night; about" in text
    assert "drift widens it by" in text
    assert "no nearby plan is better" in text or "fewer hours for the same error" in text


def test_a_night_too_short_for_one_repeat_names_hours_and_holds_that_fit(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = short_file(tmp_path, "hold-scan.toml", SHORT)
    text = refused([file, "--hours", "0.1"], capsys)
    assert "too short for one repeat of this plan" in text
    assert "--hours 0.56 or more" in text
    # four shots at each hold, in both states of the collar, 3 s of each shot beside the hold
    assert (0.5 + 4 + 10 + 18 + 4 * 3) * 8 < 360 < (0.5 + 4 + 10 + 18 + 28 + 5 * 3) * 8
    assert "keep only the shortest 4 of the 8 holds, up to 18 s" in text
    enough = said([file, "--hours", "0.56"], capsys)
    assert "0.56 h for the goal coherence" in enough
    assert "packets fit" in enough


def test_a_target_that_no_night_reaches_names_one_that_works(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    changes = (
        ("repeats = 80", "repeats = 8"),
        ('scale_factor_error = "0.2 %"', 'scale_factor_error = "20 %", signal = "400 nm/s^2"'),
    )
    file = short_file(tmp_path, "systematics.toml", *changes)
    text = refused([file], capsys)
    assert "no night reaches 6e-08 m/s^2" in text
    assert "Set goal.target above 8e-08 m/s^2" in text
    easier = short_file(tmp_path, "systematics.toml", *changes, ('target  = "60 nm/s^2"', 'target  = "120 nm/s^2"'))
    assert "target: signal, all told to 120 nm/s^2" in said([easier], capsys)


CANNOT = {
    "ladder without a parity": (
        "hold-scan.toml",
        (
            SHORT,
            ('kind   = "coherence"\nwanted = "collar"\ntarget = "5 %"', 'kind = "ladder"\ndetails = { risk = 0.01 }'),
        ),
        'needs the parity that carries the signal: goal.wanted = ["collar"]',
    ),
    "one hold for a coherence time": (
        "hold-scan.toml",
        (("hold = [0.5, 4, 10, 18, 28, 40, 55, 70]", "hold = [10]"),),
        "needs 2 different holds; this plan has 1. Sweep the hold over [2.5, 25] s",
    ),
    "two phases for a contrast": (
        "hold-scan.toml",
        (SHORT, ("phases  = [0, 90, 180, 270]", "phases  = [-90, 90]")),
        "fringe.phases = [0, 90, 180, 270]",
    ),
    "a plateau above the contrast": (
        "hold-scan.toml",
        (
            SHORT,
            ('kind   = "coherence"', 'kind   = "plateau"\ndetails = { plateau = 0.9 }'),
            ('target = "5 %"\n', ""),
        ),
        "must lie between 0 and the contrast at short hold, 0.62: take 0.062",
    ),
    "nothing known of the rig": ("reference-night-a.toml", (("repeats = 22", "repeats = 2"),), "expected.contrast"),
}


@pytest.mark.parametrize("case", CANNOT)
def test_what_cannot_be_told_says_what_to_change(case: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    name, changes, words = CANNOT[case]
    assert words in refused([short_file(tmp_path, name, *changes)], capsys)


def test_a_signal_goal_without_a_parity_is_refused_with_its_place(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = short_file(tmp_path, "signal.toml", ('wanted  = ["collar", "kick"]\n', ""))
    assert "needs the switches that carry the signal" in refused([file], capsys)


def test_hours_too_few_to_know_name_the_hours_that_do(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """One repeat would fit, but by then the order has not shown both states of the collar."""
    file = short_file(
        tmp_path,
        "signal.toml",
        ("repeats = 125", "repeats = 10"),
        ('wanted  = ["collar", "kick"]', 'wanted = "collar"'),
    )
    text = refused([file, "--hours", "0.08"], capsys)
    assert "the signal cannot be told yet" in text
    hours = text.split("--hours ")[1].split()[0]
    assert "the goal signal" in said([file, "--hours", hours], capsys)


def test_dask_needs_trials_and_no_jobs(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = short_file(tmp_path, "hold-scan.toml", SHORT)
    assert "give --trials with it" in refused([file, "--dask", "tcp://127.0.0.1:8786"], capsys)


def test_help_warns_of_untrusted_networks(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(["forecast", "--help"]) == 0
    assert "trusted networks only" in " ".join(capsys.readouterr().out.split())


def test_readable_numbers() -> None:
    assert readable(3.5e-8, "m/s^2") == "35 nm/s^2"
    assert readable(0.0127, "relative") == "1.27 %"
    assert readable(0.151, "s") == "0.151 s"
    assert [percent(one) for one in (1.4, 0.039, 0.1)] == ["140", "3.9", "10"]
