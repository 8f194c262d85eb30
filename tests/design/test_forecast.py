"""Forecasts against rehearsals and against information worked out otherwise."""

import json
from dataclasses import replace
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from planner.cli.app import run
from planner.cli.spreading import spread_over
from planner.design.forecast.blocks import in_blocks
from planner.design.forecast.curve import decay_errors, known_to, modulation_error
from planner.design.forecast.rehearsal import rehearse_coherence
from planner.design.forecast.whole_nights import rehearse_signal
from planner.errors import InputError
from tests.design.forecasting import plan
from tests.design.nights import SEQUENCES

TRIALS = 2000
# an RMS of 2,000 normal numbers is known to 1.6 %: three standard errors, and the 3 % that the forecast may be off
BAR = 3 / np.sqrt(2 * TRIALS) + 0.03


def test_coherence_times_stray_as_forecast() -> None:
    """2,000 nights of the demonstration: the RMS error of the coherence time is the forecast's."""
    here = plan("hold-scan")
    found = in_blocks(partial(rehearse_coherence, rig=here.known, night=here.packets), TRIALS, 3)
    error = decay_errors(here.known, here.progress)["coherence time"][-1]
    assert np.sqrt(np.mean((found - here.known.coherence_s) ** 2)) == pytest.approx(error, rel=BAR)


@pytest.mark.parametrize("name", ["hold-scan", "signal"])
def test_signals_stray_as_forecast(name: str) -> None:
    """2,000 nights along the real order, drift drawn: the RMS error of the signal is the forecast's, drift included."""
    here = plan(name)
    task = partial(rehearse_signal, rig=here.known, scale=here.scale, night=here.night, signal=0.0)
    found = in_blocks(task, TRIALS, 5)
    error = here.forecasts()["signal"].error[-1]
    assert np.sqrt(np.mean(found**2)) == pytest.approx(error, rel=BAR)


def test_without_drift_the_night_is_better() -> None:
    """The slow switch of the demonstration lets drift through: without it the error falls, and the forecast's too."""
    here = plan("hold-scan")
    still = replace(
        here.night,
        **{
            kind: replace(here.night.phase, rate=0.0, periods_s=(), amplitudes=())
            for kind in ("additive", "phase", "contrast", "acceleration")
        },
    )
    task = partial(rehearse_signal, rig=here.known, scale=here.scale, night=still, signal=0.0)
    found = in_blocks(task, TRIALS, 5)
    assert np.sqrt(np.mean(found**2)) < 0.9 * here.forecasts()["signal"].error[-1]


def test_a_signal_is_found_where_it_is() -> None:
    """A small true signal comes out at its size: the fit's slope is that of the fringe."""
    here = plan("signal")
    true = 1e-7
    found = rehearse_signal(np.random.default_rng(1), here.known, here.scale, here.night, true, TRIALS)
    assert found.mean() == pytest.approx(true, abs=4 * found.std() / np.sqrt(TRIALS) + 0.02 * true)


def test_the_same_numbers_on_any_number_of_cores() -> None:
    """One process and two give the same trials, bit by bit."""
    here = plan("hold-scan")
    task = partial(rehearse_coherence, rig=here.known, night=here.packets)
    alone = in_blocks(task, 1100, 7)
    with spread_over(2, None) as spread:
        together = in_blocks(task, 1100, 7, spread)
    np.testing.assert_array_equal(alone, together)


def test_information_adds_up() -> None:
    """Variances of combinations are those of the inverse information matrix, worked out for one time alone."""
    rng = np.random.default_rng(2)
    information, slopes = rng.uniform(1, 5, 6), rng.standard_normal((6, 3))
    counts, wanted = rng.integers(0, 9, (4, 6)), np.eye(3)[:, 1:]
    counts[0] = 0
    found = known_to(information, slopes, counts, wanted)
    assert np.isinf(found[0])
    for t in range(1, 4):
        matrix = sum(n * i * np.outer(s, s) for n, i, s in zip(counts[t], information, slopes, strict=True))
        expected = np.trace(wanted.T @ np.linalg.inv(matrix) @ wanted)
        assert found[t] == pytest.approx(expected, rel=1e-9)


def test_a_modulations_error_is_a_fits() -> None:
    """The forecast depth error is that of least squares through made-up contrasts with the same information."""
    here = plan("revival")
    period = here.sequence.goal.details["period_s"]
    error = modulation_error(here.known, here.progress, period)[-1]
    hold = here.progress.hold_s
    contrast = here.known.contrast_at(hold)
    one = replace(here.known, phases=int(here.progress.shots[0]), states=1)
    sigma = 1 / np.sqrt(here.progress.counts[-1] * one.contrast_information(hold))
    turn = 2 * np.pi * hold / period
    design = np.stack([np.ones(len(hold)), hold, np.cos(turn), np.sin(turn)], axis=1) * (contrast / sigma)[:, None]
    rng = np.random.default_rng(4)
    fitted = np.linalg.lstsq(design, rng.standard_normal((len(hold), 4000)), rcond=None)[0]
    assert error == pytest.approx(np.sqrt(np.mean(fitted[2:] ** 2)), rel=0.05)


def test_errors_only_fall() -> None:
    """More packets never tell less: every forecast falls through the night, and lies in its band."""
    for name in ("hold-scan", "signal", "revival"):
        for one in plan(name).forecasts().values():
            known = np.isfinite(one.error)
            assert (np.diff(one.error[known]) <= 1e-12 * one.error[known][:-1]).all()
            assert (one.low[known] <= one.error[known]).all()
            assert (one.error[known] <= one.high[known]).all()


def test_goals_have_their_own_quantities() -> None:
    """A search for a revival is forecast by the depth it would see."""
    assert "modulation depth" in plan("revival").forecasts()


def test_the_command_rehearses(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The command's JSON has both rehearsed quantities beside their forecasts, and a picture."""
    picture = tmp_path / "forecast.png"
    file = str(SEQUENCES / "hold-scan.toml")
    assert run(["forecast", file, "--trials", "600", "--json", "--picture", str(picture)]) == 0
    found = json.loads(capsys.readouterr().out)
    assert [one["quantity"] for one in found["rehearsals"]] == ["coherence time", "signal"]
    for one in found["rehearsals"]:
        assert one["rms_error"] == pytest.approx(one["forecast_error"], rel=0.15)
    assert picture.stat().st_size > 10_000


def test_a_cluster_that_is_not_there() -> None:
    """No scheduler at the address: that is said, with what an address looks like."""
    pytest.importorskip("distributed")
    with pytest.raises(InputError, match="no Dask scheduler answers"), spread_over(1, "tcp://127.0.0.1:9"):
        pass


@pytest.mark.filterwarnings("ignore")  # the cluster's own event loop warns while it closes
def test_a_cluster_gives_the_same_numbers() -> None:
    """A cluster of one worker in this process gives the trials that one core gives."""
    distributed = pytest.importorskip("distributed")
    here = plan("hold-scan")
    task = partial(rehearse_coherence, rig=here.known, night=here.packets)
    with (
        distributed.LocalCluster(
            n_workers=1, threads_per_worker=1, processes=False, dashboard_address=None, host="127.0.0.1", protocol="tcp"
        ) as cluster,
        spread_over(1, cluster.scheduler_address) as spread,
    ):
        found = in_blocks(task, 700, 7, spread)
    np.testing.assert_array_equal(found, in_blocks(task, 700, 7))


def test_no_repeat_fits_the_night(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A sequence that says nothing of its rig cannot be forecast, and the keys that are missing are named."""
    assert run(["forecast", str(SEQUENCES / "reference-night-b.toml")]) == 2
    assert "expected.contrast" in capsys.readouterr().err
