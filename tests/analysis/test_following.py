"""A fringe followed through turns, slopes and holds of different scale."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.analysis.following import TURN, Packets, Walk, follow, follow_fitted
from planner.errors import InputError, NotEnoughData

HOLDS = np.array([1.0, 5.0, 20.0])
SCALE = 5.5e3 * HOLDS  # rad per m/s^2: 4 um apart for that long, rubidium


def walked(
    seed: int, *, packets: int = 150, phase: float = 2e-5, acceleration: float = 4e-15, sigma: float = 0.1
) -> tuple[Packets, np.ndarray]:
    """Packets of three holds in random order whose phase walks, and the true unwrapped phases."""
    rng = np.random.default_rng(seed)
    hold = rng.integers(0, 3, packets)
    time = np.cumsum(8 * (HOLDS[hold] + 3))
    gap = np.diff(time, prepend=time[0])
    laser = np.cumsum(np.sqrt(phase * gap) * rng.standard_normal(packets))
    moved = np.cumsum(np.sqrt(acceleration * gap) * rng.standard_normal(packets))
    truth = rng.uniform(-np.pi, np.pi, 3)[hold] + laser + SCALE[hold] * moved
    seen = truth + sigma * rng.standard_normal(packets)
    wrapped = (seen + np.pi) % TURN - np.pi
    made = Packets(
        time_s=time,
        hold=hold,
        candidates=wrapped[:, None],
        sigma_rad=np.full(packets, sigma),
        scale=SCALE[hold],
        known=np.zeros(packets),
    )
    return made, seen


def whole_turns_off(found: np.ndarray, truth: np.ndarray, hold: np.ndarray) -> np.ndarray:
    """Turns by which each packet is off, one constant for each hold allowed, (n,)."""
    off = np.round((found - truth) / TURN)
    for h in np.unique(hold):
        off[hold == h] -= np.median(off[hold == h])
    return off


@pytest.mark.parametrize("seed", range(6))
def test_turns_are_counted(seed: int) -> None:
    """A path of several turns is found whole, the rates of its walks unknown beforehand."""
    packets, truth = walked(seed)
    found = follow_fitted(packets)
    assert (whole_turns_off(found.phase_rad, truth, packets.hold) == 0).all()
    assert found.chance.min() > 0.9


def test_its_own_doubt_is_right() -> None:
    """Where it gives a turn a chance of p, it is right in p of the packets: fast walks, 40 nights, 6,000 packets."""
    chance, right = [], []
    for seed in range(40):
        packets, truth = walked(seed, phase=1.5e-3, acceleration=0.0, sigma=0.3)
        found = follow(packets, Walk(phase=1.5e-3, acceleration=0.0))
        # what counts is each step: a slip shifts all that follows, and only one step is wrong
        steps = np.diff(np.round((found.phase_rad - truth) / TURN)[packets.hold == 0])
        chance.append(found.chance.mean())
        right.append((steps == 0).mean())
    # steps are fewer wrong than packets; so the doubt must not be smaller than the share of wrong steps
    assert 1 - np.mean(chance) > 0.5 * (1 - np.mean(right))
    assert np.mean(right) > 0.9


def test_the_filter_is_the_exact_posterior_without_turns() -> None:
    """With phases far from a wrap the prediction is that of the joint normal distribution, worked out whole."""
    packets, _ = walked(3, packets=25, phase=1e-6, acceleration=1e-16, sigma=0.05)
    walk = Walk(phase=1e-6, acceleration=1e-16)
    found = follow(packets, walk)
    n = 24
    early = np.minimum.outer(packets.time_s, packets.time_s) - packets.time_s[0]
    joint = walk.phase * early + walk.acceleration * early * np.outer(packets.scale, packets.scale)
    joint += 10.0 * (packets.hold[:, None] == packets.hold[None, :])
    observed = joint[:n, :n] + np.diag(packets.sigma_rad[:n] ** 2)
    predicted = joint[n, :n] @ np.linalg.solve(observed, found.phase_rad[:n])
    left = joint[n, n] - joint[n, :n] @ np.linalg.solve(observed, joint[:n, n])
    # the same sums in another order
    assert found.predicted_rad[n] == pytest.approx(predicted, abs=1e-8)
    assert found.predicted_sigma_rad[n] ** 2 == pytest.approx(left, abs=1e-8)


def test_rates_are_found() -> None:
    """The fitted walks are the true ones: the middle of 5 nights within a factor of 1.6."""
    phase, acceleration = [], []
    for seed in range(5):
        packets, _ = walked(seed)
        walk = follow_fitted(packets).walk
        phase.append(walk.phase)
        acceleration.append(walk.acceleration)
    assert 1 / 1.6 < np.median(phase) / 2e-5 < 1.6
    assert 1 / 1.6 < np.median(acceleration) / 4e-15 < 1.6


def test_a_known_tide_is_taken_out() -> None:
    """A tide of 1 um/s^2 moves a 20 s hold by more than a radian an hour; given as known, no walk is needed for it."""
    packets, _ = walked(2, phase=1e-7, acceleration=0.0, sigma=0.05)
    tide = 1e-6 * np.sin(2 * np.pi * packets.time_s / 44_714)
    moved = packets.candidates[:, 0] + packets.scale * tide
    given = Packets(
        time_s=packets.time_s,
        hold=packets.hold,
        candidates=((moved + np.pi) % TURN - np.pi)[:, None],
        sigma_rad=packets.sigma_rad,
        scale=packets.scale,
        known=tide,
    )
    slow = Walk(phase=1e-7, acceleration=0.0)
    with_tide = follow(given, slow)
    assert np.mean(with_tide.surprise[3:] ** 2) < 1.5
    assert with_tide.log_likelihood == pytest.approx(follow(packets, slow).log_likelihood, abs=1e-6)


def test_slopes_of_mid_fringe_packets() -> None:
    """Packets at mid-fringe allow two phases each; after a few full fringes the right one is followed."""
    packets, truth = walked(4, phase=1e-5, acceleration=0.0)
    seen = packets.candidates[:, 0]
    other = (np.pi - seen + np.pi) % TURN - np.pi
    two = np.where(np.arange(len(seen)) < 12, np.nan, other)
    given = Packets(
        time_s=packets.time_s,
        hold=packets.hold,
        candidates=np.stack([two, seen], axis=1),
        sigma_rad=packets.sigma_rad,
        scale=packets.scale,
        known=packets.known,
    )
    found = follow(given, Walk(phase=1e-5, acceleration=0.0))
    clear = np.abs(np.cos(truth)) > 0.4  # where the two phases are one, no one can tell
    assert (found.candidate[clear] == 1).mean() > 0.97


@settings(max_examples=20, deadline=None)
@given(st.floats(-20, 20), st.integers(0, 5))
def test_a_constant_moves_nothing_else(shift: float, seed: int) -> None:
    """Turning all phases of the night by one angle turns the path, and changes no weight and no step."""
    packets, _ = walked(seed, packets=30)
    walk = Walk(phase=2e-5, acceleration=4e-15)
    turned = Packets(
        time_s=packets.time_s,
        hold=packets.hold,
        candidates=(packets.candidates + shift + np.pi) % TURN - np.pi,
        sigma_rad=packets.sigma_rad,
        scale=packets.scale,
        known=packets.known,
    )
    steps = [np.diff(follow(one, walk).phase_rad[one.hold == 2]) for one in (packets, turned)]
    # the prior of a first phase is wide, not flat: it pulls by 0.01 / 10 of the shift at most
    np.testing.assert_allclose(steps[0], steps[1], rtol=0, atol=1e-8)


def test_what_cannot_be_followed() -> None:
    """No packet, disordered packets and packets without a phase are refused."""
    empty = np.zeros(0)
    with pytest.raises(NotEnoughData, match="no packet says anything of the phase"):
        follow(
            Packets(
                time_s=empty,
                hold=np.zeros(0, dtype=np.int64),
                candidates=np.zeros((0, 1)),
                sigma_rad=empty,
                scale=empty,
                known=empty,
            ),
            Walk(phase=0.0, acceleration=0.0),
        )
    one = np.ones(2)
    with pytest.raises(InputError, match="time order"):
        Packets(
            time_s=np.array([2.0, 1.0]),
            hold=np.zeros(2, dtype=np.int64),
            candidates=np.zeros((2, 1)),
            sigma_rad=one,
            scale=one,
            known=one,
        )
    with pytest.raises(InputError, match="allows no phase"):
        Packets(
            time_s=np.array([1.0, 2.0]),
            hold=np.zeros(2, dtype=np.int64),
            candidates=np.full((2, 1), np.nan),
            sigma_rad=one,
            scale=one,
            known=one,
        )
