"""Forecast errors: against Fisher information worked out numerically, against time, with drift, and when unknown."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import ATOM_SCATTER, Knowledge
from planner.design.forecast.curve import Forecast, Plan, errors_of, forecasts, plan_of
from planner.design.forecast.decays import level_error, modulation_error, time_scale_errors, worst_contrast_error
from planner.design.forecast.progress import Progress, times_of
from planner.design.forecast.target import alternatives, drift_share, reached, target_of
from planner.design.ordering import quality_of
from planner.errors import PlanImpossible
from tests.design.forecast_nights import Made, along, hold_scan, night_a, night_b, ordered, shuffled

Curve = Callable[[FloatArray, FloatArray], FloatArray]  # of holds and parameters
# weak fringes and many atoms: a shot's noise hardly changes over the fringe, and every packet still shows its fringe
RIG = Knowledge(
    contrast=0.15,
    coherence_s=20.0,
    atoms=2e6,
    lifetime_s=30.0,
    excess=1.5,
    dead_s=3.0,
    shortest_s=0.1,
    longest_s=70.0,
    phases=4,
    states=1,
    spread={},
)


def progress(hold: FloatArray, packets: int = 20, shots: int = 4) -> Progress:
    """An undisturbed night at one time."""
    return Progress(
        time_s=np.array([3600.0]),
        hold_s=hold,
        counts=np.full((1, len(hold)), packets),
        shots=np.full(len(hold), shots),
        inside=np.zeros(len(hold)),
    )


def fringe_variance(contrast: float, atoms: float, shots: int = 4, excess: float = 1.5) -> float:
    """Variance of one packet's contrast, offset and phase free: the inverse of a numeric Fisher matrix.

    Source: Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993), from memory; normal noise.
    """
    theta, out = 2 * np.pi * np.arange(shots) / shots, []
    for start in np.linspace(0, np.pi, 8, endpoint=False) + 0.1:
        centre = np.array([0.5, contrast, start])

        def mean(at: FloatArray, theta: FloatArray = theta) -> FloatArray:
            return np.asarray(at[0] + at[1] / 2 * np.cos(theta + at[2]))

        y = mean(centre)
        step = 1e-5
        slopes = np.stack([(mean(centre + step * e) - mean(centre - step * e)) / (2 * step) for e in np.eye(3)], axis=1)
        fisher = slopes.T @ (slopes / (excess * y * (1 - y) / atoms)[:, None])
        out.append(np.linalg.inv(fisher)[1, 1])
    return float(np.mean(out))


def numeric_covariance(curve: Curve, at: FloatArray, hold: FloatArray, variance: FloatArray) -> FloatArray:
    """Covariance of a curve's parameters from independent points: slopes by central differences."""
    step = 1e-5 * np.maximum(np.abs(at), 1e-3)
    slopes = np.stack(
        [(curve(hold, at + d) - curve(hold, at - d)) / (2 * d.sum()) for d in np.diag(step)],
        axis=1,
    )
    return np.linalg.inv(slopes.T @ (slopes / variance[:, None]))


def contrast_variance(hold: FloatArray, contrast: FloatArray, packets: int = 20) -> FloatArray:
    atoms = RIG.atoms * np.exp(-hold / RIG.lifetime_s)
    return np.array([fringe_variance(c, n) / packets for c, n in zip(contrast, atoms, strict=True)])


HOLDS = np.array([0.5, 3.0, 8.0, 15.0, 25.0, 40.0])


def test_time_scales_against_numeric_fisher_information() -> None:
    """Coherence time and lifetime, starts free: within 1 %."""
    found = time_scale_errors(RIG, progress(HOLDS))

    def decay(hold: FloatArray, at: FloatArray) -> FloatArray:
        return np.asarray(at[0] * np.exp(-hold / at[1]))

    at = np.array([RIG.contrast, RIG.coherence_s])
    variance = contrast_variance(HOLDS, decay(HOLDS, at))
    expected = np.sqrt(numeric_covariance(decay, at, HOLDS, variance)[1, 1])
    assert found["coherence time"][0] == pytest.approx(expected, rel=0.01)
    at = np.array([RIG.atoms, RIG.lifetime_s])
    atoms = decay(HOLDS, at)
    variance = (atoms + (ATOM_SCATTER * atoms) ** 2) / (4 * 20)
    expected = np.sqrt(numeric_covariance(decay, at, HOLDS, variance)[1, 1])
    assert found["population lifetime"][0] == pytest.approx(expected, rel=1e-6)


def test_modulation_plateau_and_worst_hold_against_numeric_fisher_information() -> None:
    """Depth of a modulation, level of a plateau, contrast at the worst hold: within 1 %."""
    hold, period = np.linspace(5.0, 6.1, 14), 0.4

    def modulated(hold: FloatArray, at: FloatArray) -> FloatArray:
        turn = 2 * np.pi * hold / period
        return np.asarray(at[0] * np.exp(-hold / at[1]) * (1 + at[2] * np.cos(turn) + at[3] * np.sin(turn)))

    at = np.array([RIG.contrast, RIG.coherence_s, 0.0, 0.0])
    covariance = numeric_covariance(modulated, at, hold, contrast_variance(hold, modulated(hold, at)))
    expected = np.sqrt((covariance[2, 2] + covariance[3, 3]) / 2)
    assert modulation_error(RIG, progress(hold), period)[0] == pytest.approx(expected, rel=0.01)

    def levelling(hold: FloatArray, at: FloatArray) -> FloatArray:
        return np.asarray(at[2] + (at[0] - at[2]) * np.exp(-hold / at[1]))

    at = np.array([RIG.contrast, RIG.coherence_s, 0.05])
    covariance = numeric_covariance(levelling, at, HOLDS, contrast_variance(HOLDS, levelling(HOLDS, at)))
    # the forecast's parameter beside the level is the height above it; the level's own error is the same
    assert level_error(RIG, progress(HOLDS), 0.05)[0] == pytest.approx(np.sqrt(covariance[2, 2]), rel=0.01)

    contrast = RIG.contrast * np.exp(-HOLDS / RIG.coherence_s)
    worst = (np.sqrt(contrast_variance(HOLDS, contrast)) / contrast).max()
    assert worst_contrast_error(RIG, progress(HOLDS))[0] == pytest.approx(worst, rel=0.01)


def test_signal_against_numeric_fisher_information() -> None:
    """Night B by one numeric Fisher matrix over all shots, the fringe's phase free at each hold."""
    night, rig, sequence = night_b(10)
    night = night.without_drift()
    plan = plan_of(sequence, night, rig, times_of(night))
    contrast = rig.contrast * np.exp(-night.hold_s / rig.coherence_s)
    hold, point = np.unique(night.hold_s, return_inverse=True)

    def mean(at: FloatArray) -> FloatArray:
        phase = night.phase_rad + at[1:][point.reshape(-1)] + night.parity * night.kappa * at[0]
        return np.asarray(0.5 + contrast / 2 * np.cos(phase))

    steps = np.array([1e-10, *np.full(len(hold), 1e-5)])
    slopes = np.stack([(mean(d) - mean(-d)) / (2 * d.sum()) for d in np.diag(steps)], axis=1)
    y = mean(np.zeros(len(steps)))
    atoms = rig.atoms * np.exp(-night.hold_s / rig.lifetime_s)
    scaled = slopes * np.array([1e-8, *np.ones(len(hold))])
    fisher = scaled.T @ (scaled / (rig.excess * y * (1 - y) / atoms)[:, None])
    expected = 1e-8 * np.sqrt(np.linalg.inv(fisher)[0, 0])
    assert errors_of(plan, rig)["signal"][-1] == pytest.approx(expected, rel=1e-5)


def test_drift_widens_a_signal_by_the_orders_own_figure() -> None:
    """With one hold the estimate is the order's sine effect of the wanted parity: its additive figure is the widening,
    and phase drift stays within the figure for the worst phase of the fringe."""
    order, table, _ = ordered("signal.toml", ("repeats = 125", "repeats = 10"))
    night, rig, sequence = along((order, table, _))
    figures = quality_of(order, table, sequence)
    name = "point 0 collar*kick sin"
    # a shot at mid-fringe has the noise excess / 4 N; drift counts in units of the mean over the fringe
    unit = 1 - rig.contrast_at(night.hold_s[:1])[0] ** 2 / 2
    one = replace(night, drift=replace(night.without_drift().drift, additive=night.drift.additive))
    plan = plan_of(sequence, one, rig, times_of(one))
    assert plan.points is not None
    assert plan.points.drift[-1] == pytest.approx(figures.additive[name] * unit, rel=1e-6)
    both = replace(night.without_drift().drift, phase=night.drift.phase, acceleration=night.drift.acceleration)
    moved = plan_of(sequence, replace(night, drift=both), rig, times_of(night))
    assert moved.points is not None
    assert 0.0 < moved.points.drift[-1] <= figures.coupled[name] * unit * (1 + 1e-6)


@pytest.mark.parametrize("make", [night_a, night_b, hold_scan])
def test_errors_fall_and_are_unknown_first(make: Callable[[], Made]) -> None:
    """No error rises through the night, each lies in its band, and the first minute tells nothing."""
    night, rig, sequence = make()
    time = np.r_[1.0, times_of(night)]
    found = forecasts(plan_of(sequence, night, rig, time), rig, draws=200)
    assert len(found) >= 2
    for one in found:
        assert np.isinf(one.error[0])
        assert np.isfinite(one.error[-1])
        finite = np.isfinite(one.error)
        assert (np.diff(one.error[finite]) <= 1e-12 * one.error[finite][:-1]).all(), one.name
        assert (np.flatnonzero(finite) >= int(finite.argmax())).all()
        assert (one.low[finite] < one.error[finite]).all()
        assert (one.error[finite] < one.high[finite]).all()


def test_a_slow_parity_is_unknown_until_both_states_were_seen() -> None:
    """Hold scan: the collar's first dwell tells nothing of the signal."""
    night, rig, sequence = hold_scan()
    # known once some hold has seen both
    both = min(
        max(float(night.done_s[(night.hold_s == h) & (night.parity == p)].min()) for p in (1, -1))
        for h in np.unique(night.hold_s)
    )
    time = np.r_[np.linspace(60.0, both - 1.0, 20), both + 1.0]
    error = errors_of(plan_of(sequence, night, rig, time), rig)["signal"]
    assert np.isinf(error[:-1]).all()
    assert np.isfinite(error[-1])


def curve(error: FloatArray) -> Forecast:
    time = 60.0 * np.arange(1, len(error) + 1)
    return Forecast(name="signal", unit="m/s^2", time_s=time, error=error, low=error, high=error)


@given(st.lists(st.floats(0.1, 10.0), min_size=1, max_size=30), st.floats(0.05, 12.0))
def test_a_target_is_reached_for_good(errors: list[float], target: float) -> None:
    """From the time that is given on the error stays at or below the target; just before it does not."""
    one = curve(np.array(errors))
    at = one.reached_s(target)
    if at is None:
        assert one.error[-1] > target
        return
    first = int(np.flatnonzero(one.time_s == at)[0])
    assert (one.error[first:] <= target).all()
    assert first == 0 or one.error[first - 1] > target


def test_target_times_and_nights() -> None:
    """A relative target of the coherence time; nights go as the square of the error; a fixed part is never undercut."""
    night, rig, sequence = hold_scan()
    plan = plan_of(sequence, night, rig, times_of(night))
    found = forecasts(plan, rig, draws=100)
    target = target_of(sequence, rig)
    assert target == pytest.approx(0.05 * rig.coherence_s)
    last = found[0].error[-1]
    assert reached(plan, found, last * 1.001).nights == pytest.approx(1 / 1.001**2)
    far = reached(plan, found, last / 3)
    assert far.reached_s is None
    assert far.nights == pytest.approx(9.0)
    budget, rig, sequence = along(shuffled("systematics.toml", ("repeats = 80", "repeats = 8")))
    plan = plan_of(sequence, budget, rig, times_of(budget))
    plan = replace(plan, fixed=1e-7)
    with pytest.raises(PlanImpossible, match=r"no night reaches 9e-08 .* above 1e-07"):
        reached(plan, forecasts(plan, rig, draws=50), 9e-8)


def two_plans() -> tuple[Plan, Knowledge]:
    night, rig, sequence = hold_scan()
    return plan_of(sequence, night, rig, times_of(night)), rig


def test_alternatives_are_what_a_new_plan_would_give() -> None:
    """Leaving a hold out: hours and error of the night without those packets, by hand."""
    plan, rig = two_plans()
    ratios = {one.words: one.hours_ratio for one in alternatives(plan, rig)}
    assert list(ratios.values()) == sorted(ratios.values())
    keep = plan.night.hold_s != 70.0
    less = replace(
        plan.progress,
        hold_s=plan.progress.hold_s[:-1],
        counts=plan.progress.counts[:, :-1],
        shots=plan.progress.shots[:-1],
        inside=plan.progress.inside[:-1],
    )
    error = time_scale_errors(rig, less)["coherence time"][-1]
    now = time_scale_errors(rig, plan.progress)["coherence time"][-1]
    cycle = plan.night.hold_s + rig.dead_s
    by_hand = cycle[keep].sum() / cycle.sum() * (error / now) ** 2
    assert ratios["no hold of 70 s"] == pytest.approx(by_hand, rel=1e-6)
    assert by_hand < 0.9


def test_drift_share_is_against_the_night_without_drift() -> None:
    plan, rig = two_plans()
    steady = plan_of_steady(plan)
    for name, share in drift_share(plan, rig).items():
        assert share >= -1e-12
        if name != "signal":
            assert errors_of(plan, rig)[name][-1] == pytest.approx((1 + share) * errors_of(steady, rig)[name][-1])


def plan_of_steady(plan: Plan) -> Plan:
    _, rig, sequence = hold_scan()
    night = plan.night.without_drift()
    return plan_of(sequence, night, rig, plan.time_s)
