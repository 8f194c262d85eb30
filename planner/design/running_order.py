"""The running order: the shots of a night in the order and at the times they will run."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum
from typing import Any

from planner.arrays import FloatArray, IntArray, SignArray


class Kind(IntEnum):
    """Why a shot is in the order."""

    MEASURE = 0
    WARM_UP = 1  # run, logged, in no effect
    CHECK = 2
    SOUNDING = 3


@dataclass(frozen=True, kw_only=True)
class RunningOrder:
    """One revision of a night's order. Arrays of shape (n_position,), in running order; never changed once made.

    A row of a request's shot table occurs once with kind MEASURE, and may occur again as WARM_UP. Position i is busy
    from start_s[i] to start_s[i] + settle_s[i] + duration_s[i].
    """

    request: IntArray  # which request of the night (0 in a night with one)
    shot: IntArray  # row in that request's shot table
    kind: IntArray  # Kind
    start_s: FloatArray  # from the start of the night; the settle wait comes first
    settle_s: FloatArray
    duration_s: FloatArray  # cycle without the settle wait
    packet: IntArray  # numbered along the night; -1 outside packets
    unit: IntArray  # block of the restricted draw (a packet, or a dwell of a slow wanted switch); -1 outside
    flip: SignArray  # +1, or -1 where the restricted draw flipped that block of the wanted switch
    seed: int
    figures: Mapping[str, float] = field(default_factory=dict)  # quality, as design/quality.py names it
    notes: Mapping[str, Any] = field(default_factory=dict)  # size of the restricted set, bars, what was tried

    def __len__(self) -> int:
        return len(self.shot)
