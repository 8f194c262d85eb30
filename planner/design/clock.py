"""When each shot of an order runs: starts and settle waits, by the rig's clock."""

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable


def settle_waits(
    table: ShotTable, sequence: Sequence, rows: IntArray, boundary: BoolArray, opens: BoolArray
) -> FloatArray:
    """Wait in seconds before each shot of an order, (n_position,).

    rows (n_position,): table rows in running order; boundary (n_position,): first shot of a dwell of the slow
    switches; opens (n_position,): first shot of a packet. Slow switches wait at every boundary, fast ones at the start
    of every packet, whether they flip there or not, so that the wait can tell nothing and the last draw moves no time.
    Inside packets fast switches wait where they change, and settings with a settle time wait where they change
    anywhere. Waits run side by side: the longest counts.
    """
    wait = np.zeros(len(rows))
    for name, switch in sequence.switches.items():
        if switch.settle_s <= 0.0:
            continue
        if switch.slow:
            waits = boundary
        else:
            states = table.switches[name][rows]
            last = states[np.maximum.accumulate(np.where(states != 0, np.arange(len(rows)), 0))]  # 0: stands as it did
            waits = opens | np.r_[True, last[1:] != last[:-1]]
        wait[waits] = np.maximum(wait[waits], switch.settle_s)
    for name, setting in sequence.settings.items():
        if setting.settle_s > 0.0:
            values = table.settings[name][rows]
            waits = np.r_[True, values[1:] != values[:-1]]
            wait[waits] = np.maximum(wait[waits], setting.settle_s)
    return wait


def starts(duration_s: FloatArray, settle_s: FloatArray) -> FloatArray:
    """Start of each cycle, its settle wait first, without idle time: (n_position,) seconds from the night's start."""
    busy = duration_s + settle_s
    return np.asarray(np.cumsum(busy) - busy)
