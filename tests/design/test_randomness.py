"""A running order is random: any packet may lie anywhere in the night."""

import numpy as np
from scipy import stats

from planner.design.drift import drifts_of
from planner.design.layout import lay_out
from planner.design.packets import find_packets
from tests.design.nights import night_a, night_b

DRAWS = 1000
BINS = 12


def places(table_and_sequence: tuple, draws: int) -> tuple[np.ndarray, np.ndarray]:
    """Place of each packet in each of many layouts, (draw, packet), and the packets' points."""
    table, sequence = table_and_sequence
    packets = find_packets(table, sequence)
    drifts = drifts_of(sequence, table)
    found = np.empty((draws, len(packets)), dtype=np.int64)
    for draw in range(draws):
        layout = lay_out(packets, table, sequence, drifts, np.random.default_rng((31, draw)))
        found[draw, layout.packet] = np.arange(len(packets))
    return found, packets.point


def test_each_cells_place_in_the_night_is_uniform() -> None:
    """Over 1,000 draws the first-listed packet of each cell of night A lies in every twelfth of the night alike."""
    found, point = places(night_a(), DRAWS)
    for cell in range(12):
        packet = int(np.flatnonzero(point == cell)[0])
        counts = np.bincount(found[:, packet] * BINS // found.shape[1], minlength=BINS)
        # chi-square on 12 cells: a fair draw fails at 1e-4 once in 800 runs of the twelve; the seed is fixed
        assert stats.chisquare(counts).pvalue > 1e-4


def test_packets_of_a_night_with_dwells_are_uniform_too() -> None:
    """The same with a slow switch: whole dwells move, and each packet with them."""
    found, point = places(night_b(30), 400)
    for packet in (0, 1, len(point) // 2, len(point) - 1):
        counts = np.bincount(found[:, packet] * 6 // found.shape[1], minlength=6)
        assert stats.chisquare(counts).pvalue > 1e-4


def test_two_packets_come_in_either_order() -> None:
    """Of two packets of different cells each is first in half of the draws."""
    found, point = places(night_a(4), DRAWS)
    one, other = (int(np.flatnonzero(point == cell)[3]) for cell in (0, 11))
    first = int((found[:, one] < found[:, other]).sum())
    assert stats.binomtest(first, DRAWS).pvalue > 1e-4
