"""Several requests in one night: each balanced as on its own, shares met, check shots in their places."""

from dataclasses import replace

import numpy as np
import pytest

from planner.design.merging import Part, order_night, randomisation_group_of
from planner.design.ordering import make_order, randomisation_group
from planner.design.running_order import Kind, RunningOrder
from planner.design.sharing import share_night
from planner.errors import InputError, NotEnoughData, PlanImpossible
from planner.resources import sequences_folder
from planner.sequence.compiler import compile_sequence
from planner.sequence.model import Sequence
from planner.sequence.reader import read_sequence
from planner.sequence.rigfile import rig_of


def part_of(name: str, repeats: int) -> Part:
    sequence = read_sequence(sequences_folder() / f"{name}.toml")
    sequence = replace(sequence, fringe=replace(sequence.fringe, repeats=repeats))
    return Part(table=compile_sequence(sequence, rig_of(sequence)).with_checks, sequence=sequence)


@pytest.fixture(scope="module")
def night() -> tuple[list[Part], RunningOrder]:
    """A slow switch, a fast one, and one without any; the first two with check shots."""
    parts = [part_of("signal", 24), part_of("reference-night-a", 3), part_of("tuning", 20)]
    return parts, order_night(parts, seed=3, effort="quick")


def test_every_shot_once_and_time_without_holes(night: tuple[list[Part], RunningOrder]) -> None:
    parts, order = night
    for number, part in enumerate(parts):
        mine = (order.request == number) & (order.kind == int(Kind.MEASURE))
        assert np.array_equal(np.sort(order.shot[mine]), np.arange(part.table.measuring))
    busy = order.settle_s + order.duration_s
    assert np.allclose(order.start_s[1:], (order.start_s + busy)[:-1])
    packets = order.packet[order.packet >= 0]
    assert np.array_equal(np.flatnonzero(np.diff(packets)), np.flatnonzero(np.diff(packets) != 0))
    assert len(np.unique(packets)) == 1 + np.count_nonzero(np.diff(packets)), "a packet was broken up"


def test_each_request_is_spread_over_the_night(night: tuple[list[Part], RunningOrder]) -> None:
    """At any time each has had its part of its own length, to within the longest block that may not be broken up."""
    parts, order = night
    busy = order.settle_s + order.duration_s
    ends = (order.start_s + busy) / (order.start_s + busy)[-1]
    for number in range(len(parts)):
        mine = np.where(order.request == number, busy, 0.0)
        had = np.cumsum(mine) / mine.sum()
        # a block of the signal: two sets of two dwells, 34 of its 48 min and more; of the others a packet
        assert np.abs(had - ends).max() < 0.55


def test_dwells_are_kept_and_settled_in_a_shared_night(night: tuple[list[Part], RunningOrder]) -> None:
    """The collar stays put for eight minutes whatever runs meanwhile, and every move has its settle wait."""
    parts, order = night
    sequence, table = parts[0].sequence, parts[0].table
    mine = np.flatnonzero(order.request == 0)
    state = table.switches["collar"][order.shot[mine]]
    says = mine[state != 0]
    state = state[state != 0]
    moves = np.flatnonzero(np.diff(state)) + 1
    moved_s = np.r_[order.start_s[says[0]], order.start_s[says[moves]], order.start_s[-1] + order.duration_s[-1]]
    assert np.diff(moved_s).min() >= sequence.switches["collar"].dwell_s
    assert (order.settle_s[says[moves]] >= sequence.switches["collar"].settle_s).all()


def test_check_shots_come_at_their_times_between_packets(night: tuple[list[Part], RunningOrder]) -> None:
    parts, order = night
    every = parts[0].sequence.checks[0].every_s
    checks = np.flatnonzero((order.request == 0) & (order.kind == int(Kind.CHECK)))
    assert (parts[0].table.cell[order.shot[checks]] == -1).all()
    assert (order.packet[checks] == -1).all()
    assert (order.unit[checks] == -1).all()
    before, after = order.packet[checks[0] - 1], order.packet[checks[-1] : checks[-1] + 4]
    assert before >= 0, "the first comes after a packet, when the rig is warm"
    assert len(after)
    starts = order.start_s[checks[:: parts[0].sequence.checks[0].shots]]
    # due every half hour, between packets, of which the longest takes 9 min
    assert np.diff(starts).max() < every + 600
    assert len(starts) >= np.floor(order.start_s[-1] / every)


def test_a_request_is_as_safe_as_alone() -> None:
    """Means within a fifth of those alone, night A with a request of a slow switch between its packets.

    Seeds are fixed; over seeds the means scatter by some 5 %.
    """
    parts = [part_of("reference-night-a", 8), part_of("signal", 60)]
    order = order_night(parts, seed=1)
    for number, part in enumerate(parts):
        alone = make_order(part.table, part.sequence, seed=1).figures
        shared = order.notes["requests"][number]["figures"]
        for name in ("additive_mean", "coupled_mean", "any_period_mean"):
            assert shared[name] <= 1.2 * alone[name]


def test_every_request_has_the_group_of_its_own_exact_test(night: tuple[list[Part], RunningOrder]) -> None:
    parts, order = night
    for number in (0, 1):
        allowed, signs = randomisation_group_of(order, parts, number)
        assert allowed.contains(signs[None])[0]
        assert allowed.log2_size > 6
    with pytest.raises(NotEnoughData, match="no parity is wanted"):
        randomisation_group_of(order, parts, 2)
    other = replace(order, shot=order.shot[::-1])
    with pytest.raises(InputError, match="not what these sequences give"):
        randomisation_group_of(other, parts, 0)


def test_check_shots_leave_the_group_of_a_single_night_whole() -> None:
    part = part_of("signal", 24)
    order = make_order(part.table, part.sequence, seed=2, effort="quick")
    assert (order.kind == int(Kind.CHECK)).sum() >= 2
    allowed, signs = randomisation_group(order, part.table, part.sequence)
    assert allowed.contains(signs[None])[0]


def test_shares_are_met_to_within_a_packet() -> None:
    """Packets last 104 to 536 s; a share may also lack what no further packet fits into."""
    parts = [part_of("reference-night-a", 10), part_of("tuning", 120)]
    chosen, order = share_night(parts, [0.6, 0.3], hours=5.0, seed=1, effort="quick")
    busy = order.settle_s + order.duration_s
    for number, share in enumerate((0.6, 0.3)):
        had = busy[order.request == number].sum()
        assert share * 5 * 3600 - 600 < had <= share * 5 * 3600
    counts = np.bincount(chosen[0].table.cell, minlength=12)
    assert np.ptp(counts // 8) <= 1, "every hold has as many packets as any other, to within one"


def test_what_contradicts_itself_is_refused_with_what_would_do() -> None:
    parts = [part_of("reference-night-a", 2), part_of("tuning", 10)]
    with pytest.raises(InputError, match=r"sum to 1\.4, more than the night: in the same proportion .* 0\.571, 0\.429"):
        share_night(parts, [0.8, 0.6], hours=5.0, seed=1)
    with pytest.raises(InputError, match=r"2 sequence file\(s\) and 1 share\(s\)"):
        share_night(parts, [0.8], hours=5.0, seed=1)
    with pytest.raises(InputError, match="above 0 and at most at 1"):
        share_night(parts, [0.8, 0.0], hours=5.0, seed=1)
    with pytest.raises(PlanImpossible, match=r"share of 0\.02 of 5 h is 6 min, .* takes 26 min: a share of 0\.09 or"):
        share_night(parts, [0.02, 0.9], hours=5.0, seed=1)


def test_requests_that_contradict_each_other_about_a_switch_are_refused() -> None:
    one = part_of("signal", 4)
    switches: dict[str, object] = dict(one.sequence.switches)
    switches["collar"] = replace(one.sequence.switches["collar"], dwell_s=240.0)
    other: Sequence = replace(one.sequence, title="another", switches=switches)
    with pytest.raises(InputError, match=r'switch "collar": dwell is 480 s in .* and 240 s in "another"'):
        order_night([one, Part(table=one.table, sequence=other)], seed=1)
