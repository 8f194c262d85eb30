"""The shot table: all shots of a plan, one row a shot, in columns. It says what, never when."""

from collections.abc import Mapping
from dataclasses import dataclass

from planner.arrays import FloatArray, IntArray, SignArray


@dataclass(frozen=True, kw_only=True)
class ShotTable:
    """Shots of one sequence, columnar; every array has shape (n_shot,).

    Rows of one packet are neighbours. Packets of one cell differ only in `repeat`. The table knows no order: a
    running order names its rows.
    """

    settings: Mapping[str, FloatArray]  # every setting of the sequence, SI
    switches: Mapping[str, SignArray]  # +1 first state, -1 second
    hold_s: FloatArray
    phase_rad: FloatArray  # readout phase, in [0, 2 pi)
    duration_s: FloatArray  # whole cycle: stages and dead time, without settling
    cell: IntArray  # point of the crossed sweeps and slow switches; its shots differ in phase and fast switches
    packet: IntArray  # which fringe packet (numbered along the table)
    repeat: IntArray  # which repeat of its cell
    timeline: IntArray  # row of the timeline set that it plays

    def __len__(self) -> int:
        return len(self.hold_s)
