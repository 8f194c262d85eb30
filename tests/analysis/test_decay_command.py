"""`nightfringe decay` on real logbooks: strict JSON, every shape, the constant over nights, plain words."""

import json
from pathlib import Path

import pytest

from planner.analysis.night_decay import CurveDecay, constant_of, decays_of
from planner.cli import decay as decay_command
from planner.cli.app import run
from planner.plots import shapes, style
from planner.resources import sequences_folder
from planner.sequence.reader import read_sequence
from tests.analysis.stand_in_nights import play, scene
from tests.analysis.test_results_command import logbook  # noqa: F401 - a fixture


@pytest.fixture(scope="module")
def curves() -> tuple[CurveDecay, ...]:
    """The curves of two nights on the stand-in rig, with a search for a modulation."""
    sequence = read_sequence(sequences_folder() / "hold-scan.toml")
    found = []
    for seed in (1, 2):
        found += decays_of(play(scene(), seed), {0: sequence}, cut_flags=["unlocked"], search=True)
    return tuple(found)


def test_one_hold_says_what_it_cannot(logbook: str, capsys: pytest.CaptureFixture[str]) -> None:  # noqa: F811
    """One hold has no decay, no lifetime and no constant, each with its reason."""
    assert run(["decay", "--logbook", logbook, "--json", "--modulation"]) == 0
    found = json.loads(capsys.readouterr().out)
    (curve,) = found["nights"][0]["curves"]
    assert curve["fits"] == []
    assert "measured at 1 hold" in curve["why_no_coherence"]
    assert "no fall of contrast" in curve["why_no_modulation"]
    assert "two at least" in found["why_no_constant"]
    assert run(["decay", "--logbook", logbook]) == 0
    assert "No coherence time" in capsys.readouterr().out


def test_a_period_needs_a_unit(logbook: str, capsys: pytest.CaptureFixture[str]) -> None:  # noqa: F811
    """A period without a unit is refused with what is expected."""
    assert run(["decay", "--logbook", logbook, "--period", "7"]) == 2
    assert 'expected a unit such as "s"' in capsys.readouterr().err


def test_every_shape_of_a_night(curves: tuple[CurveDecay, ...]) -> None:
    """All four shapes are fitted and scored, the one that `results` would report first; no modulation is found."""
    for curve in curves:
        assert curve.fits[0].shape.name == "two-classes"
        assert {fit.shape.name for fit in curve.fits} == {one.shape.name for one in curve.scores}
        assert len(curve.fits) == 4
        assert curve.modulation is not None
        assert curve.modulation.p > 0.001
        assert (curve.depth_er, curve.separation_m) == (9.0, pytest.approx(4e-6))
        words = " ".join(decay_command.plain_words(curve))
        assert "described best by two exponentials" in words
        assert "No modulation stands out" in words


def test_two_nights_have_one_constant(curves: tuple[CurveDecay, ...], tmp_path: Path) -> None:
    """The constant over two nights is the 1/e time times 9 Er times 4 um, and is drawn and said."""
    constant, why = constant_of(curves)
    assert why == ""
    assert constant is not None
    times = [curve.fits[0].time_s for curve in curves]
    assert min(times) < constant.constant / (9 * 4e-6) < max(times)
    assert "Coherence constant" in decay_command.constant_words(constant, why)[0]
    (curve, _) = curves
    assert curve.contrast is not None
    whole = shapes.figure(curve.contrast, curve.fits, curve.modulation, "Night")
    assert style.save(whole, str(tmp_path / "shapes.png")).stat().st_size > 10_000
