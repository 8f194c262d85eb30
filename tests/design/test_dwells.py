"""Dwells of slow switches: fair, in pairs that are alike, and as deaf to declared drift as turns can make them."""

import numpy as np
from scipy import stats

from planner.design.drift import Drifts, Prior, drifts_of
from planner.design.dwells import dwell_order
from planner.design.flips import units_of
from planner.design.ordering import assemble, draft_order, quality_of
from planner.design.packets import find_packets
from tests.design.nights import night_b


def test_each_state_is_as_often_first() -> None:
    """Over 400 draws the night begins with either state alike, and so does any set of dwells."""
    table, sequence = night_b(30)
    packets, drifts = find_packets(table, sequence), drifts_of(table=table, sequence=sequence)
    first = []
    for draw in range(400):
        order, dwell, of_set = dwell_order(packets, 480.0, 25.0, drifts, np.random.default_rng((5, draw)))
        assert (dwell // 2 == of_set).all()
        state = packets.slow[order]
        opens = np.flatnonzero(np.diff(of_set, prepend=-1))
        first.append([int(state[opens[k]]) for k in (0, 3, len(opens) - 1)])
    for ones in np.sum(first, axis=0):
        # a fair coin fails at 1e-4 once in 3,000 runs of the three; the seeds are fixed
        assert stats.binomtest(int(ones), 400).pvalue > 1e-4


def test_the_second_dwell_of_a_pair_runs_its_points_backwards() -> None:
    """A set holds the same points in both states, mirrored at their boundary."""
    table, sequence = night_b(30)
    packets, drifts = find_packets(table, sequence), drifts_of(table=table, sequence=sequence)
    order, dwell, _ = dwell_order(packets, 480.0, 25.0, drifts, np.random.default_rng(6))
    assert sorted(order) == list(range(len(packets)))
    for pair in range(int(dwell.max() + 1) // 2):
        one, other = (order[dwell == 2 * pair + k] for k in (0, 1))
        assert packets.point[one].tolist() == packets.point[other].tolist()[::-1]
        assert set(packets.slow[one]) | set(packets.slow[other]) == {0, 1}
        assert len(set(packets.slow[one])) == len(set(packets.slow[other])) == 1


def test_turns_that_beat_with_a_declared_rhythm_are_not_taken() -> None:
    """A rhythm of two dwells' length reaches turns that it beats with in full; of the turns looked at, hardly."""
    table, sequence = night_b(124)
    packets = find_packets(table, sequence)
    rhythm = Prior(rate=0.0, periods_s=(1100.0,), amplitudes=(1.0,))
    none = Prior(rate=0.0)
    length = packets.cycle_s * packets.size

    def heard(drifts: Drifts, seed: int) -> float:
        order, _, of_set = dwell_order(packets, 480.0, 25.0, drifts, np.random.default_rng(seed))
        busy = length[order] + 25.0 * (np.diff(packets.slow[order] + 2 * of_set, prepend=-1) != 0)
        mid = np.cumsum(busy) - length[order] / 2
        weights = (1.0 - 2.0 * packets.slow[order]) / np.sqrt(len(order))
        return float(abs(np.sum(weights * np.exp(2j * np.pi * mid / 1100.0))) ** 2)

    deaf = [heard(Drifts(additive=rhythm, coupled=rhythm), seed) for seed in range(8)]
    plain = [heard(Drifts(additive=none, coupled=none), seed) for seed in range(8)]
    # measured: 0.04 against 0.32; the seeds are fixed
    assert np.mean(deaf) < 0.2 * np.mean(plain)


def test_a_slow_switchs_own_effects_are_steady_over_seeds() -> None:
    """Night B: what dwells cost, 2.1 on average, is no longer a matter of luck (random turns: 2 to 11)."""
    table, sequence = night_b()
    for seed in (1, 2):
        draft = draft_order(table, sequence, seed=seed, effort="quick")
        order = assemble(draft, np.ones(units_of(draft).count), seed=seed, effort="quick", allowed=None)
        quality = quality_of(order, table, sequence)
        assert quality.of_parity(("collar",))["additive_mean"] < 3.0
