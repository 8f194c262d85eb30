"""Rehearsed nights against the forecast's formulas, with and without drift; the same numbers on any number of cores.

Tolerances: the RMS of n trials has a relative standard error of 1 / sqrt(2 n); four of them, and 1 % for what the
formulas leave out (second order in the noise, the bias of drift inside packets).
"""

from dataclasses import replace
from functools import partial
from importlib.util import find_spec

import numpy as np
import pytest

from planner.arrays import FloatArray
from planner.cli import workers
from planner.cli.workers import spread_over
from planner.design.drift import Prior, added_variance
from planner.design.forecast.blocks import BLOCK, in_blocks
from planner.design.forecast.curve import best_signal_s, errors_of, plan_of
from planner.design.forecast.decays import time_scale_errors
from planner.design.forecast.progress import progress_of, times_of
from planner.design.forecast.rehearsal import Rehearsal, draw_drift
from planner.errors import InputError
from tests.design.forecast_nights import Made, along, hold_scan, ordered, with_contrast_drift

TRIALS = 3000
SLACK = 4 / np.sqrt(2 * TRIALS) + 0.01


def short_scan() -> Made:
    """Eight holds along a real order."""
    return along(ordered("hold-scan.toml", ("repeats = 17", "repeats = 5")))


def short_signal() -> Made:
    """One hold, drift of every kind but contrast, a slow and a fast switch, along a real order."""
    return along(ordered("signal.toml", ("repeats = 125", "repeats = 10")))


@pytest.mark.parametrize("drifting", [False, True])
def test_time_scales_stray_as_forecast(drifting: bool) -> None:
    """RMS error of coherence time and lifetime over rehearsed nights of a real order."""
    night, rig, _ = short_scan()
    night = night if drifting else night.without_drift()
    found = in_blocks(Rehearsal(night=night, rig=rig).time_scales, TRIALS, 11)
    expected = time_scale_errors(rig, progress_of(night, times_of(night)))
    for column, (name, truth) in enumerate(
        (("coherence time", rig.coherence_s), ("population lifetime", rig.lifetime_s))
    ):
        rms = np.sqrt(np.mean((found[:, column] - truth) ** 2))
        assert rms == pytest.approx(expected[name][-1], rel=SLACK + 0.02 * drifting), name
        assert abs(found[:, column].mean() - truth) < (0.08 + 0.2 * drifting) * expected[name][-1]


def test_contrast_drift_moves_the_coherence_time_as_forecast() -> None:
    """A drift common to the packets does not average: the covariance between holds, against rehearsals."""
    night, rig, _ = hold_scan()
    # short holds, where a drift of half a shot's noise is small beside the contrast
    night = with_contrast_drift(night).until(6 * 3600)
    progress = progress_of(night, times_of(night))
    expected = time_scale_errors(rig, progress)["coherence time"][-1]
    steady = time_scale_errors(rig, replace(progress, common=None))["coherence time"][-1]
    assert expected > 1.05 * steady
    found = in_blocks(Rehearsal(night=night, rig=rig).time_scales, 2000, 5)[:, 0]
    assert found.std() == pytest.approx(expected, rel=4 / np.sqrt(4000) + 0.02)


@pytest.mark.parametrize("make", [short_scan, short_signal])
@pytest.mark.parametrize("drifting", [False, True])
def test_signals_stray_as_forecast(make, drifting: bool) -> None:  # type: ignore[no-untyped-def]
    """RMS error of the signal over rehearsed nights of a real order, slow and fast switches."""
    night, rig, sequence = make()
    night = night if drifting else night.without_drift()
    plan = plan_of(sequence, night, rig, times_of(night))
    expected = errors_of(plan, rig)["signal"][-1]
    used = night.until(best_signal_s(plan, rig))
    found = in_blocks(partial(Rehearsal(night=used, rig=rig).signals, signal=2e-9), TRIALS, 3)[:, 0]
    assert np.sqrt(np.mean((found - 2e-9) ** 2)) == pytest.approx(expected, rel=SLACK)
    assert abs(found.mean() - 2e-9) < 4 * expected / np.sqrt(TRIALS)


def test_drawn_drift_has_the_variance_of_its_prior() -> None:
    """Weighted sums of drawn paths, against the exact added variance."""
    rng = np.random.default_rng(2)
    time = np.cumsum(rng.uniform(1.0, 50.0, 60))
    prior = Prior(rate=0.01, periods_s=(700.0, 90.0), amplitudes=(2.0, 0.7))
    weights = rng.standard_normal((3, 60))
    paths = draw_drift(rng, prior, time, 20_000)
    assert (paths @ weights.T).var(axis=0) == pytest.approx(added_variance(weights, time, prior), rel=0.05)


def walk(rng: np.random.Generator, trials: int) -> FloatArray:
    return rng.standard_normal((trials, 2))


def test_blocks_are_joined_in_order_and_never_split_differently() -> None:
    """More trials change nothing of the earlier whole blocks, and results do not depend on who ran what."""
    many = in_blocks(walk, 3 * BLOCK + 17, 5)
    assert many.shape == (3 * BLOCK + 17, 2)
    assert np.array_equal(in_blocks(walk, 2 * BLOCK, 5), many[: 2 * BLOCK])

    def backwards(function, blocks):  # type: ignore[no-untyped-def]
        return list(reversed([function(block) for block in reversed(blocks)]))

    assert np.array_equal(in_blocks(walk, 3 * BLOCK + 17, 5, backwards), many)


def test_one_and_two_workers_give_the_same_numbers() -> None:
    night, rig, _ = along(ordered("signal.toml", ("repeats = 125", "repeats = 10")))
    task = partial(Rehearsal(night=night, rig=rig).signals, signal=1e-8)
    with spread_over(1, None) as alone:
        here = in_blocks(task, 2 * BLOCK + 10, 4, alone)
    with spread_over(2, None) as two:
        there = in_blocks(task, 2 * BLOCK + 10, 4, two)
    assert np.array_equal(here, there)


@pytest.mark.skipif(find_spec("distributed") is not None, reason="Dask is installed here")
def test_without_dask_the_message_says_what_to_install() -> None:
    with pytest.raises(InputError, match=r"pip install 'nightfringe\[cluster\]'"), spread_over(1, "tcp://127.0.0.1:1"):
        pass


@pytest.mark.skipif(find_spec("distributed") is None, reason="Dask is an extra")
def test_a_cluster_gives_the_same_numbers_and_no_scheduler_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    """A real scheduler and worker in this process; then an address where nobody listens."""
    import distributed

    with (
        distributed.LocalCluster(
            n_workers=1,
            threads_per_worker=2,
            processes=False,
            protocol="tcp://",
            dashboard_address=None,
            host="127.0.0.1",
        ) as cluster,
        spread_over(1, cluster.scheduler_address) as spread,
    ):
        there = in_blocks(walk, 2 * BLOCK + 3, 9, spread)
    assert np.array_equal(there, in_blocks(walk, 2 * BLOCK + 3, 9))
    monkeypatch.setattr(workers, "ANSWER_S", 1.0)
    with pytest.raises(InputError, match="no Dask scheduler answers"), spread_over(1, "tcp://127.0.0.1:1"):
        pass
