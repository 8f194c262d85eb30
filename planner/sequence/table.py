"""The shot table: all shots of a plan, one row a shot, in columns. It says what, never when."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from planner.arrays import FloatArray, IntArray, SignArray


@dataclass(frozen=True, kw_only=True)
class ShotTable:
    """Shots of one sequence, columnar; every array has shape (n_shot,).

    Rows of one packet are neighbours. Packets of one cell differ only in `repeat`. The table knows no order: a
    running order names its rows. Check shots, where it has any, are its last rows: of no cell and no packet.
    """

    settings: Mapping[str, FloatArray]  # every setting of the sequence, SI
    switches: Mapping[str, SignArray]  # +1 first state, -1 second; 0 leaves it as it stands (check shots)
    hold_s: FloatArray
    phase_rad: FloatArray  # readout phase, in [0, 2 pi)
    duration_s: FloatArray  # whole cycle: stages and dead time, without settling
    cell: IntArray  # point of the crossed sweeps and slow switches; its shots differ in phase and fast switches
    packet: IntArray  # which fringe packet (numbered along the table); -1 outside packets
    repeat: IntArray  # which repeat of its cell
    timeline: IntArray  # row of the timeline set that it plays

    def __len__(self) -> int:
        return len(self.hold_s)

    @property
    def measuring(self) -> int:
        """How many of its rows measure: all but the check shots."""
        return len(self) - int((self.packet < 0).sum())

    def rows(self, which: IntArray) -> "ShotTable":
        """Some of its rows, (n,), as a table of their own."""
        return ShotTable(**{field.name: _each(getattr(self, field.name), which) for field in fields(self)})


def _each(column: Any, which: IntArray) -> Any:
    if isinstance(column, Mapping):
        return {name: one[which] for name, one in column.items()}
    return column[which]


def joined(tables: Sequence[ShotTable]) -> ShotTable:
    """Tables of one sequence, one after the other."""
    columns: dict[str, Any] = {}
    for field in fields(ShotTable):
        parts = [getattr(table, field.name) for table in tables]
        columns[field.name] = (
            {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
            if isinstance(parts[0], Mapping)
            else np.concatenate(parts)
        )
    return ShotTable(**columns)
