"""Running orders: every shot once, packets whole, dwells unbroken, times that add up, figures under their bounds."""

from dataclasses import replace

import numpy as np
import pytest

from planner.design.ordering import assemble, draft_order, make_order, quality_of
from planner.design.running_order import Kind, RunningOrder
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable
from tests.design.nights import night, night_a, night_b, small_night


def measured(order: RunningOrder) -> np.ndarray:
    return order.kind == int(Kind.MEASURE)


@pytest.mark.parametrize("night", [night_a(4), night_b(30), night("hold-scan.toml")], ids=["a", "b", "hold scan"])
def test_every_shot_once_and_packets_whole(night: tuple[ShotTable, Sequence]) -> None:
    """The measured shots are a permutation of the table; those of a packet are neighbours, and have one unit."""
    table, sequence = night
    order = make_order(table, sequence, seed=3, effort="quick")
    mine = measured(order)
    rows = order.shot[mine]
    assert sorted(rows) == list(range(len(table)))
    packet = table.packet[rows]
    assert (np.diff(packet) != 0).sum() == len(np.unique(packet)) - 1
    assert np.array_equal(order.packet[mine], np.cumsum(np.diff(packet, prepend=packet[0]) != 0))
    busy = order.settle_s + order.duration_s
    assert order.start_s[1:] == pytest.approx((order.start_s + busy)[:-1], abs=1e-6)
    assert np.array_equal(order.duration_s, table.duration_s[order.shot])


def test_the_same_seed_gives_the_same_order_and_another_seed_another() -> None:
    """Bytes, not only figures."""
    table, sequence = small_night()
    first, again, other = (make_order(table, sequence, seed=seed) for seed in (5, 5, 6))
    for name in ("shot", "kind", "start_s", "settle_s", "packet", "unit", "flip"):
        assert getattr(first, name).tobytes() == getattr(again, name).tobytes()
    assert first.figures == again.figures
    assert not np.array_equal(first.shot, other.shot)


def test_night_a_keeps_its_bounds() -> None:
    """Reference night A: twelve holds, one fast switch, 2,112 shots."""
    table, sequence = night_a()
    figures = make_order(table, sequence, seed=11).figures
    assert figures["additive_mean"] <= 0.02
    assert figures["additive_worst"] <= 0.12
    assert figures["coupled_mean"] <= 0.02
    assert figures["coupled_worst"] <= 0.15
    assert figures["any_period_mean"] <= 0.30
    assert figures["any_period_peak"] <= 0.70


def test_night_b_keeps_its_bounds_and_shows_what_dwells_cost() -> None:
    """Reference night B: the wanted parity resists drift; the slow switch's own effect does not, and is not hidden."""
    table, sequence = night_b()
    order = make_order(table, sequence, seed=11)
    quality = quality_of(order, table, sequence)
    wanted = quality.of_parity(("kick", "collar"))
    assert wanted == quality.of_parity(("collar", "kick"))
    assert wanted["additive_mean"] <= 0.02
    assert wanted["coupled_mean"] <= 0.05
    end = order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1]
    assert order.settle_s.sum() <= 0.06 * end
    assert quality.of_parity(("collar",))["additive_mean"] > 0.5


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_dwells_are_never_broken(seed: int) -> None:
    """The slow switch flips only where a settle wait lies, and stays for its dwell."""
    table, sequence = night_b(40)
    order = make_order(table, sequence, seed=seed, effort="quick")
    switch = sequence.switches["collar"]
    state = table.switches["collar"][order.shot]
    waits = np.flatnonzero(order.settle_s > 0)
    flips = np.flatnonzero(np.diff(state) != 0) + 1
    assert waits[0] == 0
    assert set(flips) <= set(waits)
    assert set(order.settle_s[waits]) == {switch.settle_s}
    opened = order.start_s[waits] + order.settle_s[waits]
    closed = np.r_[order.start_s[waits[1:]], order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1]]
    assert (closed - opened >= switch.dwell_s - 1e-6).all()
    assert len(waits) > len(flips) + 1  # some dwells end without a flip, and wait all the same


def test_a_slow_wanted_switch_is_flipped_in_whole_dwells() -> None:
    """Where the slow switch alone is wanted, blocks are sets of dwells, and no flip breaks a dwell or moves a time."""
    changes = (('wanted = ["collar", "kick"]', 'wanted = "collar"'), ("repeats = 124", "repeats = 40"))
    table, sequence = night("reference-night-b.toml", *changes)
    orders = [make_order(table, sequence, seed=1, effort="quick")]
    order = orders[0]
    assert order.notes["flipped_switch"] == "collar"
    state = table.switches["collar"][order.shot] * order.flip  # as it was before the draw
    for block in np.unique(order.unit):
        inside = order.unit == block
        assert len(set(order.flip[inside])) == 1
        assert table.switches["collar"][order.shot][inside].sum() == 0  # near and far alike
    changes_at = np.flatnonzero(np.diff(state) != 0) + 1
    assert set(changes_at) <= set(np.flatnonzero(order.settle_s > 0))


def test_warm_up_shots_come_first_and_in_no_effect() -> None:
    """A sequence's warm-up shots repeat rows of the first packet and belong to no packet or unit."""
    table, sequence = night("hold-scan.toml")
    order = make_order(table, sequence, seed=2, effort="quick")
    warm = order.kind == int(Kind.WARM_UP)
    assert warm.sum() == sequence.memory.warm_up == 2
    assert warm[:2].all()
    assert (order.packet[warm] == -1).all()
    assert (order.unit[warm] == -1).all()
    assert (table.cell[order.shot[warm]] == table.cell[order.shot[2]]).all()


def test_each_gap_that_memory_outlasts_is_followed_by_warm_up() -> None:
    """Where the load of earlier shots fades within a settle wait, every dwell opens with warm-up shots; a wait shorter
    than that is no gap (test_warm_up_shots_come_first)."""
    table, sequence = night(
        "reference-night-b.toml", ("warm_up = 0", 'warm_up = 2\nfades = "10 s"'), ("repeats = 124", "repeats = 40")
    )
    order = make_order(table, sequence, seed=2, effort="quick")
    waits = np.flatnonzero(order.settle_s > 0)
    assert len(waits) > 4
    warm = order.kind == int(Kind.WARM_UP)
    assert warm.sum() == 2 * len(waits)
    assert warm[waits].all()
    assert warm[waits + 1].all()
    state = table.switches["collar"][order.shot]
    assert (state[waits] == state[waits + 2]).all()


def test_the_last_draw_moves_no_time_where_a_fast_switch_settles() -> None:
    """Fast switches wait at the start of every packet and inside where they change, so that flips leave every start."""
    table, sequence = night("reference-night-a.toml", ("repeats = 22", "repeats = 2"))
    kick = replace(sequence.switches["kick"], settle_s=0.5)
    sequence = replace(sequence, switches={"kick": kick})
    draft = draft_order(table, sequence, seed=3, effort="quick")
    rng = np.random.default_rng(1)
    orders = [assemble(draft, rng.choice([-1.0, 1.0], size=24), seed=3, effort="quick", allowed=None) for _ in range(3)]
    assert not np.array_equal(orders[0].shot, orders[1].shot)
    for other in orders[1:]:
        assert np.array_equal(other.start_s, orders[0].start_s)
        assert np.array_equal(other.settle_s, orders[0].settle_s)
    first = np.flatnonzero(np.diff(orders[0].packet, prepend=-1))
    assert (orders[0].settle_s[first] == 0.5).all()


def test_holds_follow_each_other_evenly() -> None:
    """A hold comes after each other hold about as often: neighbours spread wider than in a shuffle of the packets."""
    table, sequence = night_a()
    order = make_order(table, sequence, seed=3, effort="quick")
    cell = table.cell[order.shot][np.r_[True, np.diff(order.packet) != 0]]
    pairs = np.zeros((12, 12))
    np.add.at(pairs, (cell[:-1], cell[1:]), 1)
    rng = np.random.default_rng(4)
    shuffles = []
    for _ in range(200):
        other = rng.permutation(cell)
        counts = np.zeros((12, 12))
        np.add.at(counts, (other[:-1], other[1:]), 1)
        shuffles.append(counts.var())
    assert pairs.var() < min(shuffles)


def test_a_dwell_longer_than_the_measurement_is_refused_with_what_works() -> None:
    """The message names the repeats that would fill the dwells."""
    table, sequence = night_b(3)
    with pytest.raises(
        PlanImpossible, match=r"longer than the whole measurement .* set fringe\.repeats to \d+ or more"
    ):
        make_order(table, sequence, seed=1)
